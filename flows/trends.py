"""From hours and periods to the `changes` table: one row per therapy event and measure, always.

The statistics are in `detectors.change`; here frames become arrays, results become rows, and the reason is worded.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors import change as statistics
from detectors.spread import Periods
from detectors.standardise import HourCells, over_dispersion, standardised_days
from detectors.variability import REPETITIVE_FORMS, SINGLE_BEATS, SpontaneousSeries, excess_of_gap
from flows.settings import ChangeSettings, WearSettings
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

SIDES = ("baseline", "after")
ECTOPY_DAY_SD = 0.6  # of ln level; the within-week spread of the 1988 series (variability.SINGLE_BEATS)
RATE_DAY_SD = 0.06  # common practice, no source: a mean heart rate varies by some 6 % from day to day


@dataclass(frozen=True)
class Measure:
    """What is compared: a count over an exposure, in a unit, with the published drift that applies to it."""

    name: str
    count: pl.Expr
    exposure: pl.Expr
    per: float  # factor from counts per unit of exposure to the published unit
    day_sd: float
    drift: SpontaneousSeries | None
    noun: str


_HOURS = pl.col("analysable_s") / 3600
_V, _S, _BEATS = pl.col("v_beats"), pl.col("s_beats"), pl.col("all_beats")
MEASURES = (
    Measure("v_burden_pct", _V, _BEATS, 100, ECTOPY_DAY_SD, SINGLE_BEATS, "ventricular burden"),
    Measure("v_per_h", _V, _HOURS, 1, ECTOPY_DAY_SD, SINGLE_BEATS, "ventricular beats per hour"),
    # No series is published for supraventricular beats; the ventricular one is borrowed.
    Measure("s_burden_pct", _S, _BEATS, 100, ECTOPY_DAY_SD, SINGLE_BEATS, "supraventricular burden"),
    Measure("mean_rate_bpm", pl.col("mean_rate_bpm") * _HOURS, _HOURS, 1, RATE_DAY_SD, None, "mean heart rate"),
    Measure("couplets_per_24h", pl.col("couplets"), _HOURS, 24, ECTOPY_DAY_SD, REPETITIVE_FORMS, "couplets per 24 h"),
    Measure("runs_per_24h", pl.col("runs"), _HOURS, 24, ECTOPY_DAY_SD, REPETITIVE_FORMS, "runs per 24 h"),
)


def changes(
    *,
    local_hours: pl.DataFrame,
    wear_days: pl.DataFrame,
    periods: pl.DataFrame,
    therapies: pl.DataFrame,
    change: ChangeSettings,
    wear: WearSettings,
) -> pl.DataFrame:
    """Compare baseline and after of every therapy event; frames and result have the columns of `schema.PUBLISHED`."""
    events = therapies.select("patient_code", "therapy_id").sort("patient_code", "therapy_id").with_row_index("event")
    days = _days(events, periods, wear_days)
    cells = days.join(local_hours, on=["patient_code", "local_day"]).filter(pl.col("analysable_s") > 0)
    frame = _wear(events, days, cells)
    gaps = {drift: _gaps(days, len(events), drift, change) for drift in {measure.drift for measure in MEASURES}}
    compared = {
        measure.name: _compare(measure, cells, len(events), gaps[measure.drift], change, wear) for measure in MEASURES
    }
    rates = compared["mean_rate_bpm"].select(baseline_rate_bpm="baseline_value", after_rate_bpm="after_value")
    rows = [pl.concat([frame, compared[measure.name], rates], how="horizontal") for measure in MEASURES]
    result = pl.concat(rows).sort("event", maintain_order=True)
    columns = PUBLISHED["changes"].columns
    reasons = pl.Series("reason", [_reason(row, wear) for row in result.iter_rows(named=True)], dtype=pl.String)
    return result.with_columns(reasons).select(pl.col(name).cast(polars_type(COLUMNS[name].type)) for name in columns)


def _days(events: pl.DataFrame, periods: pl.DataFrame, wear_days: pl.DataFrame) -> pl.DataFrame:
    """Valid wear days of the two periods: event, side (0 baseline, 1 after), patient, day, analysable hours."""
    spans = periods.filter(pl.col("period").is_in(SIDES)).select(
        "patient_code", "therapy_id", "first_day", "last_day", side=(pl.col("period") == "after").cast(pl.Int64)
    )
    valid = wear_days.filter("is_valid_day").select("patient_code", "local_day", "analysable_h")
    return (
        events.join(spans, on=["patient_code", "therapy_id"])
        .join(valid, on="patient_code")
        .filter(pl.col("local_day").is_between("first_day", "last_day"))
        .sort("event", "side", "local_day")
        .with_row_index("day")
    )


def _wear(events: pl.DataFrame, days: pl.DataFrame, cells: pl.DataFrame) -> pl.DataFrame:
    """Per event and side: days, analysable hours, share of the clock hours covered."""
    frame = events
    for side, name in enumerate(SIDES):
        of_days = days.filter(pl.col("side") == side).group_by("event").agg(
            pl.len().alias(f"{name}_days"), pl.col("analysable_h").sum().alias(f"{name}_analysable_h")
        )  # fmt: skip
        covered = cells.filter(pl.col("side") == side).group_by("event").agg(
            (pl.col("clock_hour").n_unique() * 100 / 24).alias(f"{name}_clock_coverage_pct")
        )  # fmt: skip
        frame = frame.join(of_days, on="event", how="left").join(covered, on="event", how="left")
    return frame.with_columns(pl.exclude("event", "patient_code", "therapy_id").fill_null(0)).sort("event")


def _gaps(
    days: pl.DataFrame, n_events: int, drift: SpontaneousSeries | None, change: ChangeSettings
) -> NDArray[np.float64]:
    """Variance that the time between the periods adds, per event (see `excess_of_gap`); 0 without both sides."""
    excess = np.zeros(n_events)
    if drift is None or change.gap_drift_share == 0:
        return excess
    event, side = days["event"].to_numpy(), days["side"].to_numpy()
    day = days["local_day"].to_physical().to_numpy()
    for i in range(n_events):
        first, last = np.searchsorted(event, [i, i + 1])
        of_event, is_after = day[first:last], side[first:last] == 1
        if is_after.any() and not is_after.all():
            excess[i] = excess_of_gap(of_event[~is_after], of_event[is_after], drift)
    return excess * change.gap_drift_share


def _compare(
    measure: Measure,
    cells: pl.DataFrame,
    n_events: int,
    gaps: NDArray[np.float64],
    change: ChangeSettings,
    wear: WearSettings,
) -> pl.DataFrame:
    seen = cells.select("event", "side", "day", "clock_hour", count=measure.count, exposure=measure.exposure)
    seen = seen.drop_nulls().filter(pl.col("exposure") > 0)
    days = seen.group_by("day", maintain_order=True).agg(pl.col("event", "side").first())
    row = seen["day"].rle_id().to_numpy().astype(np.int64)
    hours = HourCells(row, *(seen[name].to_numpy() for name in ("clock_hour", "count", "exposure")))
    event = days["event"].to_numpy().astype(np.int64)
    period = 2 * event + days["side"].to_numpy()
    level, expected = standardised_days(hours, event)
    dispersion = over_dispersion(hours, expected, period, 2 * n_events)
    compared = statistics.compare(
        Periods(period, level.counts, level.exposure, dispersion[period]),
        n_events,
        excess=gaps,
        typical_sd=measure.day_sd,
        success_limit_pct=change.success_limit_pct,
        min_days=wear.min_days_per_period,
    )
    return _rows(measure, compared)


def _rows(measure: Measure, compared: statistics.Comparison) -> pl.DataFrame:
    named = {
        "measure": pl.Series([measure.name] * len(compared.ratio), dtype=pl.String),
        "baseline_value": compared.baseline * measure.per,
        "after_value": compared.after * measure.per,
        "change_pct": 100 * (compared.ratio - 1),
    }
    same = ("ratio", "ratio_low", "ratio_high", "chance_fall_limit_pct", "chance_rise_limit_pct",
            "success_probability_pct", "variance_source", "verdict")  # fmt: skip
    named |= {name: getattr(compared, name) for name in same}
    return pl.DataFrame(named).with_columns(pl.selectors.float().fill_nan(None))


NOUNS = {measure.name: measure.noun for measure in MEASURES}
FULL_CLOCK_PCT = 100.0


def _reason(row: Mapping[str, Any], wear: WearSettings) -> str:
    """Why the verdict, in one sentence with its figures, and a second where the clock is not covered."""
    verdict = {
        statistics.TOO_LITTLE: _too_little,
        statistics.FELL: _beyond_chance,
        statistics.ROSE: _beyond_chance,
        statistics.WITHIN: _within_chance,
    }[row["verdict"]]
    return " ".join(part for part in (verdict(row, wear), _borrowed(row), _partial_clock(row)) if part)


def _too_little(row: Mapping[str, Any], wear: WearSettings) -> str:
    return (
        f"{row['baseline_days']} valid days before and {row['after_days']} after; at least {wear.min_days_per_period} "
        f"on each side are needed (a valid day has {wear.min_analysable_h_per_day:g} analysable hours)."
    )


def _beyond_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    noun = NOUNS[row["measure"]]
    if row["ratio"] is None:
        return f"No {noun} before, {row['after_value']:.3g} after: more than chance explains."
    fell = row["verdict"] == statistics.FELL
    verb, limit = ("fell", row["chance_fall_limit_pct"]) if fell else ("rose", row["chance_rise_limit_pct"])
    return (
        f"{noun.capitalize()} {verb} by {abs(row['change_pct']):.3g} % ({_interval(row)}), "
        f"more than the {limit:.3g} % that chance explains for this patient{_days_used(row)}."
    )


def _within_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    noun = NOUNS[row["measure"]]
    if row["ratio"] is None:
        after = "none" if row["after_value"] == 0 else f"{row['after_value']:.3g}"
        return f"No {noun} before and {after} after: nothing beyond chance{_days_used(row)}."
    if row["change_pct"] < 0:
        fall = row["chance_fall_limit_pct"]
        reach = (
            "even a total absence could be chance" if fall >= 100 else f"chance alone explains falls up to {fall:.3g} %"
        )
        return f"{noun.capitalize()} fell by {-row['change_pct']:.3g} % ({_interval(row)}); {reach}{_days_used(row)}."
    return (
        f"{noun.capitalize()} rose by {row['change_pct']:.3g} % ({_interval(row)}); chance alone explains rises up to "
        f"{row['chance_rise_limit_pct']:.3g} %{_days_used(row)}."
    )


def _interval(row: Mapping[str, Any]) -> str:
    return f"ratio {row['ratio']:.2g}, 95 % interval {row['ratio_low']:.2g} to {row['ratio_high']:.2g}"


def _days_used(row: Mapping[str, Any]) -> str:
    return f"; {row['baseline_days']} days before, {row['after_days']} after"


def _borrowed(row: Mapping[str, Any]) -> str:
    borrowed = {"programme": "The day-to-day variation", "both": "Part of the day-to-day variation"}
    if row["verdict"] == statistics.TOO_LITTLE or row["variance_source"] not in borrowed:
        return ""
    return f"{borrowed[row['variance_source']]} is borrowed from the programme."


def _partial_clock(row: Mapping[str, Any]) -> str:
    before, after = row["baseline_clock_coverage_pct"], row["after_clock_coverage_pct"]
    if min(before, after) >= FULL_CLOCK_PCT or min(row["baseline_days"], row["after_days"]) == 0:
        return ""
    return f"Part of the day is missing: clock hours covered {before:.0f} % before, {after:.0f} % after."
