"""Numbers that describe the shape of each beat, batched over beats as one 2-D array."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.signal import WORKING_FS_HZ


def _at(ms: float) -> int:
    """Column of a shape that lies `ms` after the R peak."""
    return SHAPE_BEFORE + round(ms * WORKING_FS_HZ / 1000)


class Features(NamedTuple):
    """Shape of single beats. Arrays of shape (n_beats,), float32."""

    amplitude_mv: NDArray[np.float32]  # main deflection against the baseline before the QRS, signed
    spread_ms: NDArray[
        np.float32
    ]  # four standard deviations of the slope energy in time: a width that noise moves little
    area_mv_ms: NDArray[np.float32]  # signed area of the QRS
    t_wave_mv: NDArray[np.float32]  # mean level 240 to 400 ms after the R peak


def describe(shape_mv: NDArray[np.float32]) -> Features:
    """Features of beats with shapes (n_beats, SHAPE_LENGTH)."""
    baseline = shape_mv[:, _at(-112) : _at(-64)].mean(axis=1)
    qrs = shape_mv[:, _at(-80) : _at(80)] - baseline[:, None]
    at = np.abs(qrs[:, 5:-5]).argmax(axis=1) + 5
    amplitude = qrs[np.arange(qrs.shape[0]), at]
    return Features(
        amplitude,
        _spread_ms(shape_mv),
        qrs.sum(axis=1) * np.float32(1000 / WORKING_FS_HZ),
        shape_mv[:, _at(240) : _at(400)].mean(axis=1) - baseline,
    )


def _spread_ms(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    slope = np.diff(shape_mv[:, _at(-120) : _at(160)], axis=1)
    slope *= slope
    time = np.arange(slope.shape[1], dtype=np.float32) * np.float32(1000 / WORKING_FS_HZ)
    total = np.maximum(slope.sum(axis=1), 1e-12)
    mean = slope @ time / total
    variance = slope @ (time * time) / total - mean * mean
    return (4 * np.sqrt(np.maximum(variance, 0))).astype(np.float32)


def qrs_width_ms(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """QRS width of averaged beats, shape (n_families,): first to last time the slope exceeds 12 % of its maximum.

    Looks from 120 ms before to 160 ms after the R peak, on values interpolated to 2 ms. Meant for averages: noise widens it.
    """
    coarse = np.arange(_at(-120), _at(160))
    fine = np.arange(coarse[0], coarse[-1], 0.25)
    width = np.zeros(shape_mv.shape[0], dtype=np.float32)
    for row, shape in enumerate(shape_mv):
        slope = np.abs(np.interp(fine, coarse[:-1] + 0.5, np.diff(shape[coarse])))
        above = np.flatnonzero(slope > 0.12 * max(slope.max(), 1e-9))
        if above.size:
            width[row] = (above[-1] - above[0]) * 0.25 * 1000 / WORKING_FS_HZ
    return width
