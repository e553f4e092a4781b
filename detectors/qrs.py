"""Where the QRS complexes are: slope energy, a level that follows the signal, T-wave and gap rules.

Everything has a bounded reach in time (see GUARD_S), so chunks with that much overlap give the same beats as one long
read. After Pan & Tompkins, IEEE Trans Biomed Eng 1985;32:230 (doi:10.1109/TBME.1985.325532). Differs from it: second
difference instead of band-pass and derivative, absolute value instead of square, the level is a median of block
maxima on both sides instead of a running estimate, so that one huge beat or a burst does not deafen the detector.
"""

from __future__ import annotations

from typing import NamedTuple, TypeVar

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors.signal import WORKING_FS_HZ

_Real = TypeVar("_Real", np.int64, np.float32)

LAG = 4  # working samples, 32 ms: the second difference passes 5 to 25 Hz and nothing of drift
REACH = LAG + 1  # working samples that the second difference of the smoothed signal needs on either side
PIECE = 32_768  # working samples worked off at a time
CELL = 4  # working samples per energy value, 32 ms
BLOCK_CELLS = 48  # energy values per block, 1.536 s: holds at least one beat above 39 a minute
BLOCK = CELL * BLOCK_CELLS  # working samples per block
LOCAL_BLOCKS = 7
LONG_BLOCKS = 41
LONG_STEP = 8  # blocks: how often the level of the minute is taken; chunks are cut on such steps
GUARD_S = 60.0

THRESHOLD = 0.32  # of the local level
LOW_THRESHOLD = 0.13  # of the local level, for the search in gaps
REFRACTORY_S = 0.24
TWIN_S = 0.20  # two bends of one wide QRS; no two beats come so close
SHORTEST_MS = 230.0  # before a beat that has less slope than the one before it: else it is the T wave of that one
T_WAVE_S = 0.38
T_WAVE_ENERGY = 0.8  # a T wave has less energy than this share of its QRS
T_WAVE_SHARPNESS = 0.45  # and bends less sharply than this share of its QRS
EARLY_S = 0.30  # so early, a weak second peak belongs to the same QRS
EARLY_ENERGY = 0.6
LONG_GAP = 1.5  # of the usual interval: any candidate in it is looked at
SHORT_GAP = 1.2  # of the usual interval: only sharp ones
SHARP_IN_GAP = 0.5
FAR_S = 10.0
T_WAVE_LATEST_S = 0.45
LEAST_T = 0.15  # energy of a T wave over its QRS where none stands out
UNUSUAL_T = 1.8  # times the usual: no T wave
FAR_WEAKER = 0.4  # slope energy over that of the weaker neighbour
WEAKER = 0.75


def bends(signal_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """How sharply the signal bends: absolute second difference of the smoothed signal, shape (n,), 4 mV, 0 at the ends.

    Worked off in pieces that stay in the processor's cache; values do not depend on them.
    """
    bend = np.zeros(signal_mv.size, dtype=np.float32)
    for begin in range(REACH, signal_mv.size - REACH, PIECE):
        end = min(begin + PIECE, signal_mv.size - REACH)
        np.abs(_slope(signal_mv[begin - REACH : end + REACH]), out=bend[begin:end])
    return bend


def slope_energy(bend: NDArray[np.float32]) -> NDArray[np.float32]:
    """Bends summed over 96 ms, once every 32 ms, shape (n // CELL,), 4 mV."""
    whole = bend[: bend.size // CELL * CELL]
    cells = whole[0::CELL] + whole[1::CELL]
    for offset in range(2, CELL):
        cells += whole[offset::CELL]
    energy = cells.copy()
    energy[1:] += cells[:-1]
    energy[:-1] += cells[1:]
    return energy


def _slope(signal_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Second difference over LAG of the signal smoothed with weights 1 2 1, shorter by REACH at both ends of the last axis."""
    pairs = signal_mv[..., :-1] + signal_mv[..., 1:]
    smooth = pairs[..., :-1] + pairs[..., 1:]
    rise = smooth[..., LAG:] - smooth[..., :-LAG]
    return rise[..., :-LAG] - rise[..., LAG:]


def block_level(energy: NDArray[np.float32], is_usable: NDArray[np.bool_]) -> NDArray[np.float32]:
    """QRS level per block: median of block maxima near by, held near the median of the minute.

    `energy` has whole blocks, `is_usable` shape (n_blocks,) leaves flat or missing blocks out. Returns shape
    (n_blocks,), mV.
    """
    highest = energy.reshape(-1, BLOCK_CELLS).max(axis=1)
    highest = np.where(is_usable, highest, np.float32(np.nan))
    near = _running_median(highest, LOCAL_BLOCKS)
    far = np.repeat(_running_median(highest, LONG_BLOCKS, LONG_STEP), LONG_STEP)[: near.size]
    return np.nan_to_num(np.clip(near, 0.4 * far, 2.5 * far), nan=np.inf)


def _running_median(values: NDArray[np.float32], width: int, step: int = 1) -> NDArray[np.float32]:
    """Median of the known values around every `step`-th one, NaN where none is known; the lower of two middle ones."""
    edge = np.full(width // 2, np.nan, dtype=np.float32)
    windows = np.sort(sliding_window_view(np.concatenate([edge, values, edge]), width)[::step], axis=1)
    middle = np.maximum(width - np.isnan(windows).sum(axis=1) - 1, 0) // 2  # NaN sorts last
    return windows[np.arange(middle.size), middle]


class Peaks(NamedTuple):
    """Candidates: local maxima of the energy. Arrays of shape (n_peaks,)."""

    cell: NDArray[np.int64]
    energy: NDArray[np.float32]
    share: NDArray[np.float32]  # energy over the local level
    sharpness: NDArray[
        np.float32
    ]  # largest second difference over 16 ms near by, mV: high for QRS, low for T and P waves


def peaks(signal_mv: NDArray[np.float32], energy: NDArray[np.float32], level: NDArray[np.float32]) -> Peaks:
    """Local maxima of the energy above the low threshold."""
    is_high = (energy.reshape(-1, BLOCK_CELLS) > (level * np.float32(LOW_THRESHOLD))[:, None]).ravel()
    is_peak = is_high[1:-1] & (energy[1:-1] > energy[:-2])
    is_peak &= energy[1:-1] >= energy[2:]
    cell = np.flatnonzero(is_peak) + 1
    height = energy[cell]
    return Peaks(cell, height, height / level[cell // BLOCK_CELLS], _sharpness(signal_mv, cell))


def _sharpness(signal_mv: NDArray[np.float32], cell: NDArray[np.int64]) -> NDArray[np.float32]:
    rows = sliding_window_view(signal_mv, 24)[np.clip(cell * CELL + CELL // 2 - 12, 0, signal_mv.size - 24)]
    return np.abs(rows[:, 2:-2] + rows[:, 2:-2] - rows[:, :-4] - rows[:, 4:]).max(axis=1, initial=0)


def choose(candidates: Peaks) -> NDArray[np.int64]:
    """Indices of the candidates that are QRS complexes, ascending."""
    beat = np.flatnonzero(candidates.share > THRESHOLD)
    beat = _without_weaker_neighbours(candidates, beat)
    for _ in range(2):
        n_before = beat.size
        beat = _with_gaps_searched(candidates, beat)
        if beat.size == n_before:
            break
    return beat


def _without_weaker_neighbours(candidates: Peaks, beat: NDArray[np.int64]) -> NDArray[np.int64]:
    """Drop what is too close to a stronger candidate, and T waves; three rounds, each looking at neighbours only."""
    for _ in range(3):
        if beat.size < 2:
            break
        gap_s = np.diff(candidates.cell[beat]) * (CELL / WORKING_FS_HZ)
        energy, sharpness = candidates.energy[beat], candidates.sharpness[beat]
        strength = energy * sharpness
        later_is_weaker = strength[1:] < strength[:-1]
        close = gap_s < REFRACTORY_S
        t_wave = _is_t_wave(gap_s, energy[1:] / energy[:-1], sharpness[1:] / sharpness[:-1])
        drop = np.zeros(beat.size, dtype=bool)
        drop[1:] |= (close & later_is_weaker) | t_wave
        drop[:-1] |= close & ~later_is_weaker
        if not drop.any():
            break
        beat = beat[~drop]
    return beat


def _is_t_wave(
    after_s: NDArray[np.floating], energy: NDArray[np.float32], sharpness: NDArray[np.float32]
) -> NDArray[np.bool_]:
    """T waves among candidates `after_s` after a QRS, with their energy and sharpness over those of the QRS."""
    blunt = (after_s < T_WAVE_S) & (sharpness < T_WAVE_SHARPNESS) & (energy < T_WAVE_ENERGY)
    return blunt | ((after_s < EARLY_S) & (energy < EARLY_ENERGY))


def _with_gaps_searched(candidates: Peaks, beat: NDArray[np.int64]) -> NDArray[np.int64]:
    """Add the strongest low candidate of every gap that is half again as long as its neighbours."""
    if beat.size < 4:
        return beat
    cell = candidates.cell[beat]
    gap = np.diff(cell)
    usual = _local_median(gap, gap)
    slot = _last_beat(beat, candidates.cell.size)
    inside = (slot >= 0) & (slot < gap.size)
    inside[inside] = gap[slot[inside]] > SHORT_GAP * usual[slot[inside]]
    low = np.flatnonzero(inside)
    if low.size == 0:
        return beat
    slot = slot[low]
    after_s = (candidates.cell[low] - cell[slot]) * (CELL / WORKING_FS_HZ)
    before_s = (cell[slot + 1] - candidates.cell[low]) * (CELL / WORKING_FS_HZ)
    energy = candidates.energy[low] / candidates.energy[beat[slot]]
    sharpness = candidates.sharpness[low] / candidates.sharpness[beat[slot]]
    is_wanted = (sharpness > SHARP_IN_GAP) | (gap[slot] > LONG_GAP * usual[slot])
    follows_early = gap[np.maximum(slot - 1, 0)] < 0.8 * usual[slot]
    is_usual_t = (energy < UNUSUAL_T * _usual_t_wave(candidates, beat)[slot]) | follows_early
    is_wanted &= (after_s > REFRACTORY_S) & (before_s > REFRACTORY_S)
    is_wanted &= ~(_is_t_wave(after_s, energy, sharpness) & is_usual_t)
    low, slot = low[is_wanted], slot[is_wanted]
    order = np.lexsort((candidates.energy[low], slot))
    is_strongest = np.diff(slot[order], append=-1) != 0
    return np.sort(np.concatenate([beat, low[order][is_strongest]]))


def _last_beat(beat: NDArray[np.int64], n_candidates: int) -> NDArray[np.int64]:
    """Number of the last beat at or before each candidate, -1 before the first."""
    slot = np.full(n_candidates, 0)
    slot[beat] = 1
    slot = np.cumsum(slot)
    slot -= 1
    return slot


def _usual_t_wave(candidates: Peaks, beat: NDArray[np.int64]) -> NDArray[np.float32]:
    """Energy of the T waves near each gap over their QRS: what an ectopic beat that looks like one must exceed."""
    slot = _last_beat(beat, candidates.cell.size)
    after_s = (candidates.cell - candidates.cell[beat[slot]]) * (CELL / WORKING_FS_HZ)
    is_t = (slot >= 0) & (after_s > 0) & (after_s < T_WAVE_LATEST_S)
    strongest = np.maximum.reduceat(np.where(is_t, candidates.energy, np.float32(0)), beat)
    gap = np.diff(candidates.cell[beat])
    return _local_median(np.maximum(strongest / candidates.energy[beat], LEAST_T)[:-1], gap)


def _local_median(values: NDArray[_Real], gap: NDArray[np.int64]) -> NDArray[_Real]:
    """Median of each value and the two on either side, not across a gap of FAR_S: reach in time stays bounded."""
    index = np.arange(gap.size)
    is_far = gap > FAR_S * WORKING_FS_HZ / CELL
    first = np.maximum.accumulate(np.where(is_far, index, 0))
    last = np.minimum.accumulate(np.where(is_far, index, gap.size - 1)[::-1])[::-1]
    a, b, c, d, e = (values[np.clip(index + offset, first, last)] for offset in (-2, -1, 1, 2, 0))
    low, high = np.maximum(np.minimum(a, b), np.minimum(c, d)), np.minimum(np.maximum(a, b), np.maximum(c, d))
    return np.maximum(np.minimum(low, high), np.minimum(np.maximum(low, high), e))


def fiducials(bend: NDArray[np.float32], cell: NDArray[np.int64]) -> NDArray[np.float64]:
    """Working position of the steepest bend within 64 ms of each energy peak, by a parabola, shape (n_beats,)."""
    near = 2 * CELL
    begin = np.clip(cell * CELL + CELL // 2 - near, REACH + 1, bend.size - 2 * near - REACH - 2)
    rows = sliding_window_view(bend, 2 * near + 3)[begin - 1]  # from one before to one after the places looked at
    at = rows[:, 1:-1].argmax(axis=1)
    row = np.arange(at.size)
    left, middle, right = rows[row, at], rows[row, at + 1], rows[row, at + 2]
    curve = left - 2 * middle + right
    shift = np.divide(0.5 * (left - right), curve, out=np.zeros_like(curve), where=curve < 0)
    return begin + at + np.clip(shift, -0.5, 0.5).astype(np.float64)


def without_twins(working: NDArray[np.float64], energy: NDArray[np.float32]) -> NDArray[np.int64]:
    """Beats in order of their positions, without the weaker of two whose bends lie within one QRS of each other."""
    order = np.argsort(working, kind="stable")
    is_close = np.diff(working[order]) < TWIN_S * WORKING_FS_HZ
    later_is_weaker = np.diff(energy[order]) < 0
    drop = np.zeros(order.size, dtype=bool)
    drop[1:] |= is_close & later_is_weaker
    drop[:-1] |= is_close & ~later_is_weaker
    return order[~drop]


def is_t_wave(energy: NDArray[np.float32], before_ms: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Detections that follow a steeper one sooner than any beat could, judged once all are known, shape (n_beats,).

    Judged late, because they belong to the families by which the steeper one is known: dropped at once, those change.
    """
    is_weaker = np.diff(energy, prepend=0) < 0
    return is_weaker & (before_ms < SHORTEST_MS)


def is_interloper(
    energy: NDArray[np.float32],
    before_ms: NDArray[np.float32],
    after_ms: NDArray[np.float32],
    usual_ms: NDArray[np.float32],
    is_rare: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Detections that are no QRS, judged once all are known, shape (n_beats,).

    Only beats of rare shape: those off time with far less slope than both neighbours, and weak ones between
    neighbours that keep time without them (P and T waves, artefacts).
    """
    if energy.size < 3:
        return np.zeros(energy.size, dtype=bool)
    rare = np.flatnonzero(is_rare)
    last = energy.size - 1
    previous, following = np.where(rare > 0, rare - 1, 1), np.where(rare < last, rare + 1, last - 1)
    share = energy[rare] / np.minimum(energy[previous], energy[following])
    before, after = before_ms[rare] / usual_ms[rare], after_ms[rare] / usual_ms[rare]
    between = (before + after > 0.85) & (before + after < 1.2)
    on_time = (np.abs(before - 1) < 0.15) & (np.abs(after - 1) < 0.15)
    found = np.zeros(energy.size, dtype=bool)
    found[rare] = ((share < FAR_WEAKER) & ~on_time) | (between & (share < WEAKER))
    return found
