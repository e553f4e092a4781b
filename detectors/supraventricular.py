"""Supraventricular beats: beats of normal shape that come early or without the sinus P wave, by rules.

Common practice, no source, for all of them; the limits are ours.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors import p_waves, timing
from detectors.timing import Timing
from detectors.ventricular import P_ROOM_MS

CLEARLY_EARLY = 0.80  # of the usual interval: a T wave may pass for the P wave
SHORTER = 0.95  # of the interval before: a beat with another P wave comes early
NOT_LATER = 1.10  # of the interval before: another rhythm takes over; later is a pause
RHYTHM_BEATS = 3  # with another P wave
NEAR_BEATS = 100  # among which another P wave is the exception
BEGINS = 0.88  # of the interval before: a group begins
ENDS = 1.15  # of the interval before: a group ends
P_EVIDENCE = np.array([0, -4, 1, 4], dtype=np.int8)  # that a beat is ectopic: HIDDEN, SAME, NEITHER, OTHER
ENOUGH = 2  # evidence in sum over a group
RELIABLE = 0.8  # of late beats, or of those around groups, that show the sinus P wave: else its absence says nothing
SHARED = 0.5  # of early beats with the P wave of the late ones: it is a flutter wave
LATE_BEATS = 20  # near by: fewer do not tell of fibrillation


def supraventricular(beat_timing: Timing, p_wave: NDArray[np.int8], is_v: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Beats of normal shape that the sinus node did not begin, shape (n_beats,).

    `p_wave` holds marks of `p_waves`. Early beats and the fast rhythms that such a beat begins, where early means
    against the intervals near by or those of 12 beats ago, and at once: not a rate that rises beat by beat, not the beat
    after a ventricular one, and not a little early behind the sinus P wave. Beats with another P wave or none. Neither
    where the rhythm is irregular as in atrial fibrillation, unless late beats show the sinus P wave.
    """
    is_regular = timing.is_regular(beat_timing, ~is_v)
    irregular = np.flatnonzero(~is_regular)
    is_regular[irregular] = _are_among_sinus_beats(irregular, beat_timing, p_wave, is_v)
    is_told = is_regular & ~is_v & ((beat_timing.before_ms > P_ROOM_MS) | (p_wave == p_waves.OTHER))
    mark = np.where(is_told, p_wave, p_waves.HIDDEN)
    follows_v = np.concatenate([is_v[:1], is_v[:-1]])
    is_sinus = (mark == p_waves.SAME) & (beat_timing.before > CLEARLY_EARLY)
    may_begin = ~is_v & ~follows_v & timing.is_early(beat_timing) & ~is_sinus
    found = timing.fast(beat_timing, is_regular, may_begin, ~is_v)
    found |= _from_elsewhere(beat_timing.before_ms, mark)
    found |= _in_groups(beat_timing.before_ms, mark, is_v | ~is_regular)
    return found & ~is_v


def _are_among_sinus_beats(
    beat: NDArray[np.int64], beat_timing: Timing, p_wave: NDArray[np.int8], is_v: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Beats near which nearly all late ones show the sinus P wave and early ones do not: no fibrillation.

    In flutter the same atrial wave precedes late and early beats.
    """
    is_late = (beat_timing.before_ms > beat_timing.after_ms) & (beat_timing.before_ms > P_ROOM_MS) & ~is_v
    is_early = (beat_timing.before_ms < BEGINS * beat_timing.after_ms) & ~is_v
    is_same = p_wave == p_waves.SAME
    late, early, seen, shared = (
        _count_near(c, beat) for c in (is_late, is_early, is_late & is_same, is_early & is_same)
    )
    return (late >= LATE_BEATS) & (seen > RELIABLE * late) & (shared < SHARED * early)


def _from_elsewhere(before_ms: NDArray[np.float32], mark: NDArray[np.int8]) -> NDArray[np.bool_]:
    """Stretches with another P wave than most beats near by, that begin early or last for some beats."""
    first = np.flatnonzero(np.diff(mark, prepend=p_waves.HIDDEN))
    end = np.append(first[1:], mark.size)
    is_exception = _count_near(mark == p_waves.SAME, first) > _count_near(mark == p_waves.OTHER, first)
    shortening = before_ms[first] / before_ms[np.maximum(first - 1, 0)]
    chosen = (shortening < SHORTER) | (end - first >= RHYTHM_BEATS) & (shortening < NOT_LATER)
    chosen &= (mark[first] == p_waves.OTHER) & is_exception
    return _inside(mark.size, first[chosen], end[chosen])


def _in_groups(before_ms: NDArray[np.float32], mark: NDArray[np.int8], breaks: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Groups that begin and end at once between sinus beats and lack their P wave, even where they outnumber those.

    Where the sinus node itself pauses, the beats between two pauses have its P wave.
    """
    if mark.size < 2:
        return np.zeros(mark.size, dtype=bool)
    ratio = np.full_like(before_ms, np.nan)
    np.divide(before_ms[1:], before_ms[:-1], out=ratio[1:])
    is_steady = (ratio > BEGINS) & (ratio < ENDS) & ~breaks  # False next to a gap
    edge = np.flatnonzero(~is_steady)
    first, end = edge[:-1], edge[1:]
    is_group = (ratio[first] <= BEGINS) & (ratio[end] >= ENDS)
    first, end = first[is_group], end[is_group]
    around = np.zeros(mark.size, dtype=bool)
    around[first - 1], around[end] = True, True
    seen = _count_near(around & (mark == p_waves.SAME), first)
    evidence = np.zeros(mark.size + 1, dtype=np.int32)
    np.cumsum(P_EVIDENCE[mark], out=evidence[1:])
    chosen = (seen > RELIABLE * _count_near(around, first)) & (evidence[end] - evidence[first] > ENOUGH)
    chosen &= (mark[first - 1] == p_waves.SAME) & (mark[end] == p_waves.SAME)
    return _inside(mark.size, first[chosen], end[chosen])


def _count_near(flag: NDArray[np.bool_], beat: NDArray[np.int64]) -> NDArray[np.int32]:
    """Flags set within NEAR_BEATS of the given beats, shape of `beat`."""
    before = np.zeros(flag.size + 1, dtype=np.int32)
    np.cumsum(flag, out=before[1:])
    return before[np.minimum(beat + NEAR_BEATS + 1, flag.size)] - before[np.maximum(beat - NEAR_BEATS, 0)]


def _inside(size: int, first: NDArray[np.int64], end: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Whether each of `size` beats lies in one of the half-open ranges, which do not overlap."""
    change = np.zeros(size + 1, dtype=np.int8)
    change[first] += 1
    change[end] -= 1
    return np.cumsum(change[:-1], dtype=np.int8) > 0
