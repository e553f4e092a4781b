"""Fusion beats: families on time whose shape is a sum of a normal and a ventricular shape."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.families import CORE_BEFORE, CORE_LENGTH

REACH = 6  # working samples, 48 ms: how far the two parents may lie apart
EXPLAINED = 0.97  # of the variance
NORMAL_PART = 0.3  # least share of the normal parent's amplitude
VENTRICULAR_PART = 0.2
OWN_SHAPE = 0.97  # a child is less like either parent


def is_fusion(
    child_mv: NDArray[np.float32], normal_mv: NDArray[np.float32], ventricular_mv: NDArray[np.float32]
) -> bool:
    """True when a shape is a sum of positive parts of a normal and of one of several ventricular shapes.

    `child_mv` and `normal_mv` have shape (SHAPE_LENGTH,), `ventricular_mv` (n_families, SHAPE_LENGTH). Least squares over
    the QRS at every lag of the ventricular parent.
    """
    begin = SHAPE_BEFORE - CORE_BEFORE
    child, normal = (_centred(shape[begin : begin + CORE_LENGTH]) for shape in (child_mv, normal_mv))
    shifted = sliding_window_view(ventricular_mv, CORE_LENGTH, axis=1)[:, begin - REACH : begin + REACH + 1]
    return any(_explains(child, normal, _centred(parent)) for parent in shifted.reshape(-1, CORE_LENGTH))


def _centred(stretch: NDArray[np.float32]) -> NDArray[np.float64]:
    return stretch.astype(np.float64) - stretch.mean()


def _explains(child: NDArray[np.float64], normal: NDArray[np.float64], parent: NDArray[np.float64]) -> bool:
    parents = np.column_stack([normal, parent])
    parts, *_ = np.linalg.lstsq(parents, child, rcond=None)
    rest = child - parents @ parts
    explained = 1 - (rest @ rest) / max(child @ child, 1e-12)
    return bool(explained > EXPLAINED and parts[0] > NORMAL_PART and parts[1] > VENTRICULAR_PART)
