"""From hours and periods to the tables that answer "did it change?": one row per therapy event and measure, always.

The statistics are in `detectors.change`; here frames become arrays, results become rows, and the reason is worded.
"""

from __future__ import annotations

import numpy as np
import polars as pl

from detectors.change import TOO_LITTLE
from detectors.variability import regression_to_mean
from flows.change.clock_rates import rate_by_clock_hour
from flows.change.cohorts import cohort
from flows.change.courses import compared, recurrence_days
from flows.change.extremes import EXTREMES, compared_by_rank, excess_of_runs
from flows.change.level_shifts import level_shifts
from flows.change.measures import HEART_RATE, MEASURES, Measure, measured_days
from flows.change.rate_effects import rate_effects
from flows.change.reasons import reason
from flows.change.series_fits import series_fits
from flows.settings import ChangeSettings, WearSettings
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

SIDES = ("baseline", "after")
AS_COMPARED = (
    "ratio", "ratio_low", "ratio_high", "chance_fall_limit_pct", "chance_rise_limit_pct", "variance_source", "verdict",
    "days_to_settle", "counting_share_pct", "day_share_pct", "gap_share_pct", "detection_share_pct",
)  # fmt: skip


def tables(
    *,
    local_hours: pl.DataFrame,
    wear_days: pl.DataFrame,
    periods: pl.DataFrame,
    therapies: pl.DataFrame,
    change: ChangeSettings,
    wear: WearSettings,
) -> dict[str, pl.DataFrame]:
    """The published tables of therapy events, by name; frames and results have the columns of `schema.PUBLISHED`."""
    events, days, cells = _prepared(local_hours, wear_days, periods, therapies)
    compared = _changes(events, days, cells, change, wear)
    return {
        "changes": compared,
        "rate_effects": rate_effects(events, cells, compared, change),
        "rate_by_clock_hour": rate_by_clock_hour(cells),
        "series_fits": series_fits(events, cells, periods),
        "level_shifts": level_shifts(local_hours, wear_days),
        "cohort": cohort(compared, therapies, change.success_limit_pct),
    }


def changes(
    *,
    local_hours: pl.DataFrame,
    wear_days: pl.DataFrame,
    periods: pl.DataFrame,
    therapies: pl.DataFrame,
    change: ChangeSettings,
    wear: WearSettings,
) -> pl.DataFrame:
    """The `changes` table alone, for whatever `therapies` names and `periods` spans."""
    return _changes(*_prepared(local_hours, wear_days, periods, therapies), change, wear)


def _prepared(
    local_hours: pl.DataFrame, wear_days: pl.DataFrame, periods: pl.DataFrame, therapies: pl.DataFrame
) -> tuple[pl.DataFrame, pl.DataFrame, pl.DataFrame]:
    """Numbered events, the valid days of their periods, and the hours of those days."""
    events = therapies.select("patient_code", "therapy_id").sort("patient_code", "therapy_id").with_row_index("event")
    days = _days(events, periods, wear_days)
    cells = days.join(local_hours, on=["patient_code", "local_day"]).filter(pl.col("analysable_s") > 0)
    return events, days, cells.sort("day", "clock_hour")


def _changes(
    events: pl.DataFrame, days: pl.DataFrame, cells: pl.DataFrame, change: ChangeSettings, wear: WearSettings
) -> pl.DataFrame:
    """Baseline and after of every therapy event and measure."""
    frame = _wear(events, days, cells)
    of_measure = {measure.name: _compare(measure, cells, len(events), change, wear) for measure in MEASURES}
    excess = excess_of_runs(cells, len(events), change)
    by_rank = [compared_by_rank(extreme, cells, len(events), excess, wear) for extreme in EXTREMES]
    rates = of_measure[HEART_RATE.name].select(baseline_rate_bpm="baseline_value", after_rate_bpm="after_value")
    rows = [pl.concat([frame, of_one, rates], how="horizontal") for of_one in (*of_measure.values(), *by_rank)]
    result = pl.concat(rows, how="diagonal_relaxed").sort("event", maintain_order=True)
    columns = PUBLISHED["changes"].columns
    reasons = pl.Series("reason", [reason(row, wear) for row in result.iter_rows(named=True)], dtype=pl.String)
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


def _compare(
    measure: Measure, cells: pl.DataFrame, n_events: int, change: ChangeSettings, wear: WearSettings
) -> pl.DataFrame:
    """Columns of one measure, one row per event in their order."""
    days = measured_days(measure, cells, n_events)
    found = compared(measure, days, n_events, change, wear)
    is_ectopy = measure is not HEART_RATE
    recurrence = recurrence_days(measure, days, n_events, change, wear) if is_ectopy else [None] * n_events
    regression = regression_to_mean(
        np.log(np.where(found.baseline > 0, found.baseline, np.nan)), found.baseline_variance
    )
    success = np.where(is_ectopy & (found.verdict != TOO_LITTLE), found.success_probability_pct, np.nan)
    columns = {name: getattr(found, name) for name in AS_COMPARED} | {
        "measure": [measure.name] * n_events,
        "baseline_value": found.baseline * measure.per,
        "after_value": found.after * measure.per,
        "change_pct": 100 * (found.ratio - 1),
        "success_probability_pct": success,
        "day_sd_ln": found.day_sd,
        "expected_regression_pct": -100 * np.expm1(np.minimum(regression, 0.0)),
        "recurrence_day": pl.Series(recurrence, dtype=pl.Date),
    }
    known = pl.DataFrame(columns).with_columns(pl.selectors.float().fill_nan(None))
    return known.with_columns(pl.col("days_to_settle").cast(pl.Int64))
