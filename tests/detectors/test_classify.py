"""Classes: families first, single beats second."""

from __future__ import annotations

import numpy as np

from detectors import classify
from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH
from detectors.families import Membership
from detectors.features import spread_ms
from detectors.rhythm import usual_rr_ms
from detectors.timing import Timing

T = (np.arange(SHAPE_LENGTH) - SHAPE_BEFORE) * 8.0
T_WAVE = np.exp(-0.5 * ((T - 290) / 45) ** 2)
NARROW = np.exp(-0.5 * (T / 12) ** 2) + 0.2 * T_WAVE
WIDE = 1.2 * np.exp(-0.5 * (T / 34) ** 2) - 0.6 * np.exp(-0.5 * ((T - 70) / 25) ** 2) - 0.3 * T_WAVE
BLOCK = 0.9 * np.exp(-0.5 * (T / 14) ** 2) - 0.5 * np.exp(-0.5 * ((T - 48) / 16) ** 2) + 0.2 * T_WAVE
ABERRANT = 0.4 * np.exp(-0.5 * ((T + 8) / 30) ** 2) + 0.2 * T_WAVE
NARROW_AND_WIDE = np.stack([NARROW, WIDE]).astype(np.float32)


def classified(
    rr_ms: list[float],
    family: list[int],
    *shapes: np.ndarray,
    narrow: tuple[int, ...] = (),
    models: classify.Models = classify.MODELS,
) -> list[str]:
    """Classes of a chain of beats with given intervals before them and families; beats `narrow` are 0.7 times as wide."""
    before = np.array(rr_ms, dtype=np.float32)
    after = np.append(before[1:], np.nan).astype(np.float32)
    before[0] = np.nan
    timing = Timing(before, after, usual_rr_ms(before, after))
    number = np.array(family, dtype=np.int16)
    member = Membership(number, np.maximum(number, 0), np.where(number >= 0, 0.995, 0.7).astype(np.float32))
    shape_mv = np.stack(shapes).astype(np.float32)
    spread = spread_ms(shape_mv)[number]
    spread[list(narrow)] *= 0.7
    return classify.classify(timing, member, no_marks(number), spread, shape_mv, models).beat_class.tolist()


def no_marks(beats: np.ndarray) -> np.ndarray:
    """P waves of which nothing is known."""
    return np.zeros(beats.size, dtype=np.int8)


def test_early_wide_family_is_ventricular() -> None:
    """A wide family that comes early with pauses is ventricular, the narrow one on time is normal."""
    rr, family = ([800] * 9 + [500, 1100]) * 10, ([0] * 9 + [1, 0]) * 10
    classes = classified(rr, family, NARROW, WIDE)
    assert all(c == ("V" if f == 1 else "N") for c, f in zip(classes, family, strict=True))


def test_bigeminy_is_not_taken_for_normal() -> None:
    """Where every second beat is ventricular, the family that comes early is the ventricular one."""
    classes = classified([600, 1400] * 60, [1, 0] * 60, NARROW, WIDE)
    assert classes[2:] == ["V", "N"] * 59


def test_bundle_branch_block_on_time_is_normal() -> None:
    """A different shape that comes in long stretches on time is conducted with a block, not ventricular."""
    classes = classified([800] * 300, [0] * 150 + [1] * 100 + [0] * 50, NARROW, BLOCK)
    assert set(classes) == {"N"}


def test_long_fast_run_is_ventricular() -> None:
    """A wide family in one long fast stretch that begins at once is ventricular, however steady its intervals are."""
    classes = classified(
        [1000] * 120 + [500] + [400] * 100 + [1200] + [1000] * 100, [0] * 120 + [1] * 101 + [0] * 101, NARROW, WIDE
    )
    assert classes[120:221] == ["V"] * 101 and set(classes[:120] + classes[221:]) == {"N"}


def test_early_beat_of_normal_shape_is_supraventricular() -> None:
    """An early beat of the normal family is supraventricular; a rate that rises beat by beat is not."""
    rr = [800] * 30 + [600, 850] + [800] * 30
    assert [i for i, c in enumerate(classified(rr, [0] * 62, NARROW)) if c == "S"] == [30]
    rising = np.geomspace(900, 500, 60).tolist()
    assert "S" not in classified([900] * 20 + rising, [0] * 80, NARROW)


def test_irregular_rhythm_has_no_supraventricular_beats() -> None:
    """In intervals as random as in fibrillation no beat of normal shape is called supraventricular."""
    rr = np.random.default_rng(4).uniform(450, 1100, 300).tolist()
    assert set(classified(rr, [0] * 300, NARROW)) == {"N"}


def test_small_early_shape_of_fibrillation_is_aberrant_not_ventricular() -> None:
    """In irregular rhythm, an early family smaller than normal whose T wave follows the QRS is conducted aberrantly."""
    rng = np.random.default_rng(5)
    rr, family = [], []
    for _ in range(60):
        rr += [*rng.uniform(700, 1200, 5).tolist(), 380.0]
        family += [0] * 5 + [1]
    assert "V" not in classified(rr, family, NARROW, ABERRANT)
    assert "V" in classified(rr, family, NARROW, WIDE)


def test_lone_beat_follows_its_nearest_family() -> None:
    """An early beat without a family near a ventricular one is ventricular; one near the normal family is not."""
    rr, family = ([800] * 9 + [500, 1100]) * 10, ([0] * 9 + [1, 0]) * 10
    number = np.array(family)
    number[[20, 40]] = -1
    before = np.array(rr, dtype=np.float32)
    after = np.append(before[1:], 800).astype(np.float32)
    timing = Timing(before, after, usual_rr_ms(before, after))
    nearest = np.array(family, dtype=np.int16)
    member = Membership(number.astype(np.int16), nearest, np.where(number < 0, 0.8, 0.995).astype(np.float32))
    labels = classify.classify(
        timing, member, no_marks(number), number * np.float32(1), np.stack([NARROW, WIDE]).astype(np.float32)
    )
    assert labels.beat_class[20] == "V" and labels.beat_class[40] == "N"


def test_lone_beat_that_is_not_early_is_no_ventricular_one() -> None:
    """A beat on time without a family is not ventricular for being most like the ventricular family."""
    rr, family = ([800] * 9 + [500, 1100]) * 10, ([0] * 9 + [1, 0]) * 10
    number = np.array(family)
    number[[25, 20]] = -1  # one on time, one early
    before = np.array(rr, dtype=np.float32)
    after = np.append(before[1:], 800).astype(np.float32)
    timing = Timing(before, after, usual_rr_ms(before, after))
    member = Membership(
        number.astype(np.int16), np.where(number < 0, 1, number).astype(np.int16), np.full(number.size, 0.9, np.float32)
    )
    labels = classify.classify(
        timing, member, no_marks(number), number * np.float32(1), np.stack([NARROW, WIDE]).astype(np.float32)
    )
    assert labels.beat_class[[20, 25]].tolist() == ["V", "N"]


def test_beats_on_time_are_told_from_the_others_of_their_family() -> None:
    """Timing on both sides is evidence within a family: on its own it parts beats on time from those between pauses."""
    only_on_time = np.where(np.array(classify.BEAT_TERMS) == "on_time", classify.BEAT_WEIGHTS, 0)
    rr, family = ([800] * 9 + [500, 1100] + [800] * 4) * 12, ([0] * 9 + [1, 0] + [0, 1, 0, 0]) * 12
    classes = classified(rr, family, NARROW, WIDE, models=classify.MODELS._replace(beat=only_on_time))
    of_family = [(c, before) for c, f, before in zip(classes, family, rr, strict=True) if f == 1]
    assert {c for c, before in of_family if before == 500} == {"V"}
    assert {c for c, before in of_family if before == 800} == {"N"}


def test_no_family_at_all_is_unclassifiable() -> None:
    """Beats of a recording in which no two are alike cannot be classified."""
    one = np.array([800.0], dtype=np.float32)
    none = np.array([-1], dtype=np.int16)
    labels = classify.classify(
        Timing(one, one, one),
        Membership(none, none, one * 0),
        no_marks(none),
        one,
        np.empty((0, SHAPE_LENGTH), np.float32),
    )
    assert labels.beat_class.tolist() == ["Q"]


def test_narrower_beat_on_time_in_an_early_family_is_fusion() -> None:
    """In a ventricular family a beat on time is fusion when it is clearly narrower, else it stays ventricular."""
    rr, family = ([800] * 9 + [500, 1100]) * 10 + [800] * 20, ([0] * 9 + [1, 0]) * 10 + [0] * 20
    family[115], family[120] = 1, 1
    classes = classified(rr, family, NARROW, WIDE, narrow=(115,))
    assert (classes[115], classes[120]) == ("F", "V")
