"""Numbers that describe the shape of each beat, batched over beats as one 2-D array."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.signal import WORKING_FS_HZ

PAUSE_MS = 24.0  # the slope is 0 for so long at most where a QRS turns


def _at(ms: float) -> int:
    """Column of a shape that lies `ms` after the R peak."""
    return SHAPE_BEFORE + round(ms * WORKING_FS_HZ / 1000)


def amplitude_mv(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Main deflection against the level before the QRS, signed, of beats with shapes (n_beats, SHAPE_LENGTH), mV."""
    baseline = shape_mv[:, _at(-112) : _at(-64)].mean(axis=1)
    qrs = shape_mv[:, _at(-40) : _at(40) + 1] - baseline[:, None]
    highest, lowest = qrs.max(axis=1), qrs.min(axis=1)
    return np.where(highest >= -lowest, highest, lowest)


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

    From the steepest point outwards on both sides while the slope stays above 12 % of the steepest, pauses of up to 24 ms
    included; on values interpolated to 2 ms, within 120 ms before and 160 ms after the R peak. Meant for averages: noise
    widens it. The 12 % is ours; no standard fixes the onset of an automatically measured QRS.
    """
    step_ms = 2.0
    coarse_ms = np.arange(_at(-120), _at(160)) * (1000 / WORKING_FS_HZ)
    fine_ms = np.arange(coarse_ms[0], coarse_ms[-1], step_ms)
    width = np.zeros(shape_mv.shape[0], dtype=np.float32)
    for row, shape in enumerate(shape_mv):
        slope = np.abs(np.interp(fine_ms, coarse_ms[:-1] + 4, np.diff(shape[_at(-120) : _at(160)])))
        above = np.flatnonzero(slope > 0.12 * max(float(slope.max()), 1e-9))
        if above.size:
            part = np.cumsum(np.diff(above, prepend=above[0]) * step_ms > PAUSE_MS)
            mine = above[part == part[np.searchsorted(above, slope.argmax())]]
            width[row] = (mine[-1] - mine[0]) * step_ms
    return width
