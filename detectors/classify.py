"""Which class each beat has: families first, single beats second."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.families import likeness_of_shapes
from detectors.features import Features

PREMATURE = 0.86  # of the usual interval
ON_TIME = 0.10


class Evidence(NamedTuple):
    """What classification knows of each beat; arrays of shape (n_beats,)."""

    family: NDArray[np.int64]  # recording-wide, -1 for none
    nearest: NDArray[np.int64]
    likeness: NDArray[np.float32]
    before: NDArray[np.float32]  # RR before over the usual interval, NaN after a gap
    after: NDArray[np.float32]
    features: Features


class Labels(NamedTuple):
    """Class and probability per beat, class per family."""

    beat_class: NDArray[np.str_]
    probability: NDArray[np.float32]
    family_class: NDArray[np.str_]


def classify(evidence: Evidence, family_shape_mv: NDArray[np.float32]) -> Labels:
    """Label families by timing and shape, then the beats that their family does not settle."""
    n_families = family_shape_mv.shape[0]
    n_beats = evidence.family.size
    beat_class = np.full(n_beats, "N", dtype="<U1")
    family_class = np.full(n_families, "N", dtype="<U1")
    if n_families:
        match = likeness_of_shapes(family_shape_mv)
        normal = [0]
        for row in range(1, n_families):
            mine = evidence.family == row
            early = np.nanmean(evidence.before[mine] < PREMATURE) if mine.any() else 0
            if match[row, normal].max() < 0.85 and early > 0.5:
                family_class[row] = "V"
            elif early < 0.2:
                normal.append(row)
        beat_class = np.where(evidence.family >= 0, family_class[evidence.family], "N").astype("<U1")
    is_early = np.nan_to_num(evidence.before, nan=1.0) < PREMATURE
    loose = evidence.family < 0
    beat_class[loose & is_early & (evidence.likeness < 0.85)] = "V"
    beat_class[(beat_class == "N") & is_early] = "S"
    return Labels(beat_class, np.full(n_beats, 0.9, dtype=np.float32), family_class)
