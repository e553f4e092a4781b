"""Supraventricular beats: what the P wave adds to the timing."""

from __future__ import annotations

import numpy as np

from detectors.p_waves import HIDDEN, NEITHER, OTHER, SAME
from detectors.rhythm import usual_rr_ms
from detectors.supraventricular import supraventricular
from detectors.timing import Timing

SINUS = [(900.0, SAME)] * 30


def found(beats: list[tuple[float, int]]) -> list[int]:
    """Numbers of the supraventricular ones among beats of normal shape, given as interval before and P wave mark."""
    before = np.array([rr for rr, _ in beats], dtype=np.float32)
    after = np.append(before[1:], np.nan).astype(np.float32)
    timing = Timing(before, after, usual_rr_ms(before, after))
    marks = np.array([mark for _, mark in beats], dtype=np.int8)
    return np.flatnonzero(supraventricular(timing, marks, np.zeros(before.size, dtype=bool))).tolist()


def test_little_early_beat_is_judged_by_its_p_wave() -> None:
    """A beat a little early is supraventricular without the sinus P wave and none with it; without P waves timing tells."""
    for rr, mark, expected in (
        (780, SAME, []),
        (780, HIDDEN, [30]),
        (840, OTHER, [30]),
        (840, HIDDEN, []),
        (600, SAME, [30]),
    ):
        assert found([*SINUS, (rr, mark), *SINUS]) == expected, (rr, mark)


def test_rhythm_without_the_sinus_p_wave_at_the_same_rate() -> None:
    """Some beats in a row with another P wave or none are another rhythm, a single one is chance."""
    assert found([*SINUS, *[(900, OTHER)] * 5, *SINUS]) == [30, 31, 32, 33, 34]
    assert found([*SINUS, (900, OTHER), *SINUS]) == []


def test_lasting_change_of_the_p_wave_is_no_ectopic_rhythm() -> None:
    """Where most beats near by have the other P wave, as after an electrode was moved, none is ectopic for it."""
    assert found([*SINUS * 4, *[(900, OTHER)] * 600])[100:] == []


def test_groups_that_outnumber_the_sinus_beats() -> None:
    """Groups that begin at once and end with a pause are ectopic when they lack the P wave of the beats around them."""
    group = [(650, NEITHER), *[(660, OTHER)] * 8]
    assert found([*SINUS[:2], *group, *[(1500, SAME), *group] * 20, (1500, SAME)])[-9:] == list(range(202, 211))


def test_beats_between_two_pauses_of_the_sinus_node_are_normal() -> None:
    """The same timing with the sinus P wave throughout is a sinus rhythm with pauses."""
    group = [(650, SAME), *[(660, SAME)] * 8]
    assert found([*SINUS[:2], *group, *[(1500, SAME), *group] * 20, (1500, SAME)])[1:] == []


def test_irregular_rhythm_says_nothing() -> None:
    """In fibrillation the time before the QRS is no P wave, whatever it looks like."""
    rng = np.random.default_rng(2)
    assert found([(rr, OTHER if n % 2 else SAME) for n, rr in enumerate(rng.uniform(500, 1200, 300))]) == []


def test_sinus_p_wave_before_late_beats_is_no_fibrillation() -> None:
    """Intervals as irregular as in fibrillation: early beats count where the late ones show the sinus P wave."""
    early = np.random.default_rng(3).random(300) < 0.5
    early[1:] &= ~early[:-1]
    rr = np.where(early, 520, np.where(np.roll(early, 1), 1150, np.random.default_rng(4).uniform(800, 1100, 300)))
    with_p, without = (
        [(ms, HIDDEN if e else mark) for ms, e in zip(rr, early, strict=True)] for mark in (SAME, HIDDEN)
    )
    assert len(set(np.flatnonzero(early)) - set(found(with_p))) < 0.05 * early.sum()
    assert len(found(without)) < 0.2 * early.sum()


def test_few_beats() -> None:
    """No beat and one beat are no trouble."""
    assert found([]) == [] and found([(800, OTHER)]) == []


def test_wave_before_early_beats_too_is_a_flutter_wave() -> None:
    """Flutter with variable block: the same wave before late and early beats is no sinus P wave, so none is ectopic."""
    rr = 230.0 * np.random.default_rng(5).choice([3, 4, 5], 300)
    assert len(found([(ms, SAME) for ms in rr])) < 0.05 * rr.size
