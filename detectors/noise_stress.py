"""Adding recorded noise to a clean ECG at a stated signal-to-noise ratio.

Method: Moody, Muldrow, Mark, Computers in Cardiology 1984;11:381: five clean minutes, then two minutes with noise and
two without, in turn. Signal power is the square of the usual peak-to-peak QRS amplitude over 8, noise power the square
of the usual root mean square within a second; "usual" is a mean without the outer 5 % on both sides (these measures:
from memory). Departure: noise that is shorter than the recording is repeated, and its mean is taken out first.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

CLEAN_START_S = 300
NOISE_S = CLEAN_S = 120
_QRS_HALF_S = 0.05
_OUTER_SHARE = 0.05


def with_noise(
    ecg_mv: NDArray[np.floating],
    noise_mv: NDArray[np.floating],
    qrs: NDArray[np.integer],
    *,
    fs_hz: float,
    snr_db: float,
) -> NDArray[np.float64]:
    """The ECG with noise in every second stretch of two minutes, shape (n_samples,), mV.

    `noise_mv` has the same rate; `qrs` holds the samples of normal QRS complexes, from which the signal power is taken.
    Raises ValueError when there is no QRS or no second of noise to measure.
    """
    noise = np.asarray(noise_mv, dtype=np.float64) - np.mean(noise_mv)
    gain = np.sqrt(qrs_power(ecg_mv, qrs, fs_hz=fs_hz) / (noise_power(noise, fs_hz=fs_hz) * 10 ** (snr_db / 10)))
    stressed = np.array(ecg_mv, dtype=np.float64)
    for begin in range(round(CLEAN_START_S * fs_hz), len(stressed), round((NOISE_S + CLEAN_S) * fs_hz)):
        end = min(begin + round(NOISE_S * fs_hz), len(stressed))
        stressed[begin:end] += gain * np.take(noise, np.arange(begin, end), mode="wrap")
    return stressed


def qrs_power(ecg_mv: NDArray[np.floating], qrs: NDArray[np.integer], *, fs_hz: float) -> float:
    """Power of the QRS complexes, mV squared: the usual peak-to-peak amplitude squared, over 8."""
    half = round(_QRS_HALF_S * fs_hz)
    inner = qrs[(qrs >= half) & (qrs < len(ecg_mv) - half)]
    if not len(inner):
        raise ValueError("no QRS complex lies within the signal; expected some normal beats to measure its power")
    windows = np.asarray(ecg_mv)[inner[:, None] + np.arange(-half, half + 1)]
    return float(_usual(np.ptp(windows, axis=1)) ** 2 / 8)


def noise_power(noise_mv: NDArray[np.floating], *, fs_hz: float) -> float:
    """Power of the noise, mV squared: the usual root mean square within one second, squared."""
    second = round(fs_hz)
    count = len(noise_mv) // second
    if not count:
        raise ValueError(f"the noise has {len(noise_mv)} samples; expected at least one second, {second} samples")
    return float(_usual(noise_mv[: count * second].reshape(count, second).std(axis=1)) ** 2)


def _usual(values: NDArray[np.floating]) -> float:
    cut = int(_OUTER_SHARE * len(values))
    return float(np.mean(np.sort(values)[cut : len(values) - cut]))
