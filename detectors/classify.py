"""Which class each beat has: families first, single beats second.

A family is judged by its shape against the recording's normal families and by its timing; the weights are a small
logistic model (WEIGHTS). Beats that belong to no family are judged the same way, as a family of one. Supraventricular
beats are early beats of normal shape. After the idea of de Chazal et al., IEEE Trans Biomed Eng 2004;51:1196
(doi:10.1109/TBME.2004.827359) that shape and RR together separate the classes. Differs from it: one lead, families
instead of beats, rules for S.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import families, fusion, rhythm
from detectors.features import qrs_and_t_mv, qrs_width_ms, spread_ms

EARLY = 0.87  # of the usual interval
ON_TIME = 0.10  # either side of the usual interval
S_EARLY = 0.885  # of the usual interval
S_EARLY_AFTER_CHANGE = 0.85  # of the usual interval of 12 beats ago
S_SUDDEN = 0.90  # of the interval before
AF_IRREGULARITY = 0.6
MERGED_ON_TIME = 0.08  # either side of the usual interval
MERGED_WIDTH = 0.85  # of the family's
MERGED_EARLY = 0.6  # of the family's beats
MEDIAN_SAMPLE = 4096  # beats of a family from which its medians are taken
IRREGULAR_ON_TIME = 0.35  # of the main normal family's beats: irregular as in fibrillation
ABERRANT_EARLY = 0.8  # of a family's beats
ABERRANT_BEATS = 5  # of a family: fewer do not tell
ABERRANT_SIZE = 0.8  # of the main normal family's
LATE = 0.3  # log of RR before over RR after: a beat after a pause
LATE_WIDTH = 0.2  # log of the width over normal: a narrow late beat is a normal one

TERMS = ("constant", "distance", "width", "early", "off_time", "single_wide")
WEIGHTS = np.array([-4.1, 2.7, 1.7, 3.1, 3.0, 2.0])

LOOSE_WEIGHTS = (-2.2, 0.5, 1.9)  # constant, log odds of the nearest family, early


class Timing(NamedTuple):
    """RR around each beat; arrays of shape (n_beats,)."""

    before_ms: NDArray[np.float32]  # NaN after a gap
    after_ms: NDArray[np.float32]  # NaN before a gap
    usual_ms: NDArray[np.float32]

    @property
    def before(self) -> NDArray[np.float32]:
        """RR before over the usual interval."""
        return self.before_ms / self.usual_ms

    @property
    def after(self) -> NDArray[np.float32]:
        """RR after over the usual interval."""
        return self.after_ms / self.usual_ms


class Labels(NamedTuple):
    """Class and log odds of being ventricular per beat, class per family."""

    beat_class: NDArray[np.str_]
    odds: NDArray[np.float32]
    family_class: NDArray[np.str_]


class Habits(NamedTuple):
    """How the beats of each family behave; arrays of shape (n_families,)."""

    n_beats: NDArray[np.int64]
    early: NDArray[np.float64]  # share of beats
    on_time: NDArray[np.float64]  # share of beats
    asymmetry: NDArray[np.float64]  # median log of RR before over RR after
    stretch: NDArray[np.float64]  # mean number of beats in a row
    scatter: NDArray[np.float64]  # median distance of its beats


class Shapes(NamedTuple):
    """Families compared with each other and with the normal ones."""

    alike: NDArray[np.float32]  # shape (n_families, n_families), correlation
    alike_in_centre: NDArray[np.float32]  # the same for 48 ms either side of the R peak
    spread_ms: NDArray[np.float32]  # shape (n_families,)
    width_ms: NDArray[np.float32]  # shape (n_families,)
    size_mv: NDArray[np.float32]  # shape (n_families,)
    t_follows_qrs: NDArray[np.bool_]  # shape (n_families,), T wave on the side of the QRS
    normal: NDArray[np.int64]  # numbers of the normal families, the main one first


def classify(
    timing: Timing,
    member: families.Membership,
    beat_spread_ms: NDArray[np.float32],
    family_shape_mv: NDArray[np.float32],
    weights: NDArray[np.float64] = WEIGHTS,
) -> Labels:
    """Label all beats of a recording from their timing, family and width, and the families' averaged shapes."""
    n_families = family_shape_mv.shape[0]
    if n_families == 0:
        return Labels(
            np.full(member.family.size, "Q"), np.zeros(member.family.size, np.float32), np.empty(0, dtype="<U1")
        )
    habits = family_habits(timing, member, n_families)
    shapes = compare_shapes(habits, family_shape_mv)
    family_odds = judge_families(family_terms(habits, shapes), habits, shapes, weights)
    family_class = np.where(family_odds > 0, "V", "N")
    family_class[_fusions(family_odds, habits, shapes, family_shape_mv)] = "F"
    odds = family_odds.astype(np.float32)[member.family]
    loose = np.flatnonzero(member.family < 0)
    odds[loose] = _loose_odds(timing, member, loose, habits.early[shapes.normal[0]], family_odds)
    is_v = odds > 0
    is_f = (member.family >= 0) & (family_class[member.family] == "F")
    is_f |= is_v & _merges(timing, member, beat_spread_ms, habits, shapes)
    is_v &= ~is_f
    is_s = supraventricular(timing, is_v | is_f)
    beat_class = np.select([is_f, is_v, is_s], ["F", "V", "S"], "N")
    return Labels(beat_class, odds, family_class)


def family_habits(timing: Timing, member: families.Membership, n_families: int) -> Habits:
    """Timing and scatter of every family."""
    order = np.argsort(member.family, kind="stable").astype(np.int32)
    edges = np.searchsorted(member.family[order], np.arange(n_families + 1))
    everything = np.ones(member.family.size, dtype=bool)
    fast = _fast(timing, everything, _is_early(timing), everything)
    early = (timing.before < EARLY) | fast
    on_time = (np.abs(timing.before - 1) < ON_TIME) & (np.abs(timing.after - 1) < ON_TIME) & ~fast
    asymmetry = np.log(timing.before_ms / timing.after_ms)
    rows = np.zeros((n_families, 6))
    for row in range(n_families):
        mine = order[edges[row] : edges[row + 1]]
        if mine.size:
            starts = 1 + np.count_nonzero(np.diff(mine) > 1)
            some = mine[:: -(-mine.size // MEDIAN_SAMPLE)]
            known = some[~np.isnan(asymmetry[some])]
            lean = float(np.median(asymmetry[known])) if known.size else 0.0
            scatter = float(np.median(1 - member.likeness[some]))
            rows[row] = (mine.size, early[mine].mean(), on_time[mine].mean(), lean, mine.size / starts, scatter)
    return Habits(rows[:, 0].astype(np.int64), *rows[:, 1:].T)


def compare_shapes(habits: Habits, family_shape_mv: NDArray[np.float32]) -> Shapes:
    """Likeness of all families, their widths, and which are normal.

    The main normal family is the biggest whose beats are not typically early. Others join when they look almost the
    same, when they are as narrow and keep time as well, or when they come in long stretches on time (bundle-branch
    block).
    """
    level_mv, t_peak_mv = qrs_and_t_mv(family_shape_mv)
    shapes = Shapes(
        families.likeness(family_shape_mv),
        families.likeness(family_shape_mv, families.QRS_CENTRE),
        spread_ms(family_shape_mv),
        qrs_width_ms(family_shape_mv),
        families.unit(families.QRS.of(family_shape_mv))[1],
        level_mv * t_peak_mv > 0,
        np.empty(0, dtype=np.int64),
    )
    main = int(np.argmax(habits.n_beats * (habits.asymmetry > -0.2)))
    chosen = [main]
    for _ in range(3):
        for row in np.flatnonzero(habits.n_beats > 0):
            if row not in chosen and _joins(int(row), chosen, habits, shapes):
                chosen.append(int(row))
    return shapes._replace(normal=np.array(chosen, dtype=np.int64))


def _joins(row: int, chosen: list[int], habits: Habits, shapes: Shapes) -> bool:
    main, near = chosen[0], chosen[int(shapes.alike[row, chosen].argmax())]
    like, spread = shapes.alike[row, near], shapes.spread_ms
    wider, wider_than_main = spread[row] / spread[near], spread[row] / spread[main]
    share = habits.n_beats[row] / habits.n_beats.sum()
    keeps_time = habits.on_time[row] / max(habits.on_time[main], 0.01)
    early = habits.early[row]
    same = (like > 0.96 and wider < 1.15) or (like > 0.92 and 0.85 < wider < 1.1)
    same |= _differs_in_t_wave_only(row, chosen, shapes)
    similar = like > 0.9 and wider < 1.2 and early < 0.5 and habits.asymmetry[row] > -0.25 and habits.n_beats[row] >= 5
    narrow = wider_than_main < 1.3 and early < 0.15 and keeps_time > 0.7 and share >= 0.005 and habits.n_beats[row] >= 8
    block = early < 0.1 and keeps_time > 0.8 and share >= 0.02 and habits.stretch[row] > 15 and wider_than_main < 1.75
    return bool(same or similar or narrow or block)


def _differs_in_t_wave_only(row: int, chosen: list[int], shapes: Shapes) -> bool:
    """Same centre and same width as a normal family: a conducted beat that rides on the T wave of the one before."""
    near = chosen[int(shapes.alike_in_centre[row, chosen].argmax())]
    wider = shapes.width_ms[row] / max(shapes.width_ms[near], 1)
    return bool(shapes.alike_in_centre[row, near] > 0.99 and 0.88 < wider < 1.12)


def family_terms(habits: Habits, shapes: Shapes) -> NDArray[np.float64]:
    """Terms of the model for every family, shape (n_families, len(TERMS))."""
    near = shapes.normal[shapes.alike[:, shapes.normal].argmax(axis=1)]
    apart = np.maximum(1 - shapes.alike[np.arange(near.size), near], 1e-3)
    return _terms(
        distance=apart / (0.005 + habits.scatter + habits.scatter[near]),
        width=np.log(shapes.spread_ms / shapes.spread_ms[near]),
        early=habits.early,
        on_time=habits.on_time,
        is_single=habits.stretch < 1.6,
        main_early=habits.early[shapes.normal[0]],
        main_on_time=habits.on_time[shapes.normal[0]],
    )


def _terms(
    *,
    distance: NDArray[np.float64],
    width: NDArray[np.float64],
    early: NDArray[np.float64],
    on_time: NDArray[np.float64],
    is_single: NDArray[np.bool_],
    main_early: float,
    main_on_time: float,
) -> NDArray[np.float64]:
    """Distance from normal over the scatter, width over normal, excess of early beats, lack of beats on time."""
    width = np.clip(width, -0.6, 0.9)
    missing = np.clip((main_on_time - on_time) / max(main_on_time, 0.2), 0, 1)
    return np.column_stack(
        [
            np.ones(distance.size),
            np.clip(np.log10(distance), -0.5, 1.5),
            width,
            np.clip(early - main_early, 0, 1) / max(1 - main_early, 0.3),
            missing * min(1, main_on_time / 0.4),  # says nothing where even normal beats come irregularly
            np.where(is_single, np.clip(width, 0, None), 0),
        ]
    )


def judge_families(
    terms: NDArray[np.float64], habits: Habits, shapes: Shapes, weights: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Log odds of being ventricular for every family; normal families and late narrow ones are not."""
    odds = terms @ weights
    never = is_never_ventricular(terms, habits, shapes)
    odds[never] = np.minimum(odds[never], -1)
    return odds


def is_never_ventricular(terms: NDArray[np.float64], habits: Habits, shapes: Shapes) -> NDArray[np.bool_]:
    """Families that the model is not asked about: normal ones, narrow beats after a pause, aberrant beats."""
    never = (habits.asymmetry > LATE) & (terms[:, TERMS.index("width")] < LATE_WIDTH)
    never |= _is_aberrant(habits, shapes)
    never[shapes.normal] = True
    return never


def _is_aberrant(habits: Habits, shapes: Shapes) -> NDArray[np.bool_]:
    """Early families of an irregular rhythm that are smaller than normal and whose T wave follows the QRS.

    Fibrillation conducts early beats with a bundle branch still refractory; a ventricular beat is as large as a
    normal one or larger and its T wave opposes it. Small evidence: the two signs together, in irregular rhythm only.
    """
    main = shapes.normal[0]
    is_small = shapes.size_mv < ABERRANT_SIZE * shapes.size_mv[main]
    is_irregular = habits.on_time[main] < IRREGULAR_ON_TIME
    is_common = habits.n_beats >= ABERRANT_BEATS
    return is_irregular & is_common & (habits.early > ABERRANT_EARLY) & is_small & shapes.t_follows_qrs


def _fusions(
    odds: NDArray[np.float64], habits: Habits, shapes: Shapes, family_shape_mv: NDArray[np.float32]
) -> NDArray[np.int64]:
    """Families on time, like neither parent, whose shape is a sum of the main normal and a ventricular one."""
    main = shapes.normal[0]
    parents = np.flatnonzero((odds > 1) & (habits.early > 0.25) & (habits.n_beats >= 3))
    if parents.size == 0:
        return parents
    like_parents = np.maximum(shapes.alike[:, parents].max(axis=1), shapes.alike[:, main])
    candidate = (odds > -2) & (habits.early < 0.15) & (habits.n_beats >= 2) & (like_parents < fusion.OWN_SHAPE)
    found = [
        row
        for row in np.flatnonzero(candidate)
        if fusion.is_fusion(family_shape_mv[row], family_shape_mv[main], family_shape_mv[parents])
    ]
    return np.array(found, dtype=np.int64)


def _merges(
    timing: Timing,
    member: families.Membership,
    beat_spread_ms: NDArray[np.float32],
    habits: Habits,
    shapes: Shapes,
) -> NDArray[np.bool_]:
    """Beats of an early family that are themselves on time and clearly narrower: merged with the conducted beat."""
    is_on_time = (np.abs(timing.before - 1) < MERGED_ON_TIME) & (np.abs(timing.after - 1) < ON_TIME)
    is_narrower = beat_spread_ms < MERGED_WIDTH * shapes.spread_ms[member.family]
    return is_on_time & is_narrower & (member.family >= 0) & (habits.early[member.family] > MERGED_EARLY)


def _loose_odds(
    timing: Timing,
    member: families.Membership,
    loose: NDArray[np.int64],
    main_early: float,
    family_odds: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Log odds of beats of no family: those of the nearest family, held, and whether the beat itself is early."""
    early = (timing.before[loose] < EARLY) - main_early
    nearest = np.clip(family_odds[member.nearest[loose]], -4, 4)
    return LOOSE_WEIGHTS[0] + LOOSE_WEIGHTS[1] * nearest + LOOSE_WEIGHTS[2] * np.clip(early, 0, 1)


def supraventricular(timing: Timing, is_v: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Early beats that are not ventricular, and the fast rhythms that such a beat begins, shape (n_beats,).

    Early means against the intervals near by or those of 12 beats ago, and at once: not a rate that rises beat by beat,
    not the beat after a ventricular one, and not where the rhythm is irregular as in atrial fibrillation.
    """
    follows_v = np.concatenate([is_v[:1], is_v[:-1]])
    return _fast(timing, ~is_v, ~is_v & ~follows_v & _is_early(timing), ~is_v)


def _fast(
    timing: Timing, is_plain: NDArray[np.bool_], may_begin: NDArray[np.bool_], may_be: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Beats of stretches of short intervals that begin at once, outside irregular rhythm; one beat is a stretch."""
    regular = rhythm.irregularity(timing.before_ms, is_plain) < AF_IRREGULARITY
    last_ms = np.concatenate([timing.before_ms[:1], timing.before_ms[:-1]])
    onset = may_begin & regular & (timing.before_ms < S_SUDDEN * last_ms)
    reference_ms = np.maximum(timing.usual_ms, rhythm.earlier_rr_ms(timing.usual_ms))
    return (onset | rhythm.fast_stretches(timing.before_ms, reference_ms, onset)) & may_be & regular


def _is_early(timing: Timing) -> NDArray[np.bool_]:
    earlier_ms = rhythm.earlier_rr_ms(timing.usual_ms)
    near, past = S_EARLY * timing.usual_ms, S_EARLY_AFTER_CHANGE * earlier_ms
    return (timing.before_ms < near) | (timing.before_ms < past)
