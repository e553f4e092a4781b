"""An invented publication for the tests of the pages: tables as `warehouse.published` would hand them out."""

from __future__ import annotations

import functools
import hashlib
import json
import math
import random
from collections.abc import Iterator, Mapping
from datetime import date, datetime, timedelta
from typing import Any

import polars as pl
import pytest

from warehouse.published import WorkedQuery
from warehouse.schema import COLUMNS, PUBLISHED

TYPES = {
    "VARCHAR": pl.String, "BIGINT": pl.Int64, "INTEGER": pl.Int32, "SMALLINT": pl.Int16, "TINYINT": pl.Int8,
    "DOUBLE": pl.Float64, "REAL": pl.Float32, "BOOLEAN": pl.Boolean, "DATE": pl.Date, "TIMESTAMP": pl.Datetime("us"),
    "REAL[]": pl.List(pl.Float32), "BIGINT[]": pl.List(pl.Int64), "VARCHAR[]": pl.List(pl.String),
}  # fmt: skip
FIRST_DAY = date(2026, 3, 2)
THERAPY_DAY = date(2026, 3, 10)
ZONE = "Atlantic/Azores"
CLASS_NAMES = ("n_beats", "s_beats", "v_beats", "f_beats", "q_beats", "all_beats")


def typed(name: str, rows: list[dict[str, Any]]) -> pl.DataFrame:
    """Return rows as the published table of this name; a column that a row does not give is NULL."""
    schema = {column: TYPES[COLUMNS[column].type] for column in PUBLISHED[name].columns}
    return pl.DataFrame([{column: row.get(column) for column in schema} for row in rows], schema=schema)


def parts_of(name: str, frame: pl.DataFrame) -> Iterator[dict[str, Any]]:
    """Yield the part that holds each recording's rows, with the hash of what is in it."""
    for (recording_id,), rows in frame.partition_by("recording_id", as_dict=True).items():
        digest = hashlib.sha256(rows.write_ipc(None).getbuffer()).hexdigest()
        yield {
            "table_name": name,
            "part_key": recording_id,
            "part_path": f"{name}/{recording_id}",
            "part_sha256": digest,
        }


class InventedPublication:
    """Stands in for a publication: `.table(name)` with the columns and types of the dictionary."""

    def __init__(self, rows: Mapping[str, list[dict[str, Any]]]) -> None:
        self.frames = {name: typed(name, rows.get(name, [])) for name in PUBLISHED}
        large = ("strips", "episodes", "quality_windows")
        self.frames["parts"] = typed("parts", [part for name in large for part in parts_of(name, self.frames[name])])

    def table(self, name: str, where: Mapping[str, Any] | None = None) -> pl.DataFrame:
        frame = self.frames[name]
        for column, value in (where or {}).items():
            frame = frame.filter(pl.col(column) == value)
        return frame

    def queries(self) -> list[WorkedQuery]:
        return [WorkedQuery("burden", "What is the burden?", "SELECT v_burden_pct\nFROM wear_days")]


def at_clock(hours: float) -> datetime:
    return datetime.combine(date(2026, 3, 26), datetime.min.time()) + timedelta(hours=hours)


def beat_shape(width_s: float, up_mv: float) -> list[float]:
    """Return an averaged beat of 90 values: a Gaussian QRS and a T wave against it."""
    times = [(place / 125) - 0.28 for place in range(90)]
    return [
        up_mv * math.exp(-((t / width_s) ** 2)) - 0.25 * up_mv * math.exp(-(((t - 0.28) / 0.07) ** 2)) for t in times
    ]


@functools.cache
def strip_trace(beat_class: str, fs_hz: float) -> tuple[list[float], list[float], list[str]]:
    """Return ten seconds of samples, the times of twelve beats, two of them of the class, and their classes."""
    beats = [(0.4 + 0.82 * i - (0.25 if i in (4, 9) and beat_class != "N" else 0)) for i in range(12)]
    classes = [beat_class if i in (4, 9) else "N" for i in range(12)]
    samples = []
    for place in range(round(10 * fs_hz)):
        t = place / fs_hz
        value = 0.02 * math.sin(2 * math.pi * 0.3 * t)
        for at, kind in zip(beats, classes, strict=True):
            if abs(t - at) < 0.5:
                wide, up = (0.045, -1.3) if kind == "V" else (0.018, 1.1)
                value += up * math.exp(-(((t - at) / wide) ** 2)) + 0.2 * math.exp(-(((t - at - 0.28) / 0.06) ** 2))
        samples.append(round(value, 4))
    return samples, beats, classes


def strip_row(recording_id: str, order: int, beat_class: str, start: datetime, fs_hz: float = 250.0) -> dict[str, Any]:
    samples, beats, classes = strip_trace(beat_class, fs_hz)
    return {
        "recording_id": recording_id, "fingerprint": "f00dfeed", "segment": 0, "first_sample": order * 5000,
        "start_utc": start + timedelta(minutes=37 * order), "fs_hz": fs_hz,
        "strip_reason": f"typical {beat_class} beat of family {order}", "beat_class": beat_class, "samples_mv": samples,
        "beat_samples": [round(at * fs_hz) for at in beats], "beat_classes": classes,
        "beat_families": [{"N": 0, "V": 1, "S": 0}[kind] for kind in classes],
    }  # fmt: skip


def day_counts(rng: random.Random, burden: float, hours: float) -> dict[str, Any]:
    total = round(hours * 60 * rng.uniform(62, 78))
    v, s = round(total * burden / 100), round(total * 0.004)
    return {
        "n_beats": total - v - s, "s_beats": s, "v_beats": v, "f_beats": 0, "q_beats": 0, "all_beats": total,
        "v_burden_pct": 100 * v / total if total else None, "s_burden_pct": 100 * s / total if total else None,
        "v_per_h": v / hours if hours else None, "mean_rate_bpm": total / hours / 60 if hours else None,
        "couplets": v // 40, "runs": v // 400, "sv_runs": 0, "pauses": 1, "longest_run_beats": 3 if v > 400 else None,
        "fastest_run_bpm": 131.0 if v > 400 else None, "longest_pause_ms": 2140.0, "bigeminy_s": v / 3,
        "trigeminy_s": 0.0, "irregular_s": 0.0,
    }  # fmt: skip


def add_patient(
    rows: dict[str, list[dict[str, Any]]], place: int, *, code: str, before: float, after: float, verdict: str
) -> None:
    """Add one patient with two wears of five days around a therapy event."""
    rng = random.Random(place)
    rows["patients"].append({"patient_code": code, "zone": ZONE})
    for wear, burden in ((0, before), (1, after)):
        start = datetime.combine(FIRST_DAY + timedelta(days=18 * wear), datetime.min.time()) + timedelta(hours=9)
        recording_id = f"CN{place:03d}{wear}-{start:%Y%m%d}"
        _add_recording(rows, rng, code, recording_id, start, burden)
    therapy_id = f"T{place:03d}"
    rows["therapies"].append(
        {"therapy_id": therapy_id, "patient_code": code, "therapy_kind": "medication_start",
         "therapy_detail": "bisoprolol 5 mg", "therapy_day": THERAPY_DAY}
    )  # fmt: skip
    _add_change(rows, code, therapy_id, before, after, verdict)


SPLIT = {0: {"n_beats": 5000, "s_beats": 120}, 1: {"v_beats": 600, "f_beats": 40}, 2: {"v_beats": 80}}
"""Beats of the invented families by the class found."""


def _add_recording(rows: Any, rng: random.Random, code: str, recording_id: str, start: datetime, burden: float) -> None:
    total = v_total = 0
    for offset in range(5):
        local_day = (start + timedelta(days=offset)).date()
        hours = (13.2, 22.8, 23.1, 6.2, 9.9)[offset]
        counts = day_counts(rng, burden * rng.uniform(0.75, 1.3), hours)
        total, v_total = total + counts["all_beats"], v_total + counts["v_beats"]
        day = {"patient_code": code, "local_day": local_day}
        interval = {"v_burden_low_pct": 0.8 * counts["v_burden_pct"], "v_burden_high_pct": 1.3 * counts["v_burden_pct"]}
        rows["wear_days"].append(
            day | counts | interval | {"day_h": 24.0, "recorded_h": hours + 1, "worn_h": hours + 0.7, "analysable_h": hours,
                            "clock_hours_covered": min(24, int(hours)), "is_valid_day": hours >= 10}
        )  # fmt: skip
        for hour in range(24 - int(hours), 24):
            hourly = day_counts(rng, burden * (1 + 0.5 * math.sin(hour / 4)), 1.0)
            rows["local_hours"].append(day | hourly | {"clock_hour": hour, "worn_s": 3600.0, "analysable_s": 3500.0})
            rows["hours"].append(
                hourly | {"recording_id": recording_id, "patient_code": code, "recorded_s": 3600.0, "worn_s": 3580.0,
                          "analysable_s": 3400.0 if hour % 5 else 1200.0,
                          "hour_utc": datetime.combine(local_day, datetime.min.time()) + timedelta(hours=hour)}
            )  # fmt: skip
    rows["recordings"].append(
        {"recording_id": recording_id, "patient_code": code, "device_serial": recording_id[:6], "start_utc": start,
         "end_utc": start + timedelta(days=5), "zone": ZONE, "zone_source": "patient", "fs_hz": 250.0, "lead": "MLII",
         "mv_per_count": 0.001, "count_at_zero_mv": 0.0, "segment_count": 1, "sample_count": 75_000_000,
         "recorded_h": 80.2, "worn_h": 78.7, "analysable_h": 75.2, "findings": "lead_not_limb_like", "all_beats": total,
         "v_beats": v_total, "v_burden_pct": 100 * v_total / total, "fingerprint": "f00dfeed"}
    )  # fmt: skip
    rows["segments"].append(
        {"recording_id": recording_id, "segment": 0, "start_utc": start, "end_utc": start + timedelta(days=5),
         "sample_count": 75_000_000, "delivery_id": "D1"}
    )  # fmt: skip
    for family, (kind, width, up, share) in enumerate(
        (("N", 0.02, 1.1, 88.0), ("V", 0.05, -1.4, 9.5), ("V", 0.06, 1.6, 1.2))
    ):
        rows["families"].append(
            {"recording_id": recording_id, "fingerprint": "f00dfeed", "family": family, "family_class": kind,
             "beat_count": round(total * share / 100), "share_pct": share, "qrs_width_ms": 84.0 + 60 * (kind == "V"),
             "amplitude_mv": up, "mean_coupling_ms": 470.0 if kind == "V" else None,
             "coupling_spread_ms": 38.0 if kind == "V" else None, "shape_mv": beat_shape(width, up)}
        )  # fmt: skip
    for rank, (family, share, settled) in enumerate(((1, 88.8, 88.8), (2, 11.2, 100.0), (0, 0.0, 100.0)), start=1):
        found = rows["families"][family - 3]
        rows["review_sheet"].append(
            {"recording_id": recording_id, "review_rank": rank, "family": family, "family_class": found["family_class"],
             "beat_count": found["beat_count"], **SPLIT[family], "v_share_pct": share, "settled_pct": settled}
        )  # fmt: skip
    rows["review_effort"].append(
        {"recording_id": recording_id, "patient_code": code, "decisions_to_goal": 2, "settled_pct": 100.0,
         "seconds_per_decision": 20, "minutes_to_goal": 2 / 3, "decided_v_pct": 0.0}
    )  # fmt: skip
    for order, kind in enumerate(("V", "V", "S", "N")):
        rows["strips"].append(strip_row(recording_id, order, kind, start + timedelta(hours=3)))
    for order, kind in enumerate(("run", "couplet", "couplet", "pause")):
        at = start + timedelta(hours=2 + order)
        rows["episodes"].append(
            {"recording_id": recording_id, "fingerprint": "f00dfeed", "episode_kind": kind, "segment": 0,
             "first_sample": 1000 * order, "last_sample": 1000 * order + 400, "start_utc": at,
             "end_utc": at + timedelta(seconds=1.6), "beat_count": 3, "duration_s": 1.6, "rate_bpm": 128.0,
             "is_automatic": True, "is_counted": True}
        )  # fmt: skip
    rows["quality_windows"].append(
        {"recording_id": recording_id, "fingerprint": "f00dfeed", "segment": 0, "first_sample": 0, "last_sample": 9000,
         "start_utc": start, "end_utc": start + timedelta(seconds=36), "duration_s": 36.0, "quality_reason": "noise"}
    )  # fmt: skip


def _add_change(rows: Any, code: str, therapy_id: str, before: float, after: float, verdict: str) -> None:
    known = verdict != "too_little_wear"
    sides = {"baseline_days": 3, "after_days": 3 if known else 1, "baseline_analysable_h": 59.1,
             "after_analysable_h": 59.1 if known else 6.0, "baseline_clock_coverage_pct": 100.0,
             "after_clock_coverage_pct": 100.0 if known else 25.0, "baseline_rate_bpm": 71.0,
             "after_rate_bpm": 64.0}  # fmt: skip
    for measure, old, new in (
        ("v_burden_pct", before, after),
        ("v_per_h", before * 40, after * 40),
        ("mean_rate_bpm", 71, 64),
    ):
        ratio = new / old if known else None
        rows["changes"].append(
            {"patient_code": code, "therapy_id": therapy_id, "measure": measure, "baseline_value": float(old),
             "after_value": float(new) if known else None, **sides, "ratio": ratio,
             "ratio_low": ratio and ratio * 0.7, "ratio_high": ratio and ratio * 1.4,
             "change_pct": ratio and 100 * (ratio - 1), "chance_fall_limit_pct": 61.0 if known else None,
             "chance_rise_limit_pct": 155.0 if known else None, "success_probability_pct": 70.0 if known else None,
             "variance_source": "both", "verdict": verdict,
             "reason": f"Over 3 valid days before and {sides['after_days']} after, against what chance explains."}
        )  # fmt: skip
    for period, first, last in (("baseline", FIRST_DAY, date(2026, 3, 9)), ("settling", THERAPY_DAY, date(2026, 3, 16)),
                                ("after", date(2026, 3, 17), date(2026, 4, 20))):  # fmt: skip
        rows["periods"].append(
            {"patient_code": code, "therapy_id": therapy_id, "period": period, "first_day": first, "last_day": last,
             "wear_days": 5, "valid_days": 3, "worn_h": 78.7, "analysable_h": 75.2, "clock_coverage_pct": 100.0,
             "all_beats": 300_000, "v_beats": 30_000, "s_beats": 1200, "v_burden_pct": 10.0, "s_burden_pct": 0.4,
             "v_per_h": 400.0, "mean_rate_bpm": 70.0}
        )  # fmt: skip


def invented_rows(patients: int = 4) -> dict[str, list[dict[str, Any]]]:
    """Return the rows of all published tables of an invented coastal clinic network."""
    rows: dict[str, list[dict[str, Any]]] = {name: [] for name in PUBLISHED}
    courses = ((12.4, 1.9, "fell_beyond_chance"), (8.1, 7.2, "within_chance"), (3.3, 11.8, "rose_beyond_chance"),
               (15.0, 14.0, "too_little_wear"))  # fmt: skip
    for place in range(patients):
        before, after, verdict = courses[place % len(courses)]
        add_patient(rows, place, code=f"SKERRY-{place + 1:04d}", before=before, after=after, verdict=verdict)
        if verdict in ("rose_beyond_chance", "too_little_wear"):
            rows["attention"].append(
                {"attention_rank": place, "patient_code": f"SKERRY-{place + 1:04d}", "attention_code": verdict,
                 "attention_reason": "Ventricular burden 11.8 % on 22 Mar 2026, over the line of 10 %.",
                 "since_day": date(2026, 3, 22)}
            )  # fmt: skip
    unknown_serial = "Serial CN9001 is in no row of wears.csv; add the wear."
    picture = "Found a JPEG picture; expected EDF or WFDB."
    for limit_pct, responders in ((50.0, 2), (80.0, 1)):
        rows["cohort"].append(
            {"therapy_kind": "medication_start", "measure": "v_burden_pct", "limit_pct": limit_pct, "patients": 4,
             "evaluable_patients": 3, "fell_patients": 1, "rose_patients": 1, "responders": responders,
             "responder_pct": 100 * responders / 3, "responder_pct_low": 6.1, "responder_pct_high": 93.9,
             "mean_ratio": 0.8, "mean_ratio_low": 0.1, "mean_ratio_high": 5.0}
        )  # fmt: skip
    for visit, target, met in (("entry", date(2026, 3, 4), True), ("week 3", date(2026, 3, 25), False)):
        rows["visits"].append(
            {"patient_code": "SKERRY-0001", "visit": visit, "arm": "masked", "target_day": target, "first_day": target,
             "last_day": target, "wear_days": 1, "valid_days": int(met), "analysable_h": 13.2 if met else 6.0,
             "v_beats": 900, "all_beats": 9000, "v_burden_pct": 10.0, "meets_protocol": met,
             "reason": None if met else "1 valid day is missing."}
        )  # fmt: skip
    rows["level_shifts"].append(
        {"patient_code": "SKERRY-0001", "local_day": date(2026, 3, 20), "level_before": 12.5, "level_after": 1.9}
    )
    rows["marks"] += [
        {"recording_id": "CN0000-20260302", "patient_code": "SKERRY-0001", "mark_utc": datetime.fromisoformat(at),
         "mark_text": text}
        for at, text in (
            ("2026-03-02T12:00:04", "fluttering"),  # four seconds into the first strip
            ("2026-03-02T18:00:00", ""),
            ("2026-03-04T00:30:00", "dizzy on the stairs"),  # still the day before on the Azores
        )
    ]  # fmt: skip
    rows["rate_effects"].append(
        {"patient_code": "SKERRY-0001", "therapy_id": "T000", "dependence": "follows_rate",
         "reason": "Ectopy rises with the heart rate in the baseline hours (r 0.60)."}
    )  # fmt: skip
    for status, name, reason in (
        ("accepted", "CN0000.edf", None), ("waiting", "CN9001.edf", unknown_serial), ("quarantined", "sea.edf", picture)
    ):  # fmt: skip
        rows["deliveries"].append(
            {"delivery_id": f"D-{status}", "file_name": name, "file_bytes": 1000, "status": status, "reason": reason,
             "received_utc": at_clock(7.5), "findings": ""}
        )  # fmt: skip
    rows["runs_of_flow"].append(
        {"run_id": "R1", "finished_utc": at_clock(8), "accepted_count": 1, "waiting_count": 1,
         "skipped_count": 0, "quarantined_count": 1, "outcome": "published_with_refusals"}
    )  # fmt: skip
    rows["fingerprints"].append(
        {"fingerprint": "f00dfeed", "detector_version": "1", "is_published": True,
         "settings_json": json.dumps({"detector": {"pause_ms": 2000, "bigeminy_min_cycles": 3}})}
    )  # fmt: skip
    rows["data_dictionary"] = [
        {"table_name": table.name, "grain": table.grain, "column_name": name, "column_type": COLUMNS[name].type,
         "unit": COLUMNS[name].unit, "meaning": COLUMNS[name].meaning}
        for table in PUBLISHED.values() for name in table.columns
    ]  # fmt: skip
    return rows


@pytest.fixture
def rows() -> dict[str, list[dict[str, Any]]]:
    """Rows that a test may change before it publishes them."""
    return invented_rows()


@pytest.fixture
def publish():
    """Turn rows into a publication."""
    return InventedPublication
