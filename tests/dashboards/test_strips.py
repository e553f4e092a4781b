"""ECG at paper scale."""

from __future__ import annotations

import re

import polars as pl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboards.strips import UNITS_PER_MM, draw_shapes, draw_strips


def strip(samples_mv, fs_hz=250.0, beats=(), classes=()) -> pl.DataFrame:
    return pl.DataFrame(
        {"samples_mv": [samples_mv], "fs_hz": [fs_hz], "beat_samples": [list(beats)], "beat_classes": [list(classes)]},
        schema={
            "samples_mv": pl.List(pl.Float32),
            "fs_hz": pl.Float64,
            "beat_samples": pl.List(pl.Int64),
            "beat_classes": pl.List(pl.String),
        },
    )


def points(path: str) -> list[list[tuple[int, int]]]:
    """Walk a path of absolute starts and relative steps; return the points of each unbroken line."""
    lines = []
    for start in re.findall(r"M(-?\d+) (-?\d+)l([^M]*)", path):
        x, y = int(start[0]), int(start[1])
        line = [(x, y)]
        steps = [int(figure) for figure in start[2].split()]
        for dx, dy in zip(steps[::2], steps[1::2], strict=True):
            x, y = x + dx, y + dy
            line.append((x, y))
        lines.append(line)
    return lines


def test_paper_scale_is_25_mm_a_second_and_10_mm_a_millivolt():
    """One second is 25 mm wide and one millivolt 10 mm high."""
    (drawing,) = draw_strips(strip([0.0] * 300 + [1.0] * 200))
    ((*_, last),) = points(drawing.path)
    # common practice, no source: 25 mm/s and 10 mm/mV on ECG paper
    assert drawing.width == 2 * 25 * UNITS_PER_MM
    assert last[1] == -10 * UNITS_PER_MM
    assert last[0] == round(499 / 250 * 25 * UNITS_PER_MM)


@given(st.lists(st.floats(-3, 3, width=32), min_size=2, max_size=60))
def test_a_path_gives_the_samples_back(samples_mv):
    """Up to 250 samples a second every sample stands in the path, to a hundredth of a millivolt around the median."""
    (drawing,) = draw_strips(strip(samples_mv))
    ((*line,),) = points(drawing.path)
    median = pl.Series(samples_mv, dtype=pl.Float32).median()
    assert [x for x, _ in line] == list(range(len(samples_mv)))
    assert [-y / 100 for _, y in line] == pytest.approx([value - median for value in samples_mv], abs=0.0051)


@given(st.lists(st.floats(-3, 3, width=32), min_size=64, max_size=200))
def test_fast_sampling_keeps_the_extremes(samples_mv):
    """At 2,000 samples a second the drawing keeps the highest and the lowest value and stays small."""
    (drawing,) = draw_strips(strip(samples_mv, fs_hz=2000.0))
    heights = [-y / 100 for line in points(drawing.path) for _, y in line]
    median = pl.Series(samples_mv, dtype=pl.Float32).median()
    assert max(heights) == pytest.approx(max(samples_mv) - median, abs=0.0051)
    assert min(heights) == pytest.approx(min(samples_mv) - median, abs=0.0051)


def test_missing_samples_lift_the_pen():
    """A stretch without samples is not bridged by a line."""
    (drawing,) = draw_strips(strip([0.0] * 50 + [None] * 30 + [0.0] * 50))
    assert [(line[0][0], line[-1][0]) for line in points(drawing.path)] == [(0, 49), (80, 129)]


def test_letters_stand_at_the_r_peaks():
    """Class letters take the place of their beats in time."""
    (drawing,) = draw_strips(strip([0.0] * 500, beats=(125, 375), classes=("N", "V")))
    assert [(mark.x, mark.beat_class) for mark in drawing.marks] == [(125, "N"), (375, "V")]


def test_a_trace_beyond_the_box_is_said_to_be_cut():
    """A 20 mV artefact does not make the strip metres high, and the drawing says that it is cut."""
    (drawing,) = draw_strips(strip([0.0] * 499 + [20.0]))
    assert drawing.is_cut and drawing.height < 80 * UNITS_PER_MM


def test_a_strip_without_any_sample_is_empty():
    """A strip of missing samples draws nothing and does not fail."""
    (drawing,) = draw_strips(strip([None] * 10))
    assert drawing.path == ""


def test_a_shape_is_as_long_as_its_samples_say():
    """Ninety values at 125 a second are 0.72 s: 18 mm."""
    (drawing,) = draw_shapes(pl.DataFrame({"shape_mv": [[0.0] * 90]}))
    assert drawing.width == 18 * UNITS_PER_MM


def test_strips_drawn_together_are_drawn_as_if_alone():
    """A strip's path, box and marks do not depend on the strips beside it, whatever their rates and gaps."""
    rows = [
        strip([0.0, 1.0, None, None, None, None, 0.5, 0.2, 0.1], beats=(1,), classes=("V",)),
        strip([0.1, -0.4, 0.2] * 400, fs_hz=1000.0),
        strip([None] * 5),
        strip([0.3] * 40, fs_hz=180.0),
    ]
    assert draw_strips(pl.concat(rows)) == [drawing for row in rows for drawing in draw_strips(row)]
