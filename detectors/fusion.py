"""Fusion beats: families on time whose shape is a sum of a normal and a ventricular shape."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.families import QRS

REACH = 6  # working samples, 48 ms: how far the two parents may lie apart
EXPLAINED = 0.97  # of the variance
NORMAL_PART = 0.3  # least share of the normal parent's amplitude
VENTRICULAR_PART = 0.2
OWN_SHAPE = 0.97  # a child is less like either parent


def is_fusion(
    child_mv: NDArray[np.float32], normal_mv: NDArray[np.float32], ventricular_mv: NDArray[np.float32]
) -> bool:
    """True when a shape is a sum of positive parts of a normal and of one of several ventricular shapes.

    `child_mv` and `normal_mv` have shape (SHAPE_LENGTH,), `ventricular_mv` (n_families, SHAPE_LENGTH). Least squares
    over the QRS at every lag of the ventricular parent.
    """
    begin = SHAPE_BEFORE - QRS.before
    child, normal = (_centred(shape[begin : begin + QRS.length]) for shape in (child_mv, normal_mv))
    shifted = sliding_window_view(ventricular_mv, QRS.length, axis=1)[:, begin - REACH : begin + REACH + 1]
    parents = _centred(shifted.reshape(-1, QRS.length))
    # normal equations of two unknowns, for all parents at once
    nn, np_, pp = normal @ normal, parents @ normal, np.einsum("ij,ij->i", parents, parents)
    cn, cp = child @ normal, parents @ child
    determinant = np.maximum(nn * pp - np_ * np_, 1e-12)
    normal_part, ventricular_part = (cn * pp - cp * np_) / determinant, (cp * nn - cn * np_) / determinant
    explained = (normal_part * cn + ventricular_part * cp) / max(child @ child, 1e-12)
    return bool(((explained > EXPLAINED) & (normal_part > NORMAL_PART) & (ventricular_part > VENTRICULAR_PART)).any())


def _centred(stretch: NDArray[np.float32]) -> NDArray[np.float64]:
    return stretch - stretch.mean(axis=-1, keepdims=True, dtype=np.float64)
