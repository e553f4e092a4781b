"""Timing of beats: usual interval, pauses, R-on-T, fast stretches, irregularity."""

from __future__ import annotations

import numpy as np

from detectors import rhythm
from detectors.results import PAUSE_KINDS


def around(rr_ms: list[float]) -> tuple[np.ndarray, np.ndarray]:
    """RR before and after each beat of a chain of intervals."""
    chain = np.array(rr_ms, dtype=np.float32)
    return np.concatenate([[np.nan], chain]).astype(np.float32), np.concatenate([chain, [np.nan]]).astype(np.float32)


def test_pause_kinds_at_sixty_beats_a_minute() -> None:
    """At 1.0 s sinus interval a sum of 2.0 s is a full pause, 1.88 s a reset one, 1.0 s an interpolated beat."""
    # common practice, no source: an undisturbed sinus node gives 2.0 s, a reset one 0.88 s + 1.0 s = 1.88 s
    before = np.array([600, 880, 450, 600], dtype=np.float32)
    after = np.array([1400, 1000, 550, 1400], dtype=np.float32)
    usual = np.full(4, 1000, dtype=np.float32)
    premature = np.array([True, True, True, False])
    kinds = rhythm.pause_kinds(before, after, usual, premature, tolerance_pct=8.0)
    assert [PAUSE_KINDS[kind] for kind in kinds] == ["full", "reset", "interpolated", ""]


def test_usual_interval_is_the_sinus_cycle_in_bigeminy() -> None:
    """Where every second beat comes early with a full pause, the usual interval is the sinus cycle."""
    before, after = around([600, 1400] * 40)
    # common practice, no source: 0.6 s + 1.4 s are two sinus cycles of 1.0 s
    np.testing.assert_allclose(rhythm.usual_rr_ms(before, after), 1000)


def test_usual_interval_outside_a_run_is_the_one_before_it() -> None:
    """The interval against which the first beat of a long fast run is early is the slow one before the run."""
    before, after = around([1000] * 30 + [400] * 60 + [1000] * 30)
    is_ectopic = np.zeros(before.size, dtype=bool)
    is_ectopic[31:91] = True
    usual = rhythm.usual_rr_outside_ms(before, after, rhythm.usual_rr_ms(before, after), is_ectopic)
    np.testing.assert_allclose(usual[31:91], 1000, rtol=0.01)


def test_usual_interval_has_a_value_when_nothing_is_known() -> None:
    """A single beat, which has no interval at all, gets the stated default."""
    unknown = np.array([np.nan], dtype=np.float32)
    assert rhythm.usual_rr_ms(unknown, unknown).tolist() == [800.0]


def test_r_on_t_index_below_one_meets_the_t_wave() -> None:
    """At 60 beats a minute a coupling under the estimated QT of 400 ms has an index under 1."""
    # from memory: Fridericia 1920, QT = QTc x RR^(1/3); at RR 1 s the QT is the QTc, here 400 ms
    index = rhythm.r_on_t_index(np.array([330, 400, 600], dtype=np.float32), np.full(3, 1000, dtype=np.float32))
    np.testing.assert_allclose(index, [0.825, 1.0, 1.5], rtol=1e-6)


def test_fast_stretch_lasts_until_an_interval_is_long_again() -> None:
    """A stretch that begins at once counts as a whole; a rate that merely rises does not."""
    before, _ = around([800] * 20 + [500] * 30 + [900] + [800] * 5)
    reference = np.full(before.size, 800, dtype=np.float32)
    onset = np.zeros(before.size, dtype=bool)
    onset[21] = True
    assert np.flatnonzero(rhythm.fast_stretches(before, reference, onset)).tolist() == list(range(21, 51))
    rising, _ = around([800] * 20 + [695] * 30 + [710] + [800] * 5)
    assert not rhythm.fast_stretches(rising, reference, onset).any()


def test_long_stretch_at_a_slow_rate_is_a_change_of_rate() -> None:
    """Thirty beats at 63 a minute after a rate half as fast are no fast stretch, three are."""
    for n_beats, expected in ((30, 0), (3, 3)):
        before, _ = around([1860] * 20 + [950] * n_beats + [1860] * 5)
        onset = np.zeros(before.size, dtype=bool)
        onset[21] = True
        reference = np.full(before.size, 1860, dtype=np.float32)
        assert rhythm.fast_stretches(before, reference, onset).sum() == expected


def test_irregularity_tells_fibrillation_from_sinus_rhythm() -> None:
    """Random intervals score near 1, a steady rhythm with some ectopic beats near 0."""
    rng = np.random.default_rng(2)
    random_rr, _ = around(rng.uniform(450, 1100, 200).tolist())
    plain = np.ones(201, dtype=bool)
    assert np.median(rhythm.irregularity(random_rr, plain)) > 0.8
    steady, _ = around(([800] * 10 + [500, 1100]) * 16)
    plain = np.ones(steady.size, dtype=bool)
    plain[11::12] = False
    assert np.median(rhythm.irregularity(steady, plain)) < 0.1


def test_rhythm_that_repeats_itself_is_not_irregular() -> None:
    """Every second or third beat early: the intervals jump, but the same ones come back."""
    for group in ([600, 1150], [900, 600, 1200]):
        repeated, _ = around(group * 60)
        plain = np.ones(repeated.size, dtype=bool)
        assert np.median(rhythm.irregularity(repeated, plain)) < 0.1


def test_irregularity_does_not_depend_on_where_slabs_end(monkeypatch) -> None:
    """Beats are looked at slab by slab; the share near a slab's end is that of the whole recording."""
    rng = np.random.default_rng(3)
    rr_ms, _ = around(np.where(rng.random(700) < 0.5, rng.uniform(450, 1100, 700), 800).tolist())
    plain = rng.random(701) < 0.9
    whole = rhythm.irregularity(rr_ms, plain)
    monkeypatch.setattr(rhythm, "SLAB_ROWS", 37)
    assert np.array_equal(rhythm.irregularity(rr_ms, plain), whole)
