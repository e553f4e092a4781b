"""Episodes: couplets, runs, bigeminy, trigeminy, pauses and irregular stretches, from labelled beats."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.results import Episodes

IRREGULAR_SHARE = 0.55
IRREGULAR_MIN_BEATS = 30


class Rhythm(NamedTuple):
    """Labelled beats as episodes need them; only analysable beats, arrays of shape (n_beats,)."""

    segment: NDArray[np.int16]
    sample: NDArray[np.int64]
    beat_class: NDArray[np.str_]
    rr_before_ms: NDArray[np.float32]  # NaN where the beat before is not the neighbour in time
    irregularity: NDArray[np.float32]


class Span(NamedTuple):
    """Half-open ranges of beats. Arrays of shape (n_spans,)."""

    first: NDArray[np.int64]
    last: NDArray[np.int64]


def find_episodes(
    beats: Rhythm, *, fs_hz: float, bigeminy_min_cycles: int, trigeminy_min_cycles: int, pause_ms: float
) -> Episodes:
    """All episodes, ordered by segment and first sample; a couplet is exactly two V, a run three or more."""
    starts = np.isnan(beats.rr_before_ms)
    is_v, is_s = beats.beat_class == "V", beats.beat_class == "S"
    v_runs, s_runs = stretches(is_v, starts), stretches(is_s, starts)
    length = v_runs.last - v_runs.first
    is_pause = np.flatnonzero(beats.rr_before_ms >= pause_ms)
    found = [
        ("couplet", _where(v_runs, length == 2)),
        ("run", _where(v_runs, length >= 3)),
        ("sv_run", _where(s_runs, s_runs.last - s_runs.first >= 3)),
        ("bigeminy", _alternation(is_v, starts, 2, bigeminy_min_cycles)),
        ("trigeminy", _alternation(is_v, starts, 3, trigeminy_min_cycles)),
        ("pause", Span(is_pause - 1, is_pause + 1)),
        ("irregular", _irregular(beats, starts)),
    ]
    return _table(beats, found, fs_hz)


def stretches(flag: NDArray[np.bool_], starts: NDArray[np.bool_]) -> Span:
    """Unbroken stretches of flagged beats; a beat that starts anew begins a new stretch."""
    before = np.concatenate([[False], flag[:-1]])
    after = np.concatenate([flag[1:], [False]])
    next_starts = np.concatenate([starts[1:], [True]])
    first = np.flatnonzero(flag & (~before | starts))
    last = np.flatnonzero(flag & (~after | next_starts)) + 1
    return Span(first, last)


def _where(span: Span, keep: NDArray[np.bool_]) -> Span:
    return Span(span.first[keep], span.last[keep])


def _alternation(is_v: NDArray[np.bool_], starts: NDArray[np.bool_], cycle: int, min_cycles: int) -> Span:
    """Stretches in which a V comes exactly every `cycle` beats, at least `min_cycles` cycles long."""
    v = np.flatnonzero(is_v)
    if v.size < 2:
        return Span(v[:0], v[:0])
    breaks = np.searchsorted(np.flatnonzero(starts), v, side="right")
    linked = (np.diff(v) == cycle) & (np.diff(breaks) == 0)
    runs = stretches(linked, np.zeros(linked.size, dtype=bool))
    long_enough = runs.last - runs.first >= min_cycles
    return Span(v[runs.first[long_enough]], v[runs.last[long_enough]] + 1)


def _irregular(beats: Rhythm, starts: NDArray[np.bool_]) -> Span:
    span = stretches(beats.irregularity > IRREGULAR_SHARE, starts)
    return _where(span, span.last - span.first >= IRREGULAR_MIN_BEATS)


def _table(beats: Rhythm, found: list[tuple[str, Span]], fs_hz: float) -> Episodes:
    first = np.concatenate([span.first for _, span in found]).astype(np.int64)
    last = np.concatenate([span.last for _, span in found]).astype(np.int64) - 1
    kind = np.repeat([name for name, _ in found], [span.first.size for _, span in found]).astype("<U9")
    order = np.lexsort((kind, beats.sample[last], beats.sample[first], beats.segment[first]))
    first, last, kind = first[order], last[order], kind[order]
    duration_s = (beats.sample[last] - beats.sample[first]) / fs_hz
    count = last - first + 1
    rate = np.divide(60 * (count - 1), duration_s, out=np.zeros(count.size), where=duration_s > 0)
    return Episodes(
        kind, beats.segment[first], beats.sample[first], beats.sample[last], count, duration_s, rate.astype(np.float32)
    )
