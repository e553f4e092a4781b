"""The `rate_by_clock_hour` table: mean heart rate before and after a therapy event, hour by hour of the day."""

from __future__ import annotations

import polars as pl

from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED


def rate_by_clock_hour(cells: pl.DataFrame) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["rate_by_clock_hour"]` from the hours of both periods' valid days.

    Days weigh by their analysable time within the hour; hours without a rate on a side have NULL there.
    """
    known = cells.filter(pl.col("mean_rate_bpm").is_not_null()).with_columns(hours=pl.col("analysable_s") / 3600)
    sums: dict[str, pl.Expr] = {}
    for side, name in enumerate(("baseline", "after")):
        of_side = pl.col("side") == side
        hours = pl.col("hours").filter(of_side).sum()
        beats = (pl.col("mean_rate_bpm") * pl.col("hours")).filter(of_side).sum()
        sums |= {f"{name}_analysable_h": hours, f"{name}_rate_bpm": pl.when(hours > 0).then(beats / hours)}
    described = PUBLISHED["rate_by_clock_hour"]
    table = known.group_by(described.key).agg(**sums).sort(described.key)
    return table.select(pl.col(name).cast(polars_type(COLUMNS[name].type)) for name in described.columns)
