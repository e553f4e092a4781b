"""Shape families of a patient's recordings under one numbering: the same focus keeps its number from patch to patch.

A family joins the most similar patient-wide family of its class when its averaged QRS correlates at some small lag and
its size is not far off, the rule by which beats join a family within a recording; otherwise it founds the next number.
Recordings come in time order and families by size, so that later recordings never change an earlier number.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.families import QRS, REACH, unit

LEAST_LIKENESS = 0.90  # the loosest that a family asks of its own beats
AMPLITUDE_LIMIT = 2.5  # wider than within a recording: the next patch lies on another spot of skin


class Matched(NamedTuple):
    """Patient-wide family of each family. Arrays of shape (n_families,)."""

    patient_family: NDArray[np.int16]  # from 0, in order of first appearance
    likeness: NDArray[np.float32]  # correlation with the patient-wide shape as it was before; NaN for its founder


def match_families(
    recording: NDArray[np.integer],
    family_class: NDArray[np.str_],
    shape_mv: NDArray[np.floating],
    beat_count: NDArray[np.integer],
) -> Matched:
    """Number the families of one patient's recordings so that one shape has one number.

    All arrays have one entry per family: the place of its recording in time, its class, its averaged beat of shape
    (n_families, 90) as in `results.Families`, and its beats. Supraventricular families may join normal ones, whose QRS
    they share; ventricular and fusion families join their own class only. The patient-wide shape is the mean of its
    families' shapes, weighted by their beats. Of families of a recording with the same number of beats the first row
    goes first; otherwise the order of the rows changes no answer. ValueError when the lengths differ.
    """
    lengths = len(recording), len(family_class), len(shape_mv), len(beat_count)
    if len(set(lengths)) > 1:
        raise ValueError("recordings, classes, shapes and counts are {}, {}, {} and {}; one each".format(*lengths))
    shape_mv = np.asarray(shape_mv, dtype=np.float32)
    origin = np.where(np.asarray(family_class) == "S", "N", family_class)
    patient_family = np.empty(len(recording), dtype=np.int16)
    likeness = np.full(len(recording), np.nan, dtype=np.float32)
    known = _Known(shape_mv.shape[1:])
    for row in np.lexsort((-np.asarray(beat_count), recording)):
        patient_family[row], likeness[row] = known.enter(str(origin[row]), shape_mv[row], int(beat_count[row]))
    return Matched(patient_family, likeness)


class _Known:
    """Patient-wide families so far, with what a comparison needs of them."""

    def __init__(self, of_shape: tuple[int, ...]) -> None:
        self.shape_mv = np.empty((0, *of_shape), dtype=np.float32)
        self.shifted = np.empty((0, 2 * REACH + 1, QRS.length), dtype=np.float32)  # unit QRS at all lags
        self.size = np.empty(0, dtype=np.float32)
        self.origin = np.empty(0, dtype="<U1")
        self.n_beats = np.empty(0, dtype=np.int64)

    def enter(self, origin: str, shape_mv: NDArray[np.float32], n_beats: int) -> tuple[int, float]:
        """Number of the family that a shape joins or founds, and its likeness to that family before."""
        number, like = self._most_alike(origin, shape_mv)
        if number < 0:
            number = self._found(origin, shape_mv)
        self.n_beats[number] += n_beats
        weight = np.float32(n_beats / max(int(self.n_beats[number]), 1))
        self.shape_mv[number] += weight * (shape_mv - self.shape_mv[number])
        own = self.shape_mv[number : number + 1]
        self.shifted[number], self.size[number] = unit(QRS.at_all_lags(own))[0][0], unit(QRS.of(own))[1][0]
        return number, like

    def _most_alike(self, origin: str, shape_mv: NDArray[np.float32]) -> tuple[int, float]:
        """The most similar family of the class whose size fits, -1 when none is similar enough."""
        direction, size = unit(QRS.of(shape_mv[None]))
        match = (self.shifted @ direction[0]).max(axis=1)
        fits = (size < AMPLITUDE_LIMIT * self.size) & (self.size < AMPLITUDE_LIMIT * size) & (self.origin == origin)
        match = np.where(fits, match, -1)
        best = int(match.argmax()) if match.size else -1
        return (best, float(match[best])) if best >= 0 and match[best] > LEAST_LIKENESS else (-1, float("nan"))

    def _found(self, origin: str, shape_mv: NDArray[np.float32]) -> int:
        self.shape_mv = np.vstack([self.shape_mv, shape_mv[None]])
        self.shifted = np.concatenate([self.shifted, np.zeros_like(self.shifted, shape=(1, *self.shifted.shape[1:]))])
        self.size, self.n_beats = np.append(self.size, np.float32(0)), np.append(self.n_beats, 0)
        self.origin = np.append(self.origin, origin)
        return len(self.origin) - 1
