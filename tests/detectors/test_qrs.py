"""Finding QRS complexes: T waves, gaps, interlopers."""

from __future__ import annotations

import numpy as np
import pytest

from detectors import analyse_signal, qrs

FS_HZ = 125


def wave(n_samples: int, centre_s: float, width_s: float, height_mv: float) -> np.ndarray:
    return height_mv * np.exp(-0.5 * ((np.arange(n_samples) / FS_HZ - centre_s) / width_s) ** 2)


def rhythm(n_beats: int, t_wave_mv: float, beat_mv: dict[int, float] | None = None) -> np.ndarray:
    """Narrow QRS of 1 mV every 0.8 s from 0.5 s on, each with a T wave 0.28 s later."""
    n_samples = int((n_beats * 0.8 + 1) * FS_HZ)
    ecg = np.zeros(n_samples)
    for beat in range(n_beats):
        height = (beat_mv or {}).get(beat, 1.0)
        ecg += wave(n_samples, 0.5 + 0.8 * beat, 0.012, height) + wave(n_samples, 0.78 + 0.8 * beat, 0.035, t_wave_mv)
    return ecg


@pytest.mark.parametrize("t_wave_mv", [0.2, 0.6, 1.2])
def test_tall_t_waves_are_no_beats(t_wave_mv: float) -> None:
    """A T wave as tall as its QRS or taller is not taken for a beat: it bends less sharply."""
    found = analyse_signal(rhythm(60, t_wave_mv), fs_hz=FS_HZ).beats.sample / FS_HZ
    np.testing.assert_allclose(found, 0.5 + 0.8 * np.arange(60), atol=0.03)


def test_a_small_beat_in_a_gap_is_found() -> None:
    """A beat a quarter as tall as its neighbours is found because a gap asks for it."""
    found = analyse_signal(rhythm(60, 0.1, {30: 0.25}), fs_hz=FS_HZ).beats.sample / FS_HZ
    assert np.abs(found - (0.5 + 0.8 * 30)).min() < 0.03


def test_level_survives_one_huge_artefact() -> None:
    """A spike fifty times the QRS does not deafen the detector for the beats around it."""
    ecg = rhythm(60, 0.1)
    ecg[int(20.9 * FS_HZ)] += 50
    found = analyse_signal(ecg, fs_hz=FS_HZ).beats.sample / FS_HZ
    expected = 0.5 + 0.8 * np.arange(60)
    missed = [beat for beat in expected if np.abs(found - beat).min() > 0.03]
    assert len(missed) <= 1


def test_a_weaker_detection_sooner_than_any_beat_is_a_t_wave() -> None:
    """The second one goes where it follows a steeper one within 230 ms; the steeper and the later ones stay."""
    energy = np.array([5, 3, 5, 3, 3, 5], dtype=np.float32)
    before = np.array([np.nan, 205, 700, 250, 205, 205], dtype=np.float32)
    # The shortest interval of two beats in the reference records is 250 ms (203); common practice, no source.
    assert qrs.is_t_wave(energy, before).tolist() == [False, True, False, False, False, False]


def test_weak_rare_detection_between_beats_on_time_is_an_interloper() -> None:
    """Of rare beats, those far weaker than both neighbours, or weak between beats that keep time, are no QRS."""
    energy = np.array([1.0, 0.3, 1.0, 0.7, 1.0, 0.7, 1.0], dtype=np.float32)
    before = np.array([800, 300, 500, 350, 450, 800, 800], dtype=np.float32)
    after = np.append(before[1:], 800).astype(np.float32)
    usual = np.full(7, 800, dtype=np.float32)
    rare = np.array([False, True, False, True, False, True, False])
    assert qrs.is_interloper(energy, before, after, usual, rare).tolist() == [False, True, False, True] + [False] * 3
    assert not qrs.is_interloper(energy, before, after, usual, np.zeros(7, dtype=bool)).any()


def test_of_two_bends_of_one_complex_the_stronger_stays() -> None:
    """Positions closer than any two beats can be are one beat; the rest comes back in order of position."""
    working = np.array([100.0, 220.0, 205.0, 400.0])
    energy = np.array([1.0, 1.0, 0.6, 1.0], dtype=np.float32)
    assert qrs.without_twins(working, energy).tolist() == [0, 1, 3]
