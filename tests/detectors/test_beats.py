"""Beats gathered batch by batch."""

from __future__ import annotations

import tracemalloc

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from detectors import synthetic
from detectors.analyse import analyse_recording
from detectors.beats import FIRST_ROOM, Found, Growing
from detectors.results import Segment


def batch(first: int, n_beats: int) -> Found:
    number = np.arange(first, first + n_beats)
    kinds = ("int16", "float64", "float32", "int16", "int16", "float32", "int8", "float32", "float32")
    return Found(*((number + offset).astype(kind) for offset, kind in enumerate(kinds)))


@given(st.lists(st.integers(0, FIRST_ROOM), max_size=6), st.integers(0, 100))
def test_batches_stand_one_after_the_other(sizes: list[int], first: int) -> None:
    """However the beats are cut into batches, the columns hold them all, in order; `since` leaves out the first ones."""
    table = Growing()
    for begin, size in zip(np.cumsum([0, *sizes]), sizes, strict=False):
        table.append(batch(int(begin), size))
    n_beats, first = sum(sizes), min(first, sum(sizes))
    expected = batch(first, n_beats - first)
    for column, values in zip(table.since(first), expected, strict=True):
        assert column.dtype == values.dtype and column.tolist() == values.tolist()


def test_kept_beats_keep_all_their_columns() -> None:
    """Dropping beats drops the same rows of every column."""
    chosen = np.arange(50) % 3 != 1
    expected = [column[chosen].tolist() for column in batch(0, 50)]
    assert [column.tolist() for column in batch(0, 50).keep(chosen)] == expected


def test_memory_does_not_grow_with_the_samples() -> None:
    """Six more hours of signal raise the peak by less than half of what their samples would take: by their beats."""
    (hour,) = synthetic.recording(fs_hz=125, hours=1.0, seed=5)

    def read(begin: int, end: int) -> np.ndarray:
        return hour.counts[np.arange(begin, end) % hour.counts.size]

    def peak_bytes(hours: int) -> int:
        tracemalloc.start()
        analyse_recording(
            [Segment(hours * hour.counts.size, read)], fs_hz=125, mv_per_count=synthetic.MV_PER_COUNT, chunk_s=300
        )
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return peak

    peak_bytes(1)  # what is made once and kept
    short, long = peak_bytes(6), peak_bytes(12)
    assert long - short < 0.5 * 6 * hour.counts.nbytes
