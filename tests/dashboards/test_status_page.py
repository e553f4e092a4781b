"""The status of a programme as one page that stands alone."""

from __future__ import annotations

import base64
import hashlib
import re
from typing import Any

from dashboards.status_page import status_html

FOUND: dict[str, Any] = {
    "programme": "Skerry <Coast>", "as_of_utc": "2026-03-26 08:00:00", "published": True,
    "last_run_utc": "2026-03-26 03:04:00", "last_run_age_h": 4.9, "last_outcome": "published_with_refusals",
    "last_reason": None, "slow_recordings": [], "expected_every_h": 26.0, "inbox_files": 12, "quarantined_files": 1,
    "disk_free_gb": 412.3, "lake_growth_gb_per_day": 0.21, "days_until_full": 1963,
    "last_publication_utc": "2026-03-26 03:04:00", "deliveries": {"accepted": 11, "quarantined": 1}, "waiting": [],
    "refused": [{"file_name": "delivery-1.edf", "code": "not_known", "reason": "Found a <picture>; expected EDF."}],
    "patients": [
        {"patient_code": "SK-1", "data_until_utc": "2026-03-25 08:00:00", "data_age_h": 24.0},
        {"patient_code": "SK-2", "data_until_utc": "2026-02-12 08:00:00", "data_age_h": 1008.0},
        {"patient_code": "SK-3", "data_until_utc": None, "data_age_h": None},
    ],
    "trouble": ["1 refused file in quarantine, with its reason beside it"],
}  # fmt: skip


def test_the_page_says_what_to_look_at_first():
    """Its title counts the trouble; each sentence of it, and each refusal with its reason, stands on the page."""
    page = status_html(FOUND)
    assert "1 thing to look at" in page
    assert "1 refused file in quarantine" in page and "Found a &lt;picture&gt;; expected EDF." in page


def test_the_oldest_data_stand_first():
    """Patients whose data are oldest lead; one without any data stands last. Long ages are told in days."""
    page = status_html(FOUND)
    assert re.findall(r"SK-\d", page) == ["SK-2", "SK-1", "SK-3"]
    assert "42 days" in page and "24 h" in page


def test_nothing_runs_on_the_page_and_its_style_is_its_own():
    """No script, no address, and a policy that allows this very style sheet only."""
    page = status_html(FOUND)
    style = re.search("<style>(.*)</style>", page, re.DOTALL)[1]
    assert f"'sha256-{base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()}'" in page
    assert "<script" not in page and "http://" not in page and "https://" not in page and "Skerry <Coast>" not in page


def test_a_programme_without_a_publication_has_a_page():
    """Before the first run there are no deliveries and no patients to tell of."""
    names = ("programme", "as_of_utc", "slow_recordings", "expected_every_h", "inbox_files", "quarantined_files")
    young = {name: FOUND[name] for name in names} | {"published": False, "trouble": [], "disk_free_gb": 1.0}
    young |= dict.fromkeys(("last_run_utc", "last_run_age_h", "last_outcome", "last_reason", "days_until_full"))
    page = status_html(young | {"lake_growth_gb_per_day": None})
    assert "Nothing published yet" in page and "No run has ended here yet" in page


def test_queue_schedule_and_slow_recordings_are_told():
    """What waits for analysis, the schedule, and recordings that took unusually long."""
    slow = {"recording_id": "R1", "recorded_h": 336.0, "analysed_s": 90.0, "times_as_slow": 4.2}
    more = {
        "queue": {"new_files": 2, "waiting": 1, "unanalysed_recordings": 3},
        "schedule": {"cron": "0 3 * * *", "zone": "Europe/Lisbon", "longest_gap_h": 25.0},
        "slow_recordings": [slow],
    }
    page = status_html(FOUND | more)
    for told in ("Recordings to analyse", "0 3 * * *", "Europe/Lisbon", "1 recording took unusually long", "4.2"):
        assert told in page
