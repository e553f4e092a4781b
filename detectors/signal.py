"""From stored counts to the working signal: one rate, millivolts, exact wherever a chunk begins.

The working signal is the average over consecutive boxes of 8 ms, whatever the stored rate. A box average needs no
filter state, so a value depends on its own samples only and cutting a segment anywhere cannot change it.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

WORKING_FS_HZ = 125.0
LOWEST_FS_HZ = 100.0
HIGHEST_FS_HZ = 4000.0
PIECE = 32_768  # working samples worked off at a time: they stay in the cache


def check_rate(fs_hz: float) -> float:
    """Return `fs_hz` as a float; ValueError unless it is a finite number from 100 to 4000 Hz."""
    if not (isinstance(fs_hz, int | float | np.number) and LOWEST_FS_HZ <= float(fs_hz) <= HIGHEST_FS_HZ):
        raise ValueError(
            f"fs_hz is {fs_hz!r}; expected samples per second from {LOWEST_FS_HZ:g} to {HIGHEST_FS_HZ:g} Hz "
            "(the detectors are not defined for slower or faster signals; resample first)"
        )
    return float(fs_hz)


def check_signal(ecg_mv: NDArray[np.floating]) -> NDArray[np.float64]:
    """Return a lead as float64, shape (n_samples,), mV; ValueError for anything that is not one lead of numbers."""
    signal = np.asarray(ecg_mv)
    if signal.ndim != 1:
        raise ValueError(f"ecg_mv has shape {signal.shape}; expected one lead, shape (n_samples,)")
    if signal.dtype.kind not in "fiu":
        raise ValueError(f"ecg_mv has dtype {signal.dtype}; expected numbers in mV, NaN where samples are missing")
    return signal.astype(np.float64, copy=False)


def working_length(n_samples: int, fs_hz: float) -> int:
    """Number of whole working samples that `n_samples` stored samples hold."""
    return int(n_samples * WORKING_FS_HZ / fs_hz + 1e-9)


def working_to_sample(working: NDArray[np.floating], fs_hz: float) -> NDArray[np.float64]:
    """Position in stored samples of the middle of working sample `working` (positions may be fractional)."""
    ratio = fs_hz / WORKING_FS_HZ
    return (np.asarray(working, dtype=np.float64) + 0.5) * ratio - 0.5


def stored_span(first: int, last: int, fs_hz: float, n_samples: int) -> tuple[int, int]:
    """Half-open range of stored samples that working samples `first` (included) to `last` (excluded) need."""
    ratio = fs_hz / WORKING_FS_HZ
    begin = math.floor(first * ratio)
    end = math.ceil(last * ratio - 1e-9) + 1
    return min(begin, n_samples), min(end, n_samples)


def box_averages(counts: NDArray[np.int16], first: int, last: int, fs_hz: float, gain: float) -> NDArray[np.float32]:
    """Average stored counts over boxes of 8 ms, times `gain`.

    Parameters
    ----------
    counts : shape (n,), int16, the samples of `stored_span(first, last, ...)`
    first, last : working samples wanted, half-open, counted from the begin of the segment

    gain : millivolts per count; the level of 0 mV is left where it is

    Returns shape (last - first,), float32, mV. Below 125 Hz a box is shorter than a sample and takes its value.
    """
    ratio = fs_hz / WORKING_FS_HZ
    if ratio == int(ratio):
        return _whole_boxes(counts, int(ratio), last - first, gain)
    edges = np.arange(first, last + 1, dtype=np.float64) * ratio
    whole = np.floor(edges).astype(np.int64)
    part = edges - whole
    at = whole - math.floor(first * ratio)
    sums = np.zeros(counts.size + 1, dtype=np.int64)
    np.cumsum(counts, dtype=np.int64, out=sums[1:])
    cut = part * counts.take(at, mode="clip")
    boxes = (np.diff(sums.take(at, mode="clip")) + (cut[1:] - cut[:-1])) * (gain / ratio)
    return boxes.astype(np.float32)


def _whole_boxes(counts: NDArray[np.int16], size: int, n_boxes: int, gain: float) -> NDArray[np.float32]:
    counts = counts[: n_boxes * size]
    if size == 1:
        return counts * np.float32(gain)
    boxes, numbers = np.empty(n_boxes, dtype=np.float32), np.empty(min(PIECE, n_boxes) * size, dtype=np.float32)
    for begin in range(0, n_boxes, PIECE):
        piece = boxes[begin : begin + PIECE]
        part = numbers[: piece.size * size]
        part[:] = counts[begin * size : (begin + piece.size) * size]  # adding numbers of one type is twice as fast
        np.add(part[0::size], part[1::size], out=piece)
        for offset in range(2, size):
            piece += part[offset::size]
        piece *= np.float32(gain / size)
    return boxes


MISSING_COUNT = -(2**15)


def to_counts(ecg_mv: NDArray[np.float64]) -> tuple[NDArray[np.int16], float]:
    """A lead in mV as int16 counts and the millivolts of a count; what is not finite becomes MISSING_COUNT."""
    is_known = np.isfinite(ecg_mv)
    largest = np.abs(ecg_mv, where=is_known, out=np.zeros_like(ecg_mv)).max(initial=0.0)
    mv_per_count = largest / 32_000 if largest > 0 else 1.0
    counts = np.full(ecg_mv.shape, MISSING_COUNT, dtype=np.int16)
    counts[is_known] = np.rint(ecg_mv[is_known] / mv_per_count).astype(np.int16)
    return counts, float(mv_per_count)
