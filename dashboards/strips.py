"""ECG drawn to paper scale: numbers in, SVG path text out; the templates place the paths.

Drawing unit is 0.1 mm: at 25 mm/s one unit is 4 ms, at 10 mm/mV one unit is 0.01 mV (common practice for paper ECG).
"""

from __future__ import annotations

from typing import Any, NamedTuple

import polars as pl

UNITS_PER_MM = 10
UNITS_PER_S = 25 * UNITS_PER_MM
UNITS_PER_MV = 10 * UNITS_PER_MM
SHAPE_FS_HZ = 125.0
LETTER_ROOM = 6 * UNITS_PER_MM  # above the trace, for the class letters
GRID = 5 * UNITS_PER_MM  # heights are whole large squares
LOWEST, HIGHEST = -3 * UNITS_PER_MV, 4 * UNITS_PER_MV


class Mark(NamedTuple):
    """A beat's class letter at its place; `sample` counts from the strip's first."""

    x: int
    beat_class: str
    sample: int


class Drawing(NamedTuple):
    """One trace in drawing units: its path, its box, where 0 mV lies and the marks above it."""

    path: str
    width: int
    height: int
    zero_y: int
    marks: tuple[Mark, ...] = ()
    is_cut: bool = False  # part of the trace lies beyond the box


def draw_strips(strips: pl.DataFrame) -> list[Drawing]:
    """Return one drawing per row of `strips` (fs_hz, samples_mv, beat_samples, beat_classes).

    The median of a strip is taken as its 0 mV line. At most two points stand in a column of one unit, so that a fast
    sampled strip costs no more than its lowest and highest values.
    """
    if strips.is_empty():
        return []
    points = _points(strips.select("samples_mv", "fs_hz"))
    return [
        _drawing(path, low, high, round(len(row["samples_mv"]) / row["fs_hz"] * UNITS_PER_S), _marks(row))
        for row, (path, low, high) in zip(strips.iter_rows(named=True), points, strict=True)
    ]


def draw_shapes(families: pl.DataFrame) -> list[Drawing]:
    """Return one drawing per row of `families`: its averaged beat, SHAPE_FS_HZ values a second."""
    if families.is_empty():
        return []
    points = _points(families.select(samples_mv="shape_mv", fs_hz=pl.lit(SHAPE_FS_HZ)))
    widths = families["shape_mv"].list.len().fill_null(0)
    return [
        _drawing(path, low, high, round(length / SHAPE_FS_HZ * UNITS_PER_S), ())
        for length, (path, low, high) in zip(widths, points, strict=True)
    ]


def _points(traces: pl.DataFrame) -> list[tuple[str, int, int]]:
    """Return path text, lowest and highest y (mV units, upwards) of each row, computed for all rows at once."""
    long = (
        traces.lazy()
        .with_row_index("row")
        .with_columns(
            place=pl.int_ranges(pl.col("samples_mv").list.len()),
            mv=pl.col("samples_mv").list.eval(pl.element() - pl.element().median()),
        )
        .explode("place", "mv", empty_as_null=True)
        .select(
            "row",
            x=(pl.col("place") * UNITS_PER_S / pl.col("fs_hz")).round().cast(pl.Int32),
            y=(pl.col("mv") * UNITS_PER_MV).round().cast(pl.Int32),
        )
        .drop_nulls("y")
    )
    if traces.filter(pl.col("fs_hz") > UNITS_PER_S).height:
        long = long.filter(
            (pl.len().over("row", "x") <= 2)
            | (pl.col("y") == pl.col("y").min().over("row", "x"))
            | (pl.col("y") == pl.col("y").max().over("row", "x"))
        )
    return _paths(traces.height, long)


def _paths(count: int, long: pl.LazyFrame) -> list[tuple[str, int, int]]:
    """Join the points of each row into one path of relative steps; a step over missing samples lifts the pen."""
    step, rise = pl.col("x").diff(), -pl.col("y").diff()
    text = (
        pl.when(step.is_null() | (step > 2 * step.median().clip(1)))
        .then(pl.format("M{} {}l", "x", -pl.col("y")))
        .otherwise(pl.format("{} {} ", step, rise))
    )
    joined = long.group_by("row", maintain_order=True).agg(
        text.str.join("").alias("text"), low=pl.col("y").min(), high=pl.col("y").max()
    )
    found = {row: (path, low, high) for row, path, low, high in joined.collect().iter_rows()}
    return [found.get(row, ("", 0, 0)) for row in range(count)]


def _drawing(path: str, low: int, high: int, width: int, marks: tuple[Mark, ...]) -> Drawing:
    """Fit the box to the trace in whole large squares, between fixed limits."""
    bottom = max(min(low, -GRID), LOWEST)
    top = min(max(high, 2 * GRID), HIGHEST)
    below, above = -(bottom // GRID) * GRID, -(-top // GRID) * GRID
    return Drawing(path, width, below + above + LETTER_ROOM, above + LETTER_ROOM, marks, low < bottom or high > top)


def _marks(row: dict[str, Any]) -> tuple[Mark, ...]:
    pairs = zip(row["beat_samples"] or (), row["beat_classes"] or (), strict=True)
    return tuple(Mark(round(sample / row["fs_hz"] * UNITS_PER_S), beat_class, sample) for sample, beat_class in pairs)
