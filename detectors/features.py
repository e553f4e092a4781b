"""Numbers that describe the shape of each beat, batched over beats as one 2-D array."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.signal import WORKING_FS_HZ

PAUSE_MS = 40.0  # the slope is low for so long at most where a QRS turns


def _at(ms: float) -> int:
    """Column of a shape that lies `ms` after the R peak."""
    return SHAPE_BEFORE + round(ms * WORKING_FS_HZ / 1000)


def amplitude_mv(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Main deflection against the level before the QRS, signed, of beats with shapes (n_beats, SHAPE_LENGTH), mV."""
    before = range(_at(-112), _at(-64))
    baseline = sum(shape_mv[:, column] for column in before) / np.float32(len(before))
    highest = lowest = shape_mv[:, _at(-40)]
    for column in range(_at(-32), _at(40) + 1):  # column by column: faster than reducing many short rows
        highest, lowest = np.maximum(highest, shape_mv[:, column]), np.minimum(lowest, shape_mv[:, column])
    highest, lowest = highest - baseline, lowest - baseline
    return np.where(highest >= -lowest, highest, lowest)


def qrs_and_t_mv(shape_mv: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Mean level of the QRS and peak of the T wave against the level before the QRS, signed, shape (n_beats,), mV."""
    baseline = np.median(shape_mv[:, _at(-112) : _at(-72)], axis=1)
    t_wave = shape_mv[:, _at(176) : _at(384)] - baseline[:, None]
    peak = np.take_along_axis(t_wave, np.abs(t_wave).argmax(axis=1)[:, None], axis=1)[:, 0]
    return shape_mv[:, _at(-96) : _at(112)].mean(axis=1) - baseline, peak


def spread_ms(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Four standard deviations of the squared slope in time, shape (n_beats,): a width that noise moves little.

    From 96 ms before to 112 ms after the R peak, so that the T wave before an early beat stays outside.
    """
    slope = np.diff(shape_mv[:, _at(-96) : _at(112)], axis=1)
    slope *= slope
    time = np.arange(slope.shape[1], dtype=np.float32) * np.float32(1000 / WORKING_FS_HZ)
    total = np.maximum(slope.sum(axis=1), 1e-12)
    mean = slope @ time / total
    variance = slope @ (time * time) / total - mean * mean
    return (4 * np.sqrt(np.maximum(variance, 0))).astype(np.float32)


def qrs_width_ms(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """QRS width of averaged beats, shape (n_families,), ms.

    From the steepest point outwards on both sides while the slope stays above 12 % of the steepest, pauses of up to
    48 ms included; on values interpolated to 2 ms, within 120 ms before and 160 ms after the R peak. Meant for
    averages: noise widens it. The 12 % is ours; no standard fixes the onset of an automatically measured QRS.
    """
    n_shapes, step_ms = shape_mv.shape[0], 2.0
    coarse = np.abs(np.diff(shape_mv[:, _at(-120) : _at(160)], axis=1))
    at = np.arange(0, coarse.shape[1] - 1, step_ms * WORKING_FS_HZ / 1000)
    whole, part = at.astype(np.int64), (at % 1).astype(np.float32)
    slope = coarse[:, whole] * (1 - part) + coarse[:, whole + 1] * part
    width = np.zeros(n_shapes, dtype=np.float32)
    for row, steepest in enumerate(slope.argmax(axis=1) if n_shapes else ()):
        above = np.flatnonzero(slope[row] > 0.12 * max(float(slope[row, steepest]), 1e-9))
        if above.size:
            part_of = np.cumsum(np.diff(above, prepend=above[0]) * step_ms > PAUSE_MS)
            mine = above[part_of == part_of[np.searchsorted(above, steepest)]]
            width[row] = (mine[-1] - mine[0]) * step_ms
    return width
