"""Timing of beats: RR intervals, the usual interval, pauses, R-on-T, fast stretches, irregularity. No samples."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors.results import PAUSE_KINDS

USUAL_REACH_BEATS = 12
USUAL_STEP_BEATS = 4
SLAB_ROWS = 16_384
INTERPOLATED_LIMIT = 1.25  # of the usual interval
QT_AT_60_PER_MIN_MS = 400.0  # from memory: upper middle of normal heart-rate corrected QT, verify before relying on it
FAST = 0.88  # of the interval before the onset
MUCH_FASTER = 0.80
RAMP_BEATS = 3
FAST_RUN_MS = 650.0  # a longer stretch at under some 90 a minute is a change of rate; ours
LAGS_BEATS = (1, 2, 3)
JUMP = 0.08  # of the shorter interval
ESCAPE_LIMIT = 1.15  # of the usual interval


def rr_intervals_ms(
    segment: NDArray[np.integer], sample: NDArray[np.floating], fs_hz: float, has_gap_before: NDArray[np.bool_]
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """RR before and after each beat, ms, shape (n_beats,), NaN at the ends of a segment and across a gap."""
    before = np.full(sample.size, np.nan, dtype=np.float32)
    after = before.copy()
    if sample.size > 1:
        before[1:] = np.diff(sample)
        before *= np.float32(1000 / fs_hz)
        before[1:][np.diff(segment) != 0] = np.nan
        before[has_gap_before] = np.nan
        after[:-1] = before[1:]
    return before, after


def usual_rr_ms(before_ms: NDArray[np.float32], after_ms: NDArray[np.float32]) -> NDArray[np.float32]:
    """Usual interval near each beat, shape (n_beats,), ms; 800 ms when nothing is known.

    Median over about 12 beats on either side of the mean of the intervals before and after a beat: that mean stays at
    the sinus cycle in bigeminy with full pauses, where the median interval does not. Computed at every fourth beat
    and interpolated: rhythm changes more slowly than that.
    """
    return _usual(before_ms, after_ms, np.zeros(before_ms.size, dtype=bool))


def usual_rr_outside_ms(
    before_ms: NDArray[np.float32],
    after_ms: NDArray[np.float32],
    usual_ms: NDArray[np.float32],
    is_ectopic: NDArray[np.bool_],
) -> NDArray[np.float32]:
    """The same, with ectopic runs of three or more left out: what a beat is early against is not the run it begins."""
    around = np.concatenate([[False, False], is_ectopic, [False, False]])
    middle = around[1:-3] & around[2:-2] & around[3:-1]
    if not middle.any():
        return usual_ms
    in_run = _near_sum(middle, 2) > 0  # the beats of the run and one on each side
    return _usual(before_ms, after_ms, in_run)


def _usual(
    before_ms: NDArray[np.float32], after_ms: NDArray[np.float32], is_left_out: NDArray[np.bool_]
) -> NDArray[np.float32]:
    if before_ms.size == 0:
        return before_ms
    rr_ms = before_ms + after_ms
    rr_ms *= np.float32(0.5)
    if not is_left_out.all():
        rr_ms[is_left_out] = np.nan
    coarse = _median_of_known(rr_ms)
    is_known = ~np.isnan(coarse)
    if not is_known.any():
        return np.full(before_ms.size, 800.0, dtype=np.float32)
    index = np.arange(coarse.size + 1)
    coarse = np.interp(index, index[:-1][is_known], coarse[is_known]).astype(np.float32)
    part = np.arange(USUAL_STEP_BEATS, dtype=np.float32) / USUAL_STEP_BEATS
    between = coarse[:-1, None] + np.diff(coarse)[:, None] * part
    return between.ravel()[: before_ms.size].astype(np.float32, copy=False)


def _median_of_known(rr_ms: NDArray[np.floating]) -> NDArray[np.float32]:
    """Lower median of the known values around every USUAL_STEP_BEATS-th one, NaN where none is known."""
    reach, step = USUAL_REACH_BEATS, USUAL_STEP_BEATS
    edge = np.full(reach, np.nan, dtype=np.float32)
    windows = sliding_window_view(np.concatenate([edge, rr_ms, edge]), 2 * reach + 1)[::step]
    medians = np.empty(windows.shape[0], dtype=np.float32)
    for begin in range(0, medians.size, SLAB_ROWS):  # sorting copies: by slabs, memory stays small
        slab = np.sort(windows[begin : begin + SLAB_ROWS], axis=1)  # NaN sorts last
        middle = np.maximum(2 * reach - np.isnan(slab).sum(axis=1), 0) // 2
        medians[begin : begin + SLAB_ROWS] = slab[np.arange(middle.size), middle]
    return medians


def pause_kinds(
    before_ms: NDArray[np.float32],
    after_ms: NDArray[np.float32],
    usual_ms: NDArray[np.float32],
    is_premature: NDArray[np.bool_],
    tolerance_pct: float,
) -> NDArray[np.int8]:
    """Pause after each premature ectopic beat, index into PAUSE_KINDS, shape (n_beats,).

    Full: the two intervals around the beat fill two sinus cycles, short of them by at most `tolerance_pct` of one cycle
    (the tolerance is convention). Interpolated: they fill little more than one cycle. Reset: in between.
    """
    cycles = (before_ms + after_ms) / usual_ms
    kind = np.zeros(before_ms.size, dtype=np.int8)
    judged = is_premature & ~np.isnan(cycles)
    kind[judged] = PAUSE_KINDS.index("reset")
    kind[judged & (cycles >= 2 - tolerance_pct / 100)] = PAUSE_KINDS.index("full")
    kind[judged & (cycles <= INTERPOLATED_LIMIT)] = PAUSE_KINDS.index("interpolated")
    return kind


def r_on_t_index(coupling_ms: NDArray[np.float32], usual_ms: NDArray[np.float32]) -> NDArray[np.float32]:
    """Coupling interval over the QT interval estimated from the usual RR, shape (n_beats,); below 1 on the T wave.

    QT after Fridericia (cube root of RR). Index: Winkle 1977. NaN where there is no coupling interval.
    """
    return (coupling_ms / (QT_AT_60_PER_MIN_MS * np.cbrt(usual_ms / 1000))).astype(np.float32)


def earlier_rr_ms(usual_ms: NDArray[np.float32]) -> NDArray[np.float32]:
    """Usual interval before a change of rate: the one of 12 beats earlier, shape (n_beats,), ms."""
    lag = min(USUAL_REACH_BEATS, max(usual_ms.size - 1, 0))
    return np.concatenate([usual_ms[:1].repeat(lag), usual_ms[: usual_ms.size - lag]])


def fast_stretches(
    before_ms: NDArray[np.float32], reference_ms: NDArray[np.float32], is_onset: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Beats of a fast rhythm that begins suddenly, shape (n_beats,): from each onset until an interval is long again.

    The intervals stay under FAST of the one before the onset. A stretch of more than RAMP_BEATS counts only when it is
    fast in itself (FAST_RUN_MS) and much faster than before or ends in a jump; otherwise the rate merely rose. All
    onsets advance together, one beat a step.
    """
    onset = np.flatnonzero(is_onset)
    limit = FAST * reference_ms[onset]
    length = np.ones(onset.size, dtype=np.int64)
    total = before_ms[onset].astype(np.float64)
    active = np.arange(onset.size)
    while active.size:
        at = onset[active] + length[active]
        active, at = active[at < before_ms.size], at[at < before_ms.size]
        goes_on = before_ms[at] < limit[active]  # False for NaN
        active, at = active[goes_on], at[goes_on]
        length[active] += 1
        total[active] += before_ms[at]
    after = np.minimum(onset + length, before_ms.size - 1)
    jump = np.nan_to_num(before_ms[after] / before_ms[np.maximum(after - 1, 0)], nan=0.0) > 1.15
    mean_ms = total / length
    is_run = (mean_ms < FAST_RUN_MS) & ((mean_ms < MUCH_FASTER * reference_ms[onset]) | jump)
    counts = (length <= RAMP_BEATS) | is_run
    change = np.zeros(before_ms.size + 1, dtype=np.int32)
    np.add.at(change, onset[counts], 1)
    np.add.at(change, (onset + length)[counts], -1)
    return np.cumsum(change[:-1], dtype=np.int32) > 0


def irregularity(rr_ms: NDArray[np.float32], is_plain: NDArray[np.bool_], reach_beats: int = 24) -> NDArray[np.float32]:
    """Share of RR intervals near each beat that differ by over 8 % from an earlier one, shape (n_beats,).

    High in atrial fibrillation. The least share of the three for one, two and three intervals ago: a rhythm in which
    every second or third beat comes early repeats itself. Only intervals between plain (not ectopic) beats count; 0
    where fewer than 8 are near.
    """
    share, margin = np.empty(rr_ms.size, dtype=np.float32), reach_beats + max(LAGS_BEATS) + 1
    for begin in range(0, rr_ms.size, SLAB_ROWS):  # with all beats at once the tables between would outweigh the beats
        first, end = max(begin - margin, 0), begin + SLAB_ROWS
        near = _share_of_jumps(rr_ms[first : end + margin], is_plain[first : end + margin], reach_beats)
        share[begin:end] = near[begin - first : end - first]
    return share


def _share_of_jumps(rr_ms: NDArray[np.float32], is_plain: NDArray[np.bool_], reach_beats: int) -> NDArray[np.float32]:
    is_known = is_plain & ~np.isnan(rr_ms)
    is_known[1:] &= is_plain[:-1]
    least = np.ones(rr_ms.size, dtype=np.float32)
    for lag in LAGS_BEATS:
        jump, counted = np.zeros((2, rr_ms.size), dtype=bool)
        if rr_ms.size > lag:
            now, then = rr_ms[lag:], rr_ms[:-lag]
            counted[lag:] = is_known[lag:] & is_known[:-lag]
            jump[lag:] = np.abs(now - then) > JUMP * np.minimum(now, then)
        seen = _near_sum(counted, reach_beats)
        share = _near_sum(jump & counted, reach_beats).astype(np.float32)
        share /= np.maximum(seen, 1)
        share[seen < 8] = 0
        np.minimum(least, share, out=least)
    return least


def _near_sum(flag: NDArray[np.bool_], reach: int) -> NDArray[np.int32]:
    """Flags set within `reach` beats of each beat, shape (n_beats,)."""
    total = np.zeros(flag.size + 2 * reach + 1, dtype=np.int32)
    np.cumsum(flag, out=total[reach + 1 : reach + 1 + flag.size])
    total[reach + 1 + flag.size :] = total[reach + flag.size]
    return total[2 * reach + 1 :] - total[: flag.size]
