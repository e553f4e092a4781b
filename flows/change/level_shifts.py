"""The `level_shifts` table: days on which a patient's burden moved to another level, whatever the register says."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import polars as pl

from detectors.shifts import shifts
from flows.change.courses import day_noise, log_levels, step_sd
from flows.change.measures import V_BURDEN, measured_days
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED


def level_shifts(local_hours: pl.DataFrame, wear_days: pl.DataFrame) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["level_shifts"]` from all valid days of every patient, therapy dates unseen."""
    valid = wear_days.filter("is_valid_day").select("patient_code", "local_day").sort("patient_code", "local_day")
    numbered = valid.with_row_index("day").with_columns(event=pl.col("patient_code").rle_id(), side=pl.lit(0))
    patients = numbered["patient_code"].unique(maintain_order=True)
    cells = numbered.join(local_hours, on=["patient_code", "local_day"]).filter(pl.col("analysable_s") > 0)
    cells = cells.sort("day", "clock_hour")
    days = measured_days(V_BURDEN, cells, len(patients))
    log_level = log_levels(days)
    found: list[tuple[str, int, float, float]] = []
    for patient, (first, last) in enumerate(pairwise(np.searchsorted(days.event, np.arange(len(patients) + 1)))):
        series = log_level[first:last]
        noise = day_noise(days, step_sd(series, V_BURDEN.day_sd))[first:last]
        edges = [0, *shifts(series, noise).tolist(), len(series)]
        level = [V_BURDEN.per * float(np.exp(series[a:b].mean())) for a, b in pairwise(edges)]
        for at, before, after in zip(edges[1:-1], level, level[1:], strict=False):
            found.append((patients[patient], int(days.local_day[first + at]), before, after))
    return _published(found)


def _published(found: list[tuple[str, int, float, float]]) -> pl.DataFrame:
    frame = pl.DataFrame(found, schema=["patient_code", "local_day", "level_before", "level_after"], orient="row")
    types = {name: polars_type(COLUMNS[name].type) for name in PUBLISHED["level_shifts"].columns}
    day = pl.col("local_day").cast(pl.Int32).cast(pl.Date)
    return frame.with_columns(day).select(pl.col(name).cast(kind) for name, kind in types.items())
