"""Which shape families are ventricular: a small logistic model on averages of a family's beats.

Evidence is how far the averaged shape lies from the main normal one and how much wider it is, how early the beats come,
how rarely on time, whether a pause follows them or their run, and whether the P wave of the normal beats is missing.
What is counted over beats weighs little in a family of few (TRUST_BEATS). After the idea of de Chazal et al., IEEE
Trans Biomed Eng 2004;51:1196 (doi:10.1109/TBME.2004.827359) that shape and RR together separate the classes. Differs
from it: one lead, families instead of beats, evidence relative to the recording's own normal beats, the P wave.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import families, features, timing
from detectors.timing import Marks, Timing

TERMS = ("constant", "distance", "width", "wide_ms", "early", "off_time", "lean", "run_lean", "no_p_wide", "no_p_off")
WEIGHTS = np.array([-4.71, 2.22, 1.34, 0.66, 1.74, 2.6, 2.65, 2.5, 1.4, 1.86])
SURE = 4.0  # log odds beyond which more evidence changes nothing

TRUST_BEATS = 10  # of a family: half of the full weight
LIKE_MAIN = 0.96  # correlation with the main normal family, and
WIDTH_OF_MAIN = 0.12  # log of the width over its width: such a beat interrupts a run
SAME_CENTRE = 0.99  # correlation of the middle of the QRS with the main family's, and
SAME_WIDTH = 0.15  # of the main family's QRS width, either side, and
ON_T_WAVE_MS = 480.0  # RR before of half its beats at most: the T wave of the beat before reaches into the QRS
LATE = -0.3  # lean: a beat after a pause
LATE_WIDTH = 0.2  # log of the width over normal: a narrow late beat is a normal one
P_KEPT = 0.9  # likeness of the P wave, shape and size
P_SEEN = 0.03  # size of the main family's P wave over its QRS, root mean squares: less is no P wave
P_EARLY = 0.15  # excess of early beats: an early beat has no P wave of its own
P_ON_TIME = 0.6  # of the main family's share of beats on time
P_ROOM_MS = (
    580.0  # after a shorter interval (QT after Fridericia and 240 ms) the T wave before lies where the P wave is
)
MEDIAN_SAMPLE = 4096  # beats of a family from which its scatter is taken
IRREGULAR_ON_TIME = 0.35  # of the main normal family's beats: irregular as in fibrillation
ABERRANT_EARLY = 0.8  # of a family's beats
ABERRANT_BEATS = 5  # of a family: fewer do not tell
ABERRANT_SIZE = 0.8  # of the main normal family's


class Habits(NamedTuple):
    """How the beats of each family behave; arrays of shape (n_families,), shares and means over its beats."""

    n_beats: NDArray[np.int64]
    early: NDArray[np.float64]
    on_time: NDArray[np.float64]
    lean: NDArray[np.float64]
    scatter: NDArray[np.float64]  # median distance of its beats


class Shapes(NamedTuple):
    """Averaged shapes against the main normal family's; arrays of shape (n_families,) unless noted."""

    alike: NDArray[np.float32]  # correlation of every family with every other, shape (n_families, n_families)
    alike_in_centre: NDArray[np.float32]  # with the main family, 48 ms either side of the R peak
    spread_ms: NDArray[np.float32]
    width_ms: NDArray[np.float32]
    size: NDArray[np.float32]  # of the main one's
    t_follows_qrs: NDArray[np.bool_]  # T wave on the side of the QRS
    p_kept: NDArray[np.float32]  # likeness of the P wave in shape and size, 1 the same
    p_part: NDArray[np.float32]  # of the main family's P wave, 1 all of it
    p_seen: float  # size of the main family's P wave over its QRS


class Judged(NamedTuple):
    """Families with what was found about them."""

    main: int  # number of the main normal family
    habits: Habits
    shapes: Shapes
    run_lean: NDArray[np.float32]  # shape (n_beats,), lean of the run that a beat lies in
    terms: NDArray[np.float64]  # shape (n_families, len(TERMS))
    is_exempt: NDArray[np.bool_]  # shape (n_families,), never ventricular whatever the terms say
    evidence: NDArray[np.float64]  # shape (n_families,), what the terms say, log odds

    @property
    def odds(self) -> NDArray[np.float64]:
        """Log odds of being ventricular, shape (n_families,)."""
        return np.where(self.is_exempt, np.minimum(self.evidence, -SURE), self.evidence)


def judge(
    beat_timing: Timing,
    marks: Marks,
    member: families.Membership,
    family_shape_mv: NDArray[np.float32],
    weights: NDArray[np.float64] = WEIGHTS,
) -> Judged:
    """Judge the families of a recording; there must be at least one."""
    n_families = family_shape_mv.shape[0]
    habits = _habits(marks, member, n_families)
    main = int(np.argmax(habits.n_beats * (habits.lean < 0.2)))  # in bigeminy the ventricular beats are as many
    shapes = _compare(family_shape_mv, main)
    width = np.log(shapes.spread_ms / shapes.spread_ms[main])
    is_same = _rides_on_t_wave(beat_timing, member, shapes, main)
    is_plain = (shapes.alike[main] > LIKE_MAIN) & (np.abs(width) < WIDTH_OF_MAIN) | is_same
    is_odd = ~np.append(is_plain, False)[member.family]
    run_lean = timing.lean_of_stretches(beat_timing, marks.lean, is_odd)
    terms = _terms(habits, shapes, main, *means(member.family, n_families, run_lean))
    is_exempt = is_same | (habits.lean < LATE) & (width < LATE_WIDTH)
    is_exempt |= _is_aberrant(habits, shapes, main) | _is_conducted(beat_timing, member, shapes, main)
    return Judged(main, habits, shapes, run_lean, terms, is_exempt, terms @ weights)


def means(
    family: NDArray[np.int16], n_families: int, *columns: NDArray[np.float32 | np.bool_]
) -> list[NDArray[np.float64]]:
    """Mean of each column over the beats of every family, shape (n_families,); 0 for a family without beats."""
    row = family.astype(np.int64) + 1
    count = np.maximum(np.bincount(row, minlength=n_families + 1), 1)
    return [(np.bincount(row, values, n_families + 1) / count)[1:] for values in columns]


def _habits(marks: Marks, member: families.Membership, n_families: int) -> Habits:
    order = np.argsort(member.family, kind="stable").astype(np.int32)
    edges = np.searchsorted(member.family[order], np.arange(n_families + 1))
    scatter = np.zeros(n_families)
    for row in np.flatnonzero(np.diff(edges)):
        mine = order[edges[row] : edges[row + 1]]
        scatter[row] = np.median(1 - member.likeness[mine[:: -(-mine.size // MEDIAN_SAMPLE)]])
    early, on_time, lean = means(member.family, n_families, *marks)
    return Habits(np.diff(edges), early, on_time, lean, scatter)


def _compare(family_shape_mv: NDArray[np.float32], main: int) -> Shapes:
    level_mv, t_peak_mv = features.qrs_and_t_mv(family_shape_mv)
    size_mv = families.unit(families.QRS.of(family_shape_mv))[1]
    p_kept, p_part, p_mv = families.same_wave(family_shape_mv, main, families.P_WAVE)
    return Shapes(
        families.likeness(family_shape_mv),
        families.likeness(family_shape_mv, families.QRS_CENTRE)[main],
        features.spread_ms(family_shape_mv),
        features.qrs_width_ms(family_shape_mv),
        size_mv / size_mv[main],
        level_mv * t_peak_mv > 0,
        p_kept,
        p_part,
        p_mv / (float(size_mv[main]) / families.QRS.length**0.5),
    )


def _terms(habits: Habits, shapes: Shapes, main: int, run_lean: NDArray[np.float64]) -> NDArray[np.float64]:
    """Terms of the model for every family, shape (n_families, len(TERMS))."""
    apart = np.maximum(1 - shapes.alike[main], 1e-3)
    width = np.clip(np.log(shapes.spread_ms / shapes.spread_ms[main]), -0.6, 0.9)
    early, on_time = habits.early[main], habits.on_time[main]
    off_time = np.clip((on_time - habits.on_time) / max(on_time, 0.2), 0, 1)
    regular = min(1, on_time / 0.4)
    off_time *= regular  # says nothing where even normal beats come irregularly
    leans = np.column_stack([habits.lean, run_lean]) - habits.lean[main]
    leans = np.clip(leans, -0.3, 0.8) * (0.75 + 0.25 * regular)  # and a pause says less
    no_p = np.clip(1 - shapes.p_part / 0.8, 0, 1) * min(1, shapes.p_seen / 0.04)
    trust = habits.n_beats / (habits.n_beats + TRUST_BEATS)
    return np.column_stack(
        [
            np.ones(trust.size),
            np.clip(np.log10(apart / (0.005 + habits.scatter + habits.scatter[main])), -0.5, 1.5),
            width,
            np.clip((shapes.width_ms - 100) / 50, -1.2, 2),
            trust * np.clip(habits.early - early, 0, 1) / max(1 - early, 0.3),
            trust * off_time,
            leans,
            trust * no_p * np.clip(width, 0, 0.5) / 0.5,
            trust * no_p * off_time,
        ]
    )


def _rides_on_t_wave(beat_timing: Timing, member: families.Membership, shapes: Shapes, main: int) -> NDArray[np.bool_]:
    """The main family, and those with its middle and width whose beats come within the T wave of the beat before."""
    width = shapes.width_ms / max(float(shapes.width_ms[main]), 1.0)
    (on_t_wave,) = means(member.family, width.size, beat_timing.before_ms < ON_T_WAVE_MS)
    is_same = (shapes.alike_in_centre > SAME_CENTRE) & (np.abs(width - 1) < SAME_WIDTH) & (on_t_wave > 0.5)
    is_same[main] = True
    return is_same


def _is_conducted(beat_timing: Timing, member: families.Membership, shapes: Shapes, main: int) -> NDArray[np.bool_]:
    """Families on time behind the normal beats' own P wave: conducted, with a bundle branch block or without."""
    n_families = shapes.size.size
    flags = beat_timing.before < timing.EARLY, timing.keeps_time(beat_timing), beat_timing.before_ms > P_ROOM_MS
    early, on_time, has_room = means(member.family, n_families, *flags)
    in_time = (early - early[main] < P_EARLY) & (on_time > P_ON_TIME * on_time[main]) & (has_room > 0.5)
    return (shapes.p_kept > P_KEPT) & (shapes.p_seen > P_SEEN) & in_time


def _is_aberrant(habits: Habits, shapes: Shapes, main: int) -> NDArray[np.bool_]:
    """Early families of an irregular rhythm that are smaller than normal and whose T wave follows the QRS.

    Fibrillation conducts early beats with a bundle branch still refractory; a ventricular beat is as large as a
    normal one or larger and its T wave opposes it. Small evidence: the two signs together, in irregular rhythm only.
    """
    is_small = shapes.size < ABERRANT_SIZE
    is_irregular = habits.on_time[main] < IRREGULAR_ON_TIME
    is_common = habits.n_beats >= ABERRANT_BEATS
    return is_irregular & is_common & (habits.early > ABERRANT_EARLY) & is_small & shapes.t_follows_qrs
