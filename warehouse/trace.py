"""What stands behind the numbers of one wear day: recordings, deliveries, parts, fingerprint and reviews."""

from __future__ import annotations

from datetime import date, timedelta
from zoneinfo import ZoneInfo

import polars as pl

from warehouse.published import Published, PublishedError
from warehouse.zones import midnight_utc


def trace(published: Published, patient_code: str, local_day: date) -> dict[str, pl.DataFrame]:
    """Rows behind a wear day, by published table, in the order in which the numbers came about.

    Raises PublishedError when the patient is unknown or has no wear on that day; the message names days that are there.
    """
    day = _wear_day(published, patient_code, local_day)
    on_the_day = _overlap(published, patient_code, local_day)
    recordings = published.table("recordings", {"patient_code": patient_code}).filter(on_the_day)
    names = recordings["recording_id"].implode()
    of_recordings = {
        name: published.scan(name).filter(pl.col("recording_id").is_in(names)).collect()
        for name in ("deliveries", "segments", "findings", "reviews")
    }
    of_recordings["segments"] = of_recordings["segments"].filter(on_the_day)
    # Samples of other days lie in parts of other segments; every other part holds the whole recording.
    of_segments = pl.col("segment").is_null() | pl.col("segment").is_in(of_recordings["segments"]["segment"].implode())
    parts = published.scan("parts").filter(pl.col("part_key").is_in(names), of_segments).collect()
    fingerprints = published.table("fingerprints").filter(
        pl.col("fingerprint").is_in(recordings["fingerprint"].implode())
    )
    return {"wear_days": day, "recordings": recordings, **of_recordings, "parts": parts, "fingerprints": fingerprints}


def _wear_day(published: Published, patient_code: str, local_day: date) -> pl.DataFrame:
    days = published.table("wear_days", {"patient_code": patient_code})
    if days.is_empty():
        known = published.table("wear_days")["patient_code"].unique().sort().to_list()
        raise PublishedError(
            f"patient {patient_code} has no wear day; patients with wear: {', '.join(known) or 'none'}"
        )
    found = days.filter(pl.col("local_day") == local_day)
    if found.is_empty():
        first, *_, last = [*days["local_day"], days["local_day"][-1]]
        raise PublishedError(
            f"patient {patient_code} has no wear on {local_day}; there are days from {first} to {last}"
        )
    return found


def _overlap(published: Published, patient_code: str, local_day: date) -> pl.Expr:
    """Whether a span of start_utc and end_utc holds an instant of the local day."""
    zone = ZoneInfo(published.table("patients", {"patient_code": patient_code})["zone"][0])
    first_utc, next_utc = (midnight_utc(day, zone) for day in (local_day, local_day + timedelta(days=1)))
    return (pl.col("start_utc") < next_utc) & (pl.col("end_utc") > first_utc)
