"""Families: what counts as evidence for a ventricular one."""

from __future__ import annotations

import numpy as np
import pytest

from detectors import families, timing, ventricular
from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH
from detectors.families import Membership
from detectors.rhythm import usual_rr_ms

T = (np.arange(SHAPE_LENGTH) - SHAPE_BEFORE) * 8.0
P_WAVE = 0.12 * np.exp(-0.5 * ((T + 165) / 20) ** 2)
T_WAVE = 0.2 * np.exp(-0.5 * ((T - 290) / 45) ** 2)
NORMAL = (np.exp(-0.5 * (T / 12) ** 2) + P_WAVE + T_WAVE).astype(np.float32)
WIDE = (0.8 * np.exp(-0.5 * (T / 30) ** 2) + 0.4 * np.exp(-0.5 * ((T - 50) / 18) ** 2) - T_WAVE).astype(np.float32)
WIDE_BEHIND_P = (WIDE + P_WAVE).astype(np.float32)


def judged(rr_ms: list[float], family: list[int], *shapes: np.ndarray) -> ventricular.Judged:
    before = np.array(rr_ms, dtype=np.float32)
    after = np.append(before[1:], np.nan).astype(np.float32)
    rhythm = timing.Timing(before, after, usual_rr_ms(before, after))
    number = np.array(family, dtype=np.int16)
    member = Membership(number, number, np.full(number.size, 0.995, dtype=np.float32))
    return ventricular.judge(rhythm, timing.marks(rhythm), member, np.stack(shapes))


def test_wide_family_is_told_by_its_p_wave() -> None:
    """Single wide beats on time are conducted when the normal beats' P wave precedes them."""
    family = ([0] * 5 + [1]) * 30
    assert judged([800] * 180, family, NORMAL, WIDE_BEHIND_P).odds[1] <= -ventricular.SURE
    assert judged([800] * 180, family, NORMAL, WIDE).odds[1] > -ventricular.SURE


def test_missing_p_wave_is_evidence_only_where_normal_beats_have_one() -> None:
    """Without a P wave in the main family, as in fibrillation, its absence in another says nothing."""
    names = ("no_p_wide", "no_p_off")
    rr, family = ([800] * 5 + [650, 950]) * 30, ([0] * 5 + [1, 0]) * 30
    with_p, without = (judged(rr, family, main, WIDE).terms[1] for main in (NORMAL, NORMAL - P_WAVE.astype(np.float32)))
    assert all(with_p[ventricular.TERMS.index(name)] > 0.2 for name in names)
    assert all(without[ventricular.TERMS.index(name)] < 0.05 for name in names)


def test_p_wave_before_a_fast_beat_is_not_believed() -> None:
    """At 150 a minute the T wave of the beat before lies where the P wave is: such a family is not exempt."""
    run = [500] + [400] * 60 + [1200]
    rr, family = [1000] * 100 + run + [1000] * 100, [0] * 100 + [1] * 61 + [0] * 101
    assert not judged(rr, family, NORMAL, WIDE_BEHIND_P).is_exempt[1]


@pytest.mark.parametrize(("few", "many"), [(2, 60)])
def test_what_few_beats_do_weighs_little(few: int, many: int) -> None:
    """The same habits give a small family less evidence than a big one."""
    rr, family = [800] * 9 + [500, 1100], [0] * 9 + [1, 0]
    small = judged(rr * few + [800] * 600, family * few + [0] * 600, NORMAL, WIDE)
    big = judged(rr * many, family * many, NORMAL, WIDE)
    assert small.odds[1] < big.odds[1] - 1


def test_same_wave_is_blind_to_level_slope_and_a_small_lag_but_not_to_size() -> None:
    """The likeness of a P wave looks at shape and size; the part it holds of the model is not lowered by noise."""
    line = np.linspace(-0.3, 0.5, SHAPE_LENGTH).astype(np.float32)
    noise = 0.02 * np.random.default_rng(3).standard_normal(SHAPE_LENGTH).astype(np.float32)
    half = (NORMAL - P_WAVE / 2).astype(np.float32)
    shapes = np.stack([NORMAL, np.roll(NORMAL, 2) + line, half, NORMAL + noise, WIDE])
    like, part, size_mv = families.same_wave(shapes, 0, families.P_WAVE)
    np.testing.assert_allclose(like[:2], 1, atol=0.02)
    assert 0.7 < like[2] < 0.9 and part[2] == pytest.approx(0.5, abs=0.05)
    assert like[3] < 0.95 and part[3] > 0.85
    assert part[4] < 0.2 and 0.02 < size_mv < 0.06


def test_early_beat_on_a_t_wave_is_told_by_the_middle_of_its_qrs() -> None:
    """A normal beat that rides on the T wave of an interpolated ventricular one stays normal; a later one is judged."""
    on_t_wave = (NORMAL + 0.35 * np.exp(-0.5 * ((T + 90) / 45) ** 2)).astype(np.float32)
    family = ([0] * 8 + [1, 2]) * 30
    early, later = ([800] * 8 + [480, rr_ms] for rr_ms in (340, 560))
    assert judged([*early] * 30, family, NORMAL, WIDE, on_t_wave).is_exempt[2]
    assert not judged([*later] * 30, family, NORMAL, WIDE, on_t_wave).is_exempt[2]
