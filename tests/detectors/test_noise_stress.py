"""Noise is added at the stated ratio and in the stated stretches."""

import numpy as np
import pytest

from detectors import noise_stress, synthetic, synthetic_beats

FS_HZ = 250


@pytest.fixture(scope="module")
def clean():
    beats = synthetic_beats.exact_beats([("N", 1.0)] * 600, fs_hz=FS_HZ)
    return synthetic.draw(beats, n_samples=600 * FS_HZ, fs_hz=FS_HZ).astype(float), beats.sample


@pytest.fixture(scope="module")
def noise():
    return np.random.default_rng(1).standard_normal(100 * FS_HZ)


@pytest.mark.parametrize("snr_db", [24, 6, 0])
def test_the_ratio_is_met(clean, noise, snr_db):
    """QRS power over the power of what was added is the stated ratio."""
    ecg_mv, qrs = clean
    added = noise_stress.with_noise(ecg_mv, noise, qrs, fs_hz=FS_HZ, snr_db=snr_db) - ecg_mv
    of_noise = added[300 * FS_HZ : 420 * FS_HZ]
    ratio = noise_stress.qrs_power(ecg_mv, qrs, fs_hz=FS_HZ) / np.mean(of_noise**2)
    # Source: Moody, Muldrow, Mark, Computers in Cardiology 1984;11:381: the ratio is of powers, in decibels
    assert 10 * np.log10(ratio) == pytest.approx(snr_db, abs=0.2)


def test_the_stretches(clean, noise):
    """The first five minutes and every second stretch of two minutes stay clean."""
    ecg_mv, qrs = clean
    added = noise_stress.with_noise(ecg_mv, noise, qrs, fs_hz=FS_HZ, snr_db=12) != ecg_mv
    noisy_minutes = [minute for minute in range(10) if added[minute * 60 * FS_HZ :][: 60 * FS_HZ].mean() > 0.99]
    # Source: WFDB applications guide, noise stress test: 5 min clean, then 2 min noise and 2 min clean in turn
    assert noisy_minutes == [5, 6, 9]
    assert not added[7 * 60 * FS_HZ : 9 * 60 * FS_HZ].any()


def test_signal_power_of_a_known_amplitude(clean):
    """The power of QRS complexes of one amplitude is that amplitude squared over 8, as for a sine of that swing."""
    n = np.arange(FS_HZ * 60)
    sine = 0.5 * np.sin(2 * np.pi * 25 * n / FS_HZ + 0.3)
    # common practice, no source: a sine of swing 1 has mean square 1/8
    assert noise_stress.qrs_power(sine, n[100:-100:50], fs_hz=FS_HZ) == pytest.approx(np.mean(sine**2), rel=0.02)


def test_nothing_to_measure(clean, noise):
    """Without a QRS or without a second of noise there is no ratio, and the error says so."""
    ecg_mv, qrs = clean
    with pytest.raises(ValueError, match="no QRS complex"):
        noise_stress.with_noise(ecg_mv, noise, qrs[:0], fs_hz=FS_HZ, snr_db=6)
    with pytest.raises(ValueError, match="at least one second"):
        noise_stress.with_noise(ecg_mv, noise[:10], qrs, fs_hz=FS_HZ, snr_db=6)
