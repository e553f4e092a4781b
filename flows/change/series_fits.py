"""The `series_fits` table: step and slope of the daily ventricular ectopy after a therapy event."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors.rates import FitError, fit_quasi_poisson, serial_ratio, series_design
from flows.change.measures import V_PER_H, MeasuredDays, measured_days
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

FEWEST_DAYS = 4  # a side, for a level and a slope with something left to see their scatter
WEEKS_FOR_HARMONIC = 3  # distinct weeks from which a weekly pattern is told from a slope
WEEK_D = 7.0


def series_fits(events: pl.DataFrame, cells: pl.DataFrame, periods: pl.DataFrame) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["series_fits"]`: quasi-Poisson interrupted time series on the days of both periods.

    The step is at the first day after the settling time of the therapy kind, so that wash-in and blanking are its lag;
    the slope from there on is beside the trend before. Intervals are Student's on the variance of over-dispersed
    days that may resemble their neighbours (`rates.serial_ratio`).
    """
    days = measured_days(V_PER_H, cells, len(events))
    keys = ["patient_code", "therapy_id"]
    starts = periods.filter(pl.col("period") == "after").select(*keys, start="first_day")
    known = events.join(starts, on=keys, how="left", maintain_order="left")
    start = known["start"].to_physical().to_list()
    ends = np.searchsorted(days.event, np.arange(len(events) + 1))
    columns = list(MeasuredDays._fields)
    rows = []
    for event, (first, last) in enumerate(pairwise(ends)):
        of_event = MeasuredDays._make(getattr(days, name)[first:last] for name in columns)
        rows.append(known.row(event, named=True) | _fit(of_event, start[event]))
    types = {name: polars_type(COLUMNS[name].type) for name in PUBLISHED["series_fits"].columns}
    return pl.DataFrame({name: [row.get(name) for row in rows] for name in types}, schema=types)


def _fit(days: MeasuredDays, start_day: int | None) -> dict[str, Any]:
    sides = [int((days.is_after == side).sum()) for side in (False, True)]
    if start_day is None or min(sides) < FEWEST_DAYS:
        return {}
    since_start = (days.local_day - start_day).astype(float)
    design, names = series_design(since_start, 0.0, slope=True, period_d=WEEK_D, harmonics=_harmonics(since_start))
    try:
        fit = fit_quasi_poisson(days.counts, design, days.exposure)
    except FitError:
        return {}
    named = {"dispersion": fit.dispersion}
    for column, name in (("step", "step_ratio"), ("slope", "slope_ratio_per_week")):
        ends = serial_ratio(fit, days.counts, design, days.local_day, names.index(column))
        named |= dict(zip((name, f"{name}_low", f"{name}_high"), ends, strict=True))
    return named


def _harmonics(since_start: NDArray[np.float64]) -> int:
    return int(len(np.unique(since_start // WEEK_D)) >= 2 * WEEKS_FOR_HARMONIC)
