"""Which class each beat has: families first, single beats second.

A family is ventricular or not (`detectors.ventricular`); a beat follows its family unless its own timing speaks against
it, and a beat of no family the one most like it (BEAT_WEIGHTS). Fusion beats come from shapes between two families,
supraventricular beats are early beats of normal shape (`detectors.supraventricular`).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import families, fusion, p_waves, timing, ventricular
from detectors.supraventricular import supraventricular
from detectors.timing import Marks, Timing
from detectors.ventricular import Judged

MERGED_ON_TIME = 0.08  # either side of the usual interval
MERGED_WIDTH = 0.85  # of the family's
MERGED_EARLY = 0.6  # of the family's beats

BEAT_TERMS = ("constant", "family", "early", "on_time", "lean", "run_lean", "loose")
BEAT_WEIGHTS = np.array([-0.17, 1.48, 0.87, -0.68, 1.16, 0.63, -0.83])


class Models(NamedTuple):
    """Weights of the two logistic models."""

    family: NDArray[np.float64]  # shape (len(ventricular.TERMS),)
    beat: NDArray[np.float64]  # shape (len(BEAT_TERMS),)


MODELS = Models(ventricular.WEIGHTS, BEAT_WEIGHTS)


class Labels(NamedTuple):
    """Class and log odds of being ventricular per beat, class per family."""

    beat_class: NDArray[np.str_]
    odds: NDArray[np.float32]
    family_class: NDArray[np.str_]


def classify(
    beat_timing: Timing,
    member: families.Membership,
    p_wave: NDArray[np.int8],
    beat_spread_ms: NDArray[np.float32],
    family_shape_mv: NDArray[np.float32],
    models: Models = MODELS,
) -> Labels:
    """Label all beats of a recording from their timing, family and width, and the families' averaged shapes."""
    if family_shape_mv.shape[0] == 0:
        none = np.empty(0, dtype="<U1")
        return Labels(np.full(member.family.size, "Q"), np.zeros(member.family.size, np.float32), none)
    marks = timing.marks(beat_timing)
    judged = ventricular.judge(beat_timing, marks, member, family_shape_mv, models.family)
    family_class = np.where(judged.odds > 0, "V", "N")
    family_class[_fusions(judged, family_shape_mv)] = "F"
    odds = np.zeros(member.family.size, dtype=np.float32)
    for weight, term in zip(models.beat, beat_terms(marks, member, judged), strict=True):
        odds += np.float32(weight) * term
    is_v = odds > 0
    is_f = (member.family >= 0) & (family_class[member.family] == "F")
    is_f |= is_v & _merges(beat_timing, member, beat_spread_ms, judged)
    is_v &= ~is_f
    is_s = supraventricular(beat_timing, _of_main(p_wave, member, judged), is_v | is_f)
    return Labels(np.select([is_f, is_v, is_s], ["F", "V", "S"], "N"), odds, family_class)


def _of_main(p_wave: NDArray[np.int8], member: families.Membership, judged: Judged) -> NDArray[np.int8]:
    """Marks of P waves that hold for the main family's P wave, too; hidden where the own family has another one."""
    is_kept = judged.shapes.p_kept > ventricular.P_KEPT
    return np.where(is_kept[member.nearest], p_wave, np.int8(p_waves.HIDDEN))


def beat_terms(marks: Marks, member: families.Membership, judged: Judged) -> Iterator[NDArray[np.float32]]:
    """Terms of the model for every beat, one by one, each of shape (n_beats,): its family, and how it differs from it.

    A beat of no family is compared with the main normal one and takes its family's odds from the one most like it; only
    an early one is believed to be ventricular for that likeness.
    """
    is_loose = member.family < 0
    own = np.where(is_loose, judged.main, member.family)
    (run_lean,) = ventricular.means(member.family, judged.odds.size, judged.run_lean)
    family_odds = np.clip(judged.odds, -ventricular.SURE, ventricular.SURE).astype(np.float32)
    yield np.ones(own.size, dtype=np.float32)
    odds = family_odds[np.where(is_loose, member.nearest, own)]
    yield np.where(is_loose & ~marks.early, np.minimum(odds, 0), odds)
    for value, usual in (
        (marks.early, judged.habits.early),
        (marks.on_time, judged.habits.on_time),
        (marks.lean, judged.habits.lean),
        (judged.run_lean, run_lean),
    ):
        yield value - usual.astype(np.float32)[own]
    yield is_loose.astype(np.float32)


def _fusions(judged: Judged, family_shape_mv: NDArray[np.float32]) -> NDArray[np.int64]:
    """Families on time, like neither parent, whose shape is a sum of the main normal and a ventricular one."""
    habits, alike, main = judged.habits, judged.shapes.alike, judged.main
    parents = np.flatnonzero((judged.odds > 1) & (habits.early > 0.25) & (habits.n_beats >= 3))
    if parents.size == 0:
        return parents
    like_parents = np.maximum(alike[:, parents].max(axis=1), alike[:, main])
    candidate = (
        (judged.evidence > -2) & (habits.early < 0.15) & (habits.n_beats >= 2) & (like_parents < fusion.OWN_SHAPE)
    )
    found = [
        row
        for row in np.flatnonzero(candidate)
        if fusion.is_fusion(family_shape_mv[row], family_shape_mv[main], family_shape_mv[parents])
    ]
    return np.array(found, dtype=np.int64)


def _merges(
    beat_timing: Timing, member: families.Membership, beat_spread_ms: NDArray[np.float32], judged: Judged
) -> NDArray[np.bool_]:
    """Beats of an early family that are themselves on time and clearly narrower: merged with the conducted beat."""
    is_on_time = (np.abs(beat_timing.before - 1) < MERGED_ON_TIME) & (np.abs(beat_timing.after - 1) < timing.ON_TIME)
    is_narrower = beat_spread_ms < MERGED_WIDTH * judged.shapes.spread_ms[member.family]
    return is_on_time & is_narrower & (member.family >= 0) & (judged.habits.early[member.family] > MERGED_EARLY)
