"""Cutting a segment into chunks with guards, and finding beats and noise in one chunk.

A chunk is cut on whole blocks of the QRS level and read with a guard on both sides that is longer than the reach of
every rule, so that a beat is the same beat wherever the cuts fall and a beat near a cut is counted once.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors import qrs, signal
from detectors.results import SHAPE_AFTER_MS, SHAPE_BEFORE_MS, Segment
from detectors.signal import WORKING_FS_HZ

SHAPE_BEFORE = round(SHAPE_BEFORE_MS / 1000 * WORKING_FS_HZ)
SHAPE_AFTER = round(SHAPE_AFTER_MS / 1000 * WORKING_FS_HZ)
SHAPE_LENGTH = SHAPE_BEFORE + SHAPE_AFTER
MIDDLE = slice(SHAPE_BEFORE - 20, SHAPE_BEFORE + 26)  # columns that hold the QRS at any lag
CUT_STEP = qrs.BLOCK * qrs.LONG_STEP  # working samples: chunks and guards begin on such steps
GUARD = -(-round(qrs.GUARD_S * WORKING_FS_HZ) // CUT_STEP) * CUT_STEP
CLEAN = 0.25  # noise energy over the QRS level of beats that may found a family
FLAT_MV = 0.012  # a block that moves less than this is flat
DROPPED_MV = 0.8  # a block without QRS that moves more than this is no pause


class Scale(NamedTuple):
    """How stored counts become millivolts, and which counts are no measurement."""

    fs_hz: float
    mv_per_count: float
    count_at_zero_mv: float
    rails: tuple[int, int] | None
    missing_count: int | None


class Blocks(NamedTuple):
    """Signal quality per block of 1.536 s. Arrays of shape (n_blocks,)."""

    is_flat: NDArray[np.bool_]
    is_rail: NDArray[np.bool_]
    is_missing: NDArray[np.bool_]
    is_dropped: NDArray[np.bool_]  # the lead slides far without any QRS: the electrode let go
    noise: NDArray[np.float32]  # mean slope energy outside QRS complexes, mV, NaN when there is no such time
    level: NDArray[np.float32]  # QRS level, mV; inf where unknown

    def part(self, rows: slice) -> Blocks:
        """Some of the blocks, as views."""
        return Blocks(
            self.is_flat[rows],
            self.is_rail[rows],
            self.is_missing[rows],
            self.is_dropped[rows],
            self.noise[rows],
            self.level[rows],
        )


class ChunkBeats(NamedTuple):
    """Beats of one chunk. Arrays of shape (n_beats,)."""

    working: NDArray[np.float64]  # position in working samples from the begin of the segment
    energy: NDArray[np.float32]
    shape_mv: NDArray[np.float32]  # shape (n_beats, SHAPE_LENGTH)
    is_clean: NDArray[np.bool_]  # little noise near by

    def part(self, rows: slice) -> ChunkBeats:
        """Some of the beats, as views."""
        return ChunkBeats(self.working[rows], self.energy[rows], self.shape_mv[rows], self.is_clean[rows])


def check_scale(scale: Scale) -> None:
    """ValueError unless the scale turns counts into millivolts."""
    if not (np.isfinite(scale.mv_per_count) and scale.mv_per_count != 0):
        raise ValueError(f"mv_per_count is {scale.mv_per_count!r}; expected the millivolts of one count, not zero")
    if not np.isfinite(scale.count_at_zero_mv):
        raise ValueError(f"count_at_zero_mv is {scale.count_at_zero_mv!r}; expected the count that stands for 0 mV")


def join(parts: list[ChunkBeats]) -> ChunkBeats:
    """Beats of consecutive chunks as one."""
    return ChunkBeats(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def join_blocks(parts: list[Blocks]) -> Blocks:
    """Blocks of consecutive chunks as one; none for a segment shorter than a working sample."""
    if not parts:
        flag, number = np.empty(0, dtype=bool), np.empty(0, dtype=np.float32)
        return Blocks(flag, flag, flag, flag, number, number)
    return Blocks(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def cuts(n_samples: int, fs_hz: float, chunk_s: float) -> Iterator[tuple[int, int]]:
    """Half-open ranges of working samples that cover a segment; the last may be shorter and end inside a block."""
    n_working = signal.working_length(n_samples, fs_hz)
    step = max(1, round(chunk_s * WORKING_FS_HZ / CUT_STEP)) * CUT_STEP
    for begin in range(0, n_working, step):
        yield begin, min(begin + step, n_working)


def read_chunk(segment: Segment, begin: int, end: int, scale: Scale) -> tuple[ChunkBeats, Blocks]:
    """Beats and block quality of working samples `begin` to `end`; nothing of the guards is returned."""
    n_working = signal.working_length(segment.n_samples, scale.fs_hz)
    first, last = max(0, begin - GUARD), min(n_working, end + GUARD)
    span = signal.stored_span(first, last, scale.fs_hz, segment.n_samples)
    counts = segment.read(*span)
    flags = _flags(counts, first, last, span[0], scale)
    working_mv = signal.box_averages(_without_gaps(counts, scale), first, last, scale.fs_hz, scale.mv_per_count)
    framed = _framed(working_mv, flags.is_flat.size)
    found, blocks = _find(framed, flags)
    inner = slice((begin - first) // qrs.BLOCK, -(-(end - first) // qrs.BLOCK))
    mine = slice(*np.searchsorted(found.working, [begin - first, end - first]))
    shapes = _shapes(framed, found.working[mine])
    shapes -= np.float32(scale.count_at_zero_mv * scale.mv_per_count)
    beats = ChunkBeats(found.working[mine] + first, found.energy[mine], shapes, found.is_clean[mine])
    return beats, blocks.part(inner)


class _Beats(NamedTuple):
    working: NDArray[np.float64]
    energy: NDArray[np.float32]
    is_clean: NDArray[np.bool_]


def _find(framed: NDArray[np.float32], flags: _Flags) -> tuple[_Beats, Blocks]:
    """Beats, in order, and block quality of a framed signal; positions count from the begin of the signal."""
    signal_mv = framed[SHAPE_BEFORE + 1 : -SHAPE_AFTER - 2]
    is_silent = flags.is_flat | flags.is_rail | flags.is_missing
    bend = qrs.bends(signal_mv)
    energy = qrs.slope_energy(bend)
    _silence(energy, flags.is_missing)
    level = qrs.block_level(energy, ~is_silent)
    candidates = qrs.peaks(signal_mv, energy, level)
    beat = qrs.choose(candidates)
    cell = candidates.cell[beat]
    noise = np.where(is_silent, np.float32(np.nan), _noise(energy, cell, level.size))
    highest = energy.reshape(level.size, -1).max(axis=1)
    is_dropped = (highest < qrs.LOW_THRESHOLD * level) & (flags.range_mv > DROPPED_MV)
    block = cell // qrs.BLOCK_CELLS
    is_clean = np.nan_to_num(noise, nan=0.0)[block] < CLEAN * level[block]
    working = qrs.fiducials(bend, cell)
    one_each = qrs.without_twins(working, candidates.energy[beat])
    beats = _Beats(working[one_each], candidates.energy[beat][one_each], is_clean[one_each])
    return beats, Blocks(flags.is_flat, flags.is_rail, flags.is_missing, is_dropped, noise, level)


def _framed(signal_mv: NDArray[np.float32], n_blocks: int) -> NDArray[np.float32]:
    """The signal filled up to whole blocks, with room for a shape at either end, its outer values repeated."""
    begin, end = SHAPE_BEFORE + 1, SHAPE_BEFORE + 1 + signal_mv.size
    framed = np.empty(begin + n_blocks * qrs.BLOCK + SHAPE_AFTER + 2, dtype=np.float32)
    framed[:begin], framed[begin:end], framed[end:] = signal_mv[0], signal_mv, signal_mv[-1]
    return framed


def _silence(energy: NDArray[np.float32], is_missing: NDArray[np.bool_]) -> None:
    """No energy where samples are missing and two cells beyond: what fills the gap depends on where reading began."""
    for block in np.flatnonzero(is_missing):
        energy[max(block * qrs.BLOCK_CELLS - 2, 0) : (block + 1) * qrs.BLOCK_CELLS + 2] = 0


def _shapes(framed: NDArray[np.float32], working: NDArray[np.float64]) -> NDArray[np.float32]:
    """Stretch around each beat, shape (n_beats, SHAPE_LENGTH), from the signal with a frame on both sides.

    The middle, from which shapes are compared, lies at the beat's exact position by cubic interpolation; the rest at
    the nearest sample, which is good enough for an average.
    """
    whole = np.floor(working).astype(np.int64)
    part = (working - whole).astype(np.float32)[:, None]
    rows = sliding_window_view(framed, SHAPE_LENGTH + 3)[whole]
    weights = (
        -part * (part - 1) * (part - 2) / 6,
        (part + 1) * (part - 1) * (part - 2) / 2,
        -(part + 1) * part * (part - 2) / 2,
        (part + 1) * part * (part - 1) / 6,
    )
    middle = rows[:, MIDDLE] * weights[0]
    for shift in (1, 2, 3):
        middle += rows[:, MIDDLE.start + shift : MIDDLE.stop + shift] * weights[shift]
    shapes = rows[:, 1 : SHAPE_LENGTH + 1]
    shapes[:, MIDDLE] = middle
    return shapes


def _noise(energy: NDArray[np.float32], cell: NDArray[np.int64], n_blocks: int) -> NDArray[np.float32]:
    """Mean energy per block from 290 ms after each beat to 130 ms before the next, NaN where that is too little."""
    edges = np.zeros(energy.size + 14, dtype=np.int32)  # of the stretches around beats, 4 cells later than in `energy`
    edges[cell] = 1
    edges[cell + 14] -= 1
    outside = (np.cumsum(edges, dtype=np.int32)[4 : energy.size + 4] == 0).astype(np.float32)
    total = (energy * outside).reshape(n_blocks, -1).sum(axis=1)
    count = outside.reshape(n_blocks, -1).sum(axis=1)
    return np.divide(total, count, out=np.full(n_blocks, np.nan, dtype=np.float32), where=count > 5)


def _without_gaps(counts: NDArray[np.int16], scale: Scale) -> NDArray[np.int16]:
    """Missing counts replaced by the value before them, so that they make no edge."""
    if scale.missing_count is None:
        return counts
    missing = counts == scale.missing_count
    if not missing.any():
        return counts
    known = np.where(missing, 0, np.arange(counts.size))
    np.maximum.accumulate(known, out=known)
    filled = counts[known]
    filled[: int(np.argmin(missing))] = filled[int(np.argmin(missing))]
    return filled


class _Flags(NamedTuple):
    is_flat: NDArray[np.bool_]
    is_rail: NDArray[np.bool_]
    is_missing: NDArray[np.bool_]
    range_mv: NDArray[np.floating]


def _flags(counts: NDArray[np.int16], first: int, last: int, offset: int, scale: Scale) -> _Flags:
    """What the stored counts say per block of working samples `first` to `last`."""
    n_blocks = -(-(last - first) // qrs.BLOCK)
    begin = first + np.arange(n_blocks) * qrs.BLOCK
    edges = np.floor(begin * (scale.fs_hz / WORKING_FS_HZ)).astype(np.int64) - offset
    edges = np.minimum(edges, max(counts.size - 1, 0))
    lowest = np.minimum.reduceat(counts, edges).astype(np.int64)
    highest = np.maximum.reduceat(counts, edges).astype(np.int64)
    range_mv = (highest - lowest) * abs(scale.mv_per_count)
    is_missing = np.zeros(n_blocks, dtype=bool)
    if scale.missing_count is not None and lowest.min() <= scale.missing_count <= highest.max():
        is_missing = np.logical_or.reduceat(counts == scale.missing_count, edges)
    low, high = scale.rails if scale.rails is not None else (-(2**15), 2**15 - 1)
    is_rail = ((lowest <= low) | (highest >= high)) & ~is_missing
    return _Flags(range_mv < FLAT_MV, is_rail, is_missing, range_mv)
