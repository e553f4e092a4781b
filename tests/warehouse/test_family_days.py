"""Shape families by local day: what each makes of a day, in the patient's zone."""

from __future__ import annotations

from datetime import date, datetime
from typing import Any


def test_family_beats_fall_on_the_day_at_the_patients_place(lake: Any) -> None:
    """Beats of two quarters either side of local midnight count on two days; the shares of a day add up to 100."""
    lake.patient("P1", "Asia/Kolkata")  # local midnight is 18:30 UTC
    lake.recording("R1", "P1", "2026-05-01T12:00", "2026-05-02T12:00")
    rows = [("18:15", 0, 90), ("18:15", 1, 10), ("18:30", 0, 40), ("18:30", -1, 10), ("18:45", 1, 50)]
    quarters = [
        {"recording_id": "R1", "fingerprint": "f1", "family": family, "beat_count": beats,
         "quarter_utc": datetime.fromisoformat(f"2026-05-01T{clock}")}
        for clock, family, beats in rows
    ]  # fmt: skip
    lake.land("family_quarters", "R1", quarters, fingerprint="f1")
    with lake.built() as build:
        days = build.frame("family_days").select("family", "local_day", "beat_count", "share_of_day_pct").rows()
    first, second = date(2026, 5, 1), date(2026, 5, 2)
    assert days == [(-1, second, 10, 10.0), (0, first, 90, 90.0), (0, second, 40, 40.0), (1, first, 10, 10.0),
                    (1, second, 50, 50.0)]  # fmt: skip
