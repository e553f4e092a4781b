"""From hours and periods to the tables that answer "did it change?": one row per therapy event and measure, always.

The statistics are in `detectors.change`; here frames become arrays, results become rows, and the reason is worded.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
import polars as pl

from detectors.change import TOO_LITTLE, Seen
from detectors.variability import regression_to_mean
from flows.change.clock_rates import rate_by_clock_hour
from flows.change.cohorts import cohort
from flows.change.courses import Drift, compared, drift_of, recurrence_days, seen
from flows.change.extremes import EXTREMES, compared_by_rank, excess_of_runs
from flows.change.lending import NOTHING_KEPT, Kept, Lent, all_evidence, evidence_of, is_same, lent, with_kept
from flows.change.level_shifts import level_shifts
from flows.change.measures import HEART_RATE, MEASURES, Measure, MeasuredDays, measured_days
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


PER_PATIENT = ("changes", "rate_effects", "rate_by_clock_hour", "series_fits", "level_shifts")
"""Tables whose rows follow from one patient and what the programme lends."""


class Inputs(NamedTuple):
    """Published tables from which changes follow."""

    local_hours: pl.DataFrame
    wear_days: pl.DataFrame
    periods: pl.DataFrame
    therapies: pl.DataFrame

    def without(self, patients: list[str]) -> Inputs:
        """The rows of all other patients."""
        return Inputs._make(table.filter(~pl.col("patient_code").is_in(patients)) for table in self)


class Tables(NamedTuple):
    """The published tables of therapy events by name, and the evidence that the next publication may take over."""

    published: dict[str, pl.DataFrame]
    evidence: pl.DataFrame


class _Measured(NamedTuple):
    """The days of one measure, what drift means for them, and what they show before anything is lent."""

    days: MeasuredDays
    drift: Drift
    seen: Seen


class _Looked(NamedTuple):
    """Events with the days and hours of their periods, and each measure on them."""

    events: pl.DataFrame
    days: pl.DataFrame
    cells: pl.DataFrame
    measured: dict[str, _Measured]

    def evidence(self) -> pl.DataFrame:
        return pl.concat([evidence_of(name, self.events, of) for name, (_, _, of) in self.measured.items()])


def tables(inputs: Inputs, change: ChangeSettings, wear: WearSettings, kept: Kept = NOTHING_KEPT) -> Tables:
    """The published tables of therapy events; frames have the columns of `schema.PUBLISHED`.

    Rows of `kept` patients are taken over where the programme still lends the same; the tables are the same without.
    """
    fresh = inputs.without(kept.patients) if kept.patients else inputs
    looked = _look(fresh, change)
    evidence = all_evidence(kept, looked.evidence())
    now = lent(evidence)
    if kept.patients and not is_same(now, lent(kept.evidence)):
        return tables(inputs, change, wear)
    compared = _changes(looked, now, change, wear)
    made = {
        "changes": compared,
        "rate_effects": rate_effects(looked.events, looked.cells, compared, change),
        "rate_by_clock_hour": rate_by_clock_hour(looked.cells),
        "series_fits": series_fits(looked.events, looked.cells, fresh.periods),
        "level_shifts": level_shifts(fresh.local_hours, fresh.wear_days),
    }
    whole = {name: with_kept(kept, name, table) for name, table in made.items()}
    of_all = {"cohort": cohort(whole["changes"], inputs.therapies, change.success_limit_pct)}
    return Tables(whole | of_all, evidence)


def changes(inputs: Inputs, change: ChangeSettings, wear: WearSettings, kept: Kept = NOTHING_KEPT) -> Tables:
    """The `changes` table alone, for whatever `therapies` names and `periods` spans."""
    looked = _look(inputs.without(kept.patients) if kept.patients else inputs, change)
    evidence = all_evidence(kept, looked.evidence())
    now = lent(evidence)
    if kept.patients and not is_same(now, lent(kept.evidence)):
        return changes(inputs, change, wear)
    return Tables({"changes": with_kept(kept, "changes", _changes(looked, now, change, wear))}, evidence)


def _look(inputs: Inputs, change: ChangeSettings) -> _Looked:
    """Numbered events, the valid days of their periods, the hours of those days."""
    named = inputs.therapies.select("patient_code", "therapy_id")
    events = named.sort("patient_code", "therapy_id").with_row_index("event")
    days = _days(events, inputs.periods, inputs.wear_days)
    cells = days.join(inputs.local_hours, on=["patient_code", "local_day"]).filter(pl.col("analysable_s") > 0)
    cells = cells.sort("day", "clock_hour")
    measured = {measure.name: _measure(measure, cells, events.height, change) for measure in MEASURES}
    return _Looked(events, days, cells, measured)


def _measure(measure: Measure, cells: pl.DataFrame, n_events: int, change: ChangeSettings) -> _Measured:
    days = measured_days(measure, cells, n_events)
    drift = drift_of(measure, days, n_events, change.gap_drift_share)
    return _Measured(days, drift, seen(measure, days, n_events, drift))


def _changes(
    looked: _Looked, programme: Mapping[str, Lent], change: ChangeSettings, wear: WearSettings
) -> pl.DataFrame:
    """Baseline and after of every therapy event and measure."""
    events, cells = looked.events, looked.cells
    frame = _wear(events, looked.days, cells)
    of_measure = {
        measure.name: _compare(measure, looked.measured[measure.name], programme[measure.name], change, wear)
        for measure in MEASURES
    }
    excess = excess_of_runs(cells, events.height, change)
    by_rank = [compared_by_rank(extreme, cells, events.height, excess, wear) for extreme in EXTREMES]
    rates = of_measure[HEART_RATE.name].select(baseline_rate_bpm="baseline_value", after_rate_bpm="after_value")
    rows = [pl.concat([frame, of_one, rates], how="horizontal") for of_one in (*of_measure.values(), *by_rank)]
    result = pl.concat(rows, how="diagonal_relaxed").sort("event", maintain_order=True)
    columns = PUBLISHED["changes"].columns
    reasons = pl.Series("reason", [reason(row, change, wear) for row in result.iter_rows(named=True)], dtype=pl.String)
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
    measure: Measure, of: _Measured, programme: Lent, change: ChangeSettings, wear: WearSettings
) -> pl.DataFrame:
    """Columns of one measure, one row per event in their order."""
    found = compared(measure, of.seen, of.drift, programme.spread, change, wear)
    n_events = len(found.ratio)
    is_ectopy = measure is not HEART_RATE
    recurrence = recurrence_days(measure, of.days, n_events, change, wear) if is_ectopy else [None] * n_events
    log_level = np.log(np.where(found.baseline > 0, found.baseline, np.nan))
    regression = regression_to_mean(log_level, found.baseline_variance, programme.baseline)
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
