"""Which class each beat has: families first, single beats second.

A family is judged by its shape against the recording's normal families and by its timing; the weights are a small logistic
model (MODEL). Beats that belong to no family are judged the same way, as a family of one. Supraventricular beats are early
beats of normal shape. After the idea of de Chazal et al., IEEE Trans Biomed Eng 2004;51:1196 (doi:10.1109/TBME.2004.827359)
that shape and RR together separate the classes; here on families, from one lead.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import families, rhythm
from detectors.features import describe

EARLY = 0.87  # of the usual interval
ON_TIME = 0.10  # either side of the usual interval
S_EARLY = 0.88  # of the usual interval
S_EARLY_AFTER_CHANGE = 0.85  # of the usual interval of 12 beats ago
S_SUDDEN = 0.90  # of the interval before
AF_IRREGULARITY = 0.6
MODEL = {
    "intercept": -3.5,
    "distance": 2.0,  # log10 of the shape distance from the nearest normal family over the scatter of both
    "width": 1.5,  # log of the QRS spread over that of the nearest normal family
    "early": 3.5,  # share of early beats beyond that of the main normal family
    "off_time": 2.0,  # share of beats on time that is missing against the main normal family
    "late_narrow": -3.0,  # log of RR before over RR after, where positive and the QRS is narrow
    "single_wide": 1.0,  # width, for families that come as single beats
}


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


class Match(NamedTuple):
    """Family of each beat; arrays of shape (n_beats,)."""

    family: NDArray[np.int64]  # recording-wide, -1 for none
    nearest: NDArray[np.int64]  # most similar family, -1 when there is none at all
    likeness: NDArray[np.float32]  # correlation with the nearest


class Labels(NamedTuple):
    """Class and probability per beat, class per family."""

    beat_class: NDArray[np.str_]
    probability: NDArray[np.float32]
    family_class: NDArray[np.str_]


class Habits(NamedTuple):
    """How the beats of each family behave; arrays of shape (n_families,)."""

    n_beats: NDArray[np.int64]
    early: NDArray[np.float64]  # share of beats
    on_time: NDArray[np.float64]  # share of beats
    asymmetry: NDArray[np.float64]  # median log of RR before over RR after
    stretch: NDArray[np.float64]  # mean number of beats in a row
    scatter: NDArray[np.float64]  # median distance of its beats


def classify(timing: Timing, match: Match, family_shape_mv: NDArray[np.float32]) -> Labels:
    """Label all beats of a recording from their timing, their family and the families' averaged shapes."""
    n_beats, n_families = match.family.size, family_shape_mv.shape[0]
    if n_families == 0:
        return Labels(np.full(n_beats, "Q"), np.full(n_beats, 0.5, dtype=np.float32), np.empty(0, dtype="<U1"))
    habits = family_habits(timing, match, n_families)
    alike = families.likeness_of_shapes(family_shape_mv)
    spread = describe(family_shape_mv).spread_ms
    normal = normal_families(habits, alike, spread)
    family_odds = _family_odds(habits, alike, spread, normal)
    odds = np.where(match.family >= 0, family_odds[match.family], 0)
    loose = np.flatnonzero(match.family < 0)
    odds[loose] = _loose_odds(timing, match, loose, habits, normal, family_odds)
    is_v = odds > 0
    is_s = supraventricular(timing, is_v)
    beat_class = np.where(is_v, "V", np.where(is_s, "S", "N")).astype("<U1")
    probability = 1 / (1 + np.exp(-np.abs(odds)))
    return Labels(beat_class, probability.astype(np.float32), np.where(family_odds > 0, "V", "N").astype("<U1"))


def supraventricular(timing: Timing, is_v: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Early beats that are not ventricular, and the fast rhythms that such a beat begins, shape (n_beats,).

    Early means against the intervals near by or those of 12 beats ago, and at once: not a rate that rises beat by beat,
    not the beat after a ventricular one, and not where the rhythm is irregular as in atrial fibrillation.
    """
    reference_ms = rhythm.earlier_rr_ms(timing.usual_ms)
    last_ms = np.concatenate([[np.nan], timing.before_ms[:-1]]) if is_v.size else timing.before_ms
    follows_v = np.concatenate([[False], is_v[:-1]]) if is_v.size else is_v
    regular = rhythm.irregularity(timing.before_ms, ~is_v) < AF_IRREGULARITY
    early = (timing.before_ms < S_EARLY * timing.usual_ms) | (timing.before_ms < S_EARLY_AFTER_CHANGE * reference_ms)
    onset = early & (timing.before_ms < S_SUDDEN * last_ms) & ~is_v & ~follows_v & regular
    fast = rhythm.fast_stretches(timing.before_ms, np.maximum(timing.usual_ms, reference_ms), onset)
    return (onset | fast) & ~is_v & regular


def family_habits(timing: Timing, match: Match, n_families: int) -> Habits:
    """Timing and scatter of every family."""
    order = np.argsort(match.family, kind="stable")
    edges = np.searchsorted(match.family[order], np.arange(n_families + 1))
    early = timing.before < EARLY
    on_time = (np.abs(timing.before - 1) < ON_TIME) & (np.abs(timing.after - 1) < ON_TIME)
    with np.errstate(invalid="ignore", divide="ignore"):
        asymmetry = np.log(timing.before / timing.after)
    rows = np.zeros((n_families, 6))
    for row in range(n_families):
        mine = order[edges[row] : edges[row + 1]]
        if mine.size:
            known = mine[~np.isnan(asymmetry[mine])]
            lean = float(np.median(asymmetry[known])) if known.size else 0.0
            starts = 1 + np.count_nonzero(np.diff(mine) > 1)
            scatter = float(np.median(1 - match.likeness[mine]))
            rows[row] = (mine.size, early[mine].mean(), on_time[mine].mean(), lean, mine.size / starts, scatter)
    return Habits(rows[:, 0].astype(np.int64), *rows[:, 1:].T)


def normal_families(habits: Habits, alike: NDArray[np.float32], spread_ms: NDArray[np.float32]) -> NDArray[np.int64]:
    """Families taken for normal, the main one first.

    The main one is the biggest whose beats are not typically early. Others join when they look almost the same, when they
    are as narrow and keep time as well, or when they are wider but come in long stretches on time (bundle-branch block).
    """
    n_all = habits.n_beats.sum()
    main = int(np.argmax(habits.n_beats * (habits.asymmetry > -0.2)))
    chosen = [main]
    for _ in range(3):
        for row in range(habits.n_beats.size):
            if row in chosen or habits.n_beats[row] == 0:
                continue
            near = max(chosen, key=lambda other: alike[row, other])
            like, wide, wider = alike[row, near], spread_ms[row] / spread_ms[near], spread_ms[row] / spread_ms[main]
            same = like > 0.96 and wide < 1.15
            similar = (
                like > 0.9
                and wide < 1.2
                and habits.early[row] < 0.5
                and habits.asymmetry[row] > -0.25
                and habits.n_beats[row] >= 5
            )
            narrow = (
                habits.on_time[row] > 0.7 * habits.on_time[main]
                and habits.early[row] < 0.15
                and wider < 1.3
                and habits.n_beats[row] >= max(8, 0.005 * n_all)
            )
            block = (
                habits.on_time[row] > 0.8 * habits.on_time[main]
                and habits.early[row] < 0.1
                and habits.stretch[row] > 8
                and habits.n_beats[row] >= 0.02 * n_all
            )
            if same or similar or narrow or block:
                chosen.append(row)
    return np.array(chosen, dtype=np.int64)


def _odds(
    distance: NDArray[np.float64],
    width: NDArray[np.float64],
    early: NDArray[np.float64],
    on_time: NDArray[np.float64],
    asymmetry: NDArray[np.float64],
    is_single: NDArray[np.bool_],
    main_early: float,
    main_on_time: float,
) -> NDArray[np.float64]:
    """Log odds of being ventricular."""
    excess = np.clip(early - main_early, 0, 1) / max(1 - main_early, 0.3)
    missing = np.clip((main_on_time - on_time) / max(main_on_time, 0.2), 0, 1) * min(1, main_on_time / 0.4)
    width = np.clip(width, -0.6, 0.9)
    late = np.where(width < 0.2, np.clip(asymmetry, 0, 1), 0)
    return (
        MODEL["intercept"]
        + MODEL["distance"] * np.clip(distance, -0.5, 1.5)
        + MODEL["width"] * width
        + MODEL["early"] * excess
        + MODEL["off_time"] * missing
        + MODEL["late_narrow"] * late
        + MODEL["single_wide"] * np.where(is_single, np.clip(width, 0, None), 0)
    )


def _family_odds(
    habits: Habits, alike: NDArray[np.float32], spread_ms: NDArray[np.float32], normal: NDArray[np.int64]
) -> NDArray[np.float64]:
    near = normal[alike[:, normal].argmax(axis=1)]
    row = np.arange(habits.n_beats.size)
    apart = np.maximum(1 - alike[row, near], 1e-3)
    distance = np.log10(apart / (0.005 + habits.scatter + habits.scatter[near]))
    odds = _odds(
        distance,
        np.log(spread_ms / spread_ms[near]),
        habits.early,
        habits.on_time,
        habits.asymmetry,
        habits.stretch < 1.6,
        habits.early[normal[0]],
        habits.on_time[normal[0]],
    )
    odds[normal] = np.minimum(odds[normal], -1)
    return odds


def _loose_odds(
    timing: Timing,
    match: Match,
    loose: NDArray[np.int64],
    habits: Habits,
    normal: NDArray[np.int64],
    family_odds: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Beats of no family: as the nearest family when that is ventricular and similar, else judged alone."""
    near, like = match.nearest[loose], match.likeness[loose]
    before, after = np.nan_to_num(timing.before[loose], nan=1), np.nan_to_num(timing.after[loose], nan=1)
    on_time = (np.abs(before - 1) < ON_TIME) & (np.abs(after - 1) < ON_TIME)
    alone = _odds(
        np.log10(np.clip(1 - like, 0.01, 1) / (0.055 + habits.scatter[near])),
        np.zeros(loose.size),
        (before < EARLY).astype(np.float64),
        on_time.astype(np.float64),
        np.log(before / after),
        np.ones(loose.size, dtype=bool),
        habits.early[normal[0]],
        habits.on_time[normal[0]],
    )
    return np.where((like > 0.8) & (family_odds[near] > 0), family_odds[near], alone)
