"""Which time is analysable: flat, rail, missing, lead-off and noisy stretches, from the blocks of all chunks."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import qrs
from detectors.chunks import Blocks
from detectors.results import QualityWindows
from detectors.signal import WORKING_FS_HZ

NOISE_REACH_BLOCKS = 3  # 10.8 s in all
NOISE_LIMIT = 0.35  # of the QRS level, noise energy between beats


class SegmentBlocks(NamedTuple):
    """Blocks of one segment with the reason why each is not analysable."""

    reason: NDArray[np.str_]  # shape (n_blocks,), '' when analysable
    n_samples: int


def judge(blocks: Blocks, n_samples: int) -> SegmentBlocks:
    """Reason per block, '' when the block is analysable."""
    reason = np.full(blocks.is_flat.size, "", dtype="<U8")
    reason[_noisy(blocks)] = "noise"
    reason[blocks.is_flat] = "flat"
    reason[blocks.is_rail] = "rail"
    reason[blocks.is_missing] = "missing"
    return SegmentBlocks(reason, n_samples)


def _noisy(blocks: Blocks) -> NDArray[np.bool_]:
    noise = np.nan_to_num(blocks.noise, nan=0.0)
    known = ~np.isnan(blocks.noise)
    near = _near_mean(noise, known, NOISE_REACH_BLOCKS)
    return np.isinf(blocks.level) | (near > NOISE_LIMIT * blocks.level)


def _near_mean(values: NDArray[np.float32], known: NDArray[np.bool_], reach: int) -> NDArray[np.float64]:
    total = np.concatenate([[0.0], np.cumsum(values, dtype=np.float64)])
    count = np.concatenate([[0], np.cumsum(known)])
    index = np.arange(values.size)
    low, high = np.maximum(index - reach, 0), np.minimum(index + reach + 1, values.size)
    return (total[high] - total[low]) / np.maximum(count[high] - count[low], 1)


def windows(judged: list[SegmentBlocks], fs_hz: float) -> QualityWindows:
    """Stretches of equal reason, in samples."""
    rows: list[tuple[int, int, int, str]] = []
    for number, (reason, n_samples) in enumerate(judged):
        if reason.size == 0:
            if n_samples:
                rows.append((number, 0, n_samples - 1, "missing"))
            continue
        change = np.flatnonzero(reason[1:] != reason[:-1]) + 1
        first = np.concatenate([[0], change])
        last = np.concatenate([change, [reason.size]])
        for a, b in zip(first, last, strict=True):
            if reason[a]:
                begin, end = block_edge(a, fs_hz, n_samples), block_edge(b, fs_hz, n_samples)
                end = n_samples if b == reason.size else end
                rows.append((number, begin, end - 1, str(reason[a])))
    columns = list(zip(*rows, strict=True)) if rows else [(), (), (), ()]
    return QualityWindows(
        np.array(columns[0], dtype=np.int16),
        np.array(columns[1], dtype=np.int64),
        np.array(columns[2], dtype=np.int64),
        np.array(columns[3], dtype="<U8"),
    )


def block_edge(block: int, fs_hz: float, n_samples: int) -> int:
    """First stored sample of a block."""
    return min(int(np.ceil(block * qrs.BLOCK * fs_hz / WORKING_FS_HZ)), n_samples)


def analysable_s(judged: list[SegmentBlocks], bad: QualityWindows, fs_hz: float) -> float:
    """Seconds outside all bad windows."""
    return (sum(s.n_samples for s in judged) - int((bad.last_sample - bad.first_sample + 1).sum())) / fs_hz


def no_blocks() -> Blocks:
    """Quality of a segment too short for one working sample."""
    flag, number = np.zeros(0, dtype=bool), np.zeros(0, dtype=np.float32)
    return Blocks(flag, flag, flag, number, number)


def join(parts: list[Blocks]) -> Blocks:
    """Blocks of consecutive chunks as one."""
    return Blocks(*(np.concatenate(column) for column in zip(*parts, strict=True))) if parts else no_blocks()


def is_outside(bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.bool_]:
    """True for every beat that lies in no bad window, shape (n_beats,)."""
    return _window_before(bad, segment, sample) < 0


def has_gap_before(bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.bool_]:
    """True where a window without signal lies between a beat and the one before it, shape (n_beats,)."""
    silent = QualityWindows(*(column[bad.quality_reason != "noise"] for column in bad))
    ended = np.searchsorted(_key(silent.segment, silent.last_sample), _key(segment, sample))
    return np.concatenate([[False], np.diff(ended) > 0]) if sample.size else np.zeros(0, dtype=bool)


def _window_before(bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.int64]:
    """Row of the bad window that holds each beat, -1 for none."""
    if bad.segment.size == 0:
        return np.full(sample.size, -1, dtype=np.int64)
    row = np.searchsorted(_key(bad.segment, bad.first_sample), _key(segment, sample), side="right") - 1
    near = np.maximum(row, 0)
    holds = (row >= 0) & (bad.segment[near] == segment) & (sample <= bad.last_sample[near])
    return np.where(holds, row, -1)


def _key(segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.int64]:
    return segment.astype(np.int64) * (1 << 40) + sample
