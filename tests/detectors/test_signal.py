"""The working signal: box averages of 8 ms at any rate, exact wherever reading begins."""

from __future__ import annotations

import numpy as np
import pytest

from detectors import signal

RATES_HZ = [125.0, 128.0, 200.0, 250.0, 256.0, 360.0, 500.0, 977.3]


def read(counts: np.ndarray, first: int, last: int, fs_hz: float) -> np.ndarray:
    begin, end = signal.stored_span(first, last, fs_hz, counts.size)
    return signal.box_averages(counts[begin:end], first, last, fs_hz, gain=0.005)


@pytest.mark.parametrize("fs_hz", RATES_HZ)
def test_a_part_equals_the_same_part_of_the_whole(fs_hz: float) -> None:
    """Working samples read from the middle are bit for bit those of one long read."""
    counts = np.random.default_rng(1).integers(-32768, 32767, 20_000).astype(np.int16)
    n_working = signal.working_length(counts.size, fs_hz)
    whole = read(counts, 0, n_working, fs_hz)
    for first, last in ((0, 1), (17, 400), (1000, n_working)):
        np.testing.assert_array_equal(read(counts, first, last, fs_hz), whole[first:last])


@pytest.mark.parametrize("fs_hz", RATES_HZ)
def test_a_box_holds_the_mean_of_its_time(fs_hz: float) -> None:
    """A constant keeps its value and a ramp its value in the middle of each box."""
    counts = np.arange(5000, dtype=np.int16)
    n_working = signal.working_length(counts.size, fs_hz)
    middle = signal.working_to_sample(np.arange(n_working), fs_hz) + 0.5
    ramp = read(counts, 0, n_working, fs_hz) / 0.005
    # a sample is worth its count from its begin to its end, so a ramp of counts lies half a count under its line
    np.testing.assert_allclose(ramp, middle - 0.5, atol=0.51)
    constant = read(np.full(5000, 300, dtype=np.int16), 0, n_working, fs_hz)
    np.testing.assert_allclose(constant, 1.5, rtol=1e-6)


def test_largest_counts_do_not_overflow() -> None:
    """Sums of the largest counts keep their value."""
    counts = np.full(1000, 32767, dtype=np.int16)
    np.testing.assert_allclose(read(counts, 0, 125, 1000.0), 32767 * 0.005, rtol=1e-6)


def test_millivolts_become_counts_and_back() -> None:
    """A lead in mV is stored to 1/32,000 of its largest value; what is not finite is marked missing."""
    ecg = np.array([0.0, 1.5, -2.0, np.nan, np.inf])
    counts, mv_per_count = signal.to_counts(ecg)
    np.testing.assert_allclose(counts[:3] * mv_per_count, ecg[:3], atol=2.0 / 32_000)
    assert (counts[3:] == signal.MISSING_COUNT).all()
