"""One page that tells how a programme's nightly job fares: made on demand, with a clock, and outside the publication."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from dashboards.alone import render_alone
from warehouse.cautions import CAUTIONS


def status_html(found: Mapping[str, Any]) -> str:
    """Return the page for the plain values that `burdenline status --json` prints."""
    patients = sorted(found.get("patients", ()), key=_oldest_first)
    return render_alone("status.html.j2", found=found, patients=patients, cautions=CAUTIONS)


def _oldest_first(row: Mapping[str, Any]) -> tuple[bool, float, str]:
    """Patients without data stand last: their patch may not have come back yet."""
    return row["data_age_h"] is None, -(row["data_age_h"] or 0.0), row["patient_code"]
