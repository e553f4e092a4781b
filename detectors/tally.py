"""Quarter-hour tallies of one recording: what every burden, hour and wear day is later summed from.

Quarter hours, because every civil time zone is a whole number of them away from UTC.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.results import BEAT_CLASSES, Analysis

QUARTER_US = 900_000_000
SLAB_BEATS = 2**16
NOT_WORN = ("lead_off", "missing")


class QuarterHours(NamedTuple):
    """One entry per quarter of a UTC hour that holds samples. All arrays have shape (n_quarters,)."""

    quarter_us: NDArray[np.int64]  # start of the quarter, microseconds since 1970 UTC
    recorded_s: NDArray[np.float64]
    worn_s: NDArray[np.float64]
    analysable_s: NDArray[np.float64]
    n_beats: NDArray[np.int64]
    s_beats: NDArray[np.int64]
    v_beats: NDArray[np.int64]
    f_beats: NDArray[np.int64]
    q_beats: NDArray[np.int64]
    all_beats: NDArray[np.int64]
    rr_sum_s: NDArray[np.float64]
    rr_count: NDArray[np.int64]
    couplets: NDArray[np.int64]
    runs: NDArray[np.int64]
    sv_runs: NDArray[np.int64]
    pauses: NDArray[np.int64]
    longest_run_beats: NDArray[np.int64]
    fastest_run_bpm: NDArray[np.float64]  # NaN without a run
    longest_pause_ms: NDArray[np.float64]  # NaN without a pause
    bigeminy_s: NDArray[np.float64]
    trigeminy_s: NDArray[np.float64]
    irregular_s: NDArray[np.float64]


class FamilyQuarters(NamedTuple):
    """One entry per shape family and quarter of a UTC hour in which it has beats. Arrays have shape (n_entries,)."""

    quarter_us: NDArray[np.int64]  # start of the quarter, microseconds since 1970 UTC
    family: NDArray[np.int16]  # -1 for beats of no family
    beat_count: NDArray[np.int64]  # analysable beats
    n_beats: NDArray[np.int64]  # those of them that were found as N, and so on
    s_beats: NDArray[np.int64]
    v_beats: NDArray[np.int64]
    f_beats: NDArray[np.int64]
    q_beats: NDArray[np.int64]


def family_quarters(analysis: Analysis, segment_start_us: NDArray[np.int64]) -> FamilyQuarters:
    """Count the analysable beats of every family in every quarter of a UTC hour, all and by class.

    `segment_start_us` as for `quarter_hours`.
    """
    beats, n_columns = analysis.beats, len(analysis.families.beat_count) + 1
    clock = _Clock(segment_start_us, analysis.fs_hz)
    quarters = np.unique(_spread(*_recorded(analysis, clock))[0])
    count = np.zeros((len(quarters) * n_columns, len(BEAT_CLASSES)), dtype=np.int64)
    for rows in _slabs(len(beats.sample)):
        good = beats.is_analysable[rows]
        quarter = clock.quarter(beats.segment[rows][good], beats.sample[rows][good])
        cell = np.searchsorted(quarters, quarter) * n_columns + beats.family[rows][good] + 1
        for column, name in enumerate(BEAT_CLASSES):
            of_class = cell[beats.beat_class[rows][good] == name]
            count[:, column] += np.bincount(of_class, minlength=len(count))
    total = count.sum(axis=1)
    held = np.flatnonzero(total)
    family = (held % n_columns - 1).astype(np.int16)
    return FamilyQuarters(quarters[held // n_columns] * QUARTER_US, family, total[held], *count[held].T)


def quarter_hours(analysis: Analysis, segment_start_us: NDArray[np.int64]) -> QuarterHours:
    """Sum beats, episodes and quality of one recording over quarters of UTC hours.

    `segment_start_us` has shape (n_segments,): the instant of each segment's first sample, microseconds since 1970 UTC.
    Beats and episodes belong to the quarter of their first sample; seconds are split where a quarter ends.
    """
    clock = _Clock(segment_start_us, analysis.fs_hz)
    recorded = _recorded(analysis, clock)
    quarters = np.unique(_spread(*recorded)[0])
    book = _Book(quarters)

    quality, episodes = analysis.quality, analysis.episodes
    bad = clock.spans(quality.segment, quality.first_sample, quality.last_sample + 1)
    off = np.isin(quality.quality_reason, NOT_WORN)
    recorded_s = book.seconds(*recorded)

    def during(kind: str) -> NDArray[np.float64]:
        chosen = episodes.episode_kind == kind
        return book.seconds(
            *clock.spans(episodes.segment[chosen], episodes.first_sample[chosen], episodes.last_sample[chosen] + 1)
        )

    def begun(kind: str) -> NDArray[np.int64]:
        return np.flatnonzero(episodes.episode_kind == kind)

    starts = clock.quarter(episodes.segment, episodes.first_sample)
    runs, pauses = begun("run"), begun("pause")
    return QuarterHours(
        quarter_us=quarters * QUARTER_US,
        recorded_s=recorded_s,
        worn_s=_rest(recorded_s, book.seconds(bad[0][off], bad[1][off])),
        analysable_s=_rest(recorded_s, book.seconds(*bad)),
        **_beat_counts(analysis, clock, book),
        couplets=book.count(starts[begun("couplet")]),
        runs=book.count(starts[runs]),
        sv_runs=book.count(starts[begun("sv_run")]),
        pauses=book.count(starts[pauses]),
        longest_run_beats=np.nan_to_num(book.largest(starts[runs], episodes.beat_count[runs])).astype(np.int64),
        fastest_run_bpm=book.largest(starts[runs], episodes.rate_bpm[runs]),
        longest_pause_ms=book.largest(starts[pauses], episodes.duration_s[pauses] * 1000.0),
        bigeminy_s=during("bigeminy"),
        trigeminy_s=during("trigeminy"),
        irregular_s=during("irregular"),
    )


def _recorded(analysis: Analysis, clock: _Clock) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Begin and end of each segment."""
    segments = np.arange(len(analysis.segment_samples))
    return clock.spans(segments, np.zeros_like(segments), np.asarray(analysis.segment_samples))


def _slabs(n_beats: int) -> Iterator[slice]:
    """The beats so many at a time: columns of 64 bits for all of them would take more room than the beats."""
    return (slice(begin, begin + SLAB_BEATS) for begin in range(0, n_beats, SLAB_BEATS))


def _beat_counts(analysis: Analysis, clock: _Clock, book: _Book) -> dict[str, NDArray]:
    beats, measured = analysis.beats, rate_intervals(analysis)
    counts: dict[str, NDArray] = {f"{name.lower()}_beats": book.zeros() for name in BEAT_CLASSES}
    counts |= {"all_beats": book.zeros(), "rr_sum_s": book.zeros().astype(np.float64), "rr_count": book.zeros()}
    for rows in _slabs(len(beats.sample)):
        quarter = book.row(clock.quarter(beats.segment[rows], beats.sample[rows]))
        good, usable = beats.is_analysable[rows], measured[rows]
        for name in BEAT_CLASSES:
            counts[f"{name.lower()}_beats"] += book.count_rows(quarter[good & (beats.beat_class[rows] == name)])
        counts["all_beats"] += book.count_rows(quarter[good])
        counts["rr_sum_s"] += book.total_rows(quarter[usable], beats.rr_before_ms[rows][usable] / 1000.0)
        counts["rr_count"] += book.count_rows(quarter[usable])
    return counts


def rate_intervals(analysis: Analysis) -> NDArray[np.bool_]:
    """Tell for each beat whether the RR interval before it counts for the mean rate, shape (n_beats,).

    It counts when both of its beats are analysable and no bad window lies between them.
    """
    beats, quality = analysis.beats, analysis.quality
    windows, windows_before = _order(quality.segment, quality.first_sample), np.empty(len(beats.sample), dtype=np.int32)
    for rows in _slabs(len(beats.sample)):
        windows_before[rows] = np.searchsorted(windows, _order(beats.segment[rows], beats.sample[rows]))
    usable = beats.is_analysable & np.isfinite(beats.rr_before_ms)
    usable[1:] &= beats.is_analysable[:-1] & (windows_before[1:] == windows_before[:-1])
    return usable


def _order(segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.int64]:
    return (segment.astype(np.int64) << 48) + sample


def _rest(whole_s: NDArray[np.float64], part_s: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.maximum(whole_s - part_s, 0.0).round(6)


class _Clock:
    """Turns samples of a segment into instants."""

    def __init__(self, segment_start_us: NDArray[np.int64], fs_hz: float) -> None:
        self.start_us = np.asarray(segment_start_us, dtype=np.int64)
        self.sample_us = 1e6 / fs_hz

    def instant(self, segment: NDArray, sample: NDArray) -> NDArray[np.int64]:
        since_start = sample * self.sample_us
        instant = np.rint(since_start, out=since_start).astype(np.int64)
        instant += self.start_us[segment]
        return instant

    def quarter(self, segment: NDArray, sample: NDArray) -> NDArray[np.int64]:
        instant = self.instant(segment, sample)
        instant //= QUARTER_US
        return instant

    def spans(self, segment: NDArray, first: NDArray, end: NDArray) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        return self.instant(segment, first), self.instant(segment, end)


def _spread(start_us: NDArray[np.int64], end_us: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Split each span [start, end) at quarter limits: the quarters it touches and the seconds in each."""
    first, last = start_us // QUARTER_US, (end_us - 1) // QUARTER_US
    pieces = np.maximum(last - first + 1, 0)
    owner = np.repeat(np.arange(len(start_us)), pieces)
    quarter = first[owner] + np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    begin = np.maximum(start_us[owner], quarter * QUARTER_US)
    end = np.minimum(end_us[owner], (quarter + 1) * QUARTER_US)
    return quarter, (end - begin) / 1e6


class _Book:
    """Adds up over a fixed, sorted list of quarters."""

    def __init__(self, quarters: NDArray[np.int64]) -> None:
        self.quarters = quarters

    def zeros(self) -> NDArray[np.int64]:
        return np.zeros(len(self.quarters), dtype=np.int64)

    def count(self, quarter: NDArray[np.int64]) -> NDArray[np.int64]:
        return self.count_rows(self.row(quarter))

    def count_rows(self, row: NDArray[np.intp]) -> NDArray[np.int64]:
        return np.bincount(row, minlength=len(self.quarters)).astype(np.int64)

    def total_rows(self, row: NDArray[np.intp], amount: NDArray) -> NDArray[np.float64]:
        return np.bincount(row, weights=amount, minlength=len(self.quarters)).astype(np.float64)

    def seconds(self, start_us: NDArray[np.int64], end_us: NDArray[np.int64]) -> NDArray[np.float64]:
        quarter, seconds = _spread(start_us, end_us)
        return self.total_rows(self.row(quarter), seconds).round(6)

    def largest(self, quarter: NDArray[np.int64], value: NDArray) -> NDArray[np.float64]:
        best = np.full(len(self.quarters), np.nan)
        np.fmax.at(best, self.row(quarter), value)
        return best

    def row(self, quarter: NDArray[np.int64]) -> NDArray[np.intp]:
        return np.searchsorted(self.quarters, quarter)
