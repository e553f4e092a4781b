"""The `rate_effects` table: how far the heart rate explains a change, one row per therapy event."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import Any

import numpy as np
import polars as pl

from detectors import rate_dependence as effects
from flows.change.courses import drift_of, excess_at
from flows.change.measures import HEART_RATE, V_PER_H, measured_days
from flows.settings import ChangeSettings
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

LEAST_ANALYSABLE_S = 300  # Source: the study behind `rate_dependence.FOLLOWING_LINE` used rates held for 5 minutes
NO_ECTOPY_PCT = -100.0  # the published line leaves its range where it says less


def rate_effects(
    events: pl.DataFrame, cells: pl.DataFrame, compared: pl.DataFrame, change: ChangeSettings
) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["rate_effects"]` from the hours of both periods and the `changes` rows.

    The kind of dependence is read from the baseline hours alone, so that the therapy does not enter it.
    """
    per_event = _columns_of_changes(events, compared)
    days = measured_days(V_PER_H, cells, len(events))
    day_sd = per_event["day_sd_ln"].fill_null(V_PER_H.day_sd).to_numpy()
    drift = drift_of(V_PER_H, days, len(events), change.gap_drift_share)
    extra = day_sd**2 * excess_at(V_PER_H, drift, day_sd)
    hours = cells.filter(pl.col("mean_rate_bpm").is_not_null() & (pl.col("analysable_s") >= LEAST_ANALYSABLE_S))
    names = ("v_beats", "analysable_s", "mean_rate_bpm", "side", "day")
    beats, seconds, rate, side, day = (hours[name].to_numpy() for name in names)
    ends = np.searchsorted(hours["event"].to_numpy(), np.arange(len(events) + 1))
    rows = []
    for event, (first, last) in enumerate(pairwise(ends)):
        of_event = slice(first, last)
        before = np.flatnonzero(side[of_event] == 0) + first
        kind = effects.dependence(beats[before] / seconds[before], rate[before])
        known = per_event.row(event, named=True)
        equal = effects.ratio_at_equal_rate(
            beats[of_event], seconds[of_event] / 3600, rate[of_event], side[of_event] == 1, day[of_event], extra[event]
        )
        rows.append(known | _row(kind, equal, known["rate_change_pct"]))
    return _published(rows)


def _columns_of_changes(events: pl.DataFrame, compared: pl.DataFrame) -> pl.DataFrame:
    keys = ["patient_code", "therapy_id"]
    rate = compared.filter(pl.col("measure") == HEART_RATE.name).select(*keys, rate_change_pct="change_pct")
    ectopy = compared.filter(pl.col("measure") == V_PER_H.name).select(*keys, "ratio", "day_sd_ln")
    joined = events.join(rate, on=keys, how="left", maintain_order="left")
    return joined.join(ectopy, on=keys, how="left", maintain_order="left")


def _row(kind: effects.Dependence, equal: effects.EqualRate, rate_change_pct: float | None) -> dict[str, Any]:
    known = rate_change_pct is not None and kind.kind != effects.UNKNOWN
    expected = effects.expected_change_pct(rate_change_pct or 0.0, kind.kind) if known else None
    row = {
        "dependence": kind.kind,
        "hourly_r": kind.r,
        "expected_from_rate_pct": expected if expected is None or expected > NO_ECTOPY_PCT else None,
        "equal_rate_ratio": equal.ratio,
        "equal_rate_ratio_low": equal.low,
        "equal_rate_ratio_high": equal.high,
    }
    return {name: None if isinstance(value, float) and np.isnan(value) else value for name, value in row.items()}


def _published(rows: list[dict[str, Any]]) -> pl.DataFrame:
    types = {name: polars_type(COLUMNS[name].type) for name in PUBLISHED["rate_effects"].columns}
    columns = {name: [row.get(name) for row in rows] for name in types if name != "reason"}
    columns["reason"] = [_reason(row) for row in rows]
    return pl.DataFrame(columns, schema=types)


_KINDS = {
    effects.FOLLOWS: "Ectopy rises with the heart rate in the baseline hours",
    effects.OPPOSES: "Ectopy falls with the heart rate in the baseline hours",
    effects.INDEPENDENT: "Ectopy does not follow the heart rate in the baseline hours",
    effects.UNKNOWN: "Too few or too even baseline hours to tell whether ectopy follows the heart rate.",
}


def _reason(row: Mapping[str, Any]) -> str:
    parts = [_KINDS[row["dependence"]]]
    if row["hourly_r"] is not None:
        parts[0] += f" (r {row['hourly_r']:.2f})."
    if row["rate_change_pct"] is not None:
        parts.append(f"The mean heart rate changed by {row['rate_change_pct']:+.1f} %.")
    if row["equal_rate_ratio"] is not None:
        parts.append(
            f"At equal heart rate the ratio of ventricular beats per hour is {row['equal_rate_ratio']:.2f} "
            f"(95 % interval {row['equal_rate_ratio_low']:.2f} to {row['equal_rate_ratio_high']:.2f}): {_left_over(row)}."
        )
    return " ".join(parts)


def _left_over(row: Mapping[str, Any]) -> str:
    if row["equal_rate_ratio_low"] <= 1 <= row["equal_rate_ratio_high"]:
        return "no change beyond what goes with the heart rate is shown"
    return "a change that does not go with the heart rate"
