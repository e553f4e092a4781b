"""Findings about the whole recording."""

from __future__ import annotations

import numpy as np
import pytest

from detectors import analyse_signal

FS_HZ = 250


def lead(r_mv: float, s_mv: float, t_mv: float) -> np.ndarray:
    """Two minutes at 75 beats a minute with given R, S and T amplitudes."""
    t = np.arange(120 * FS_HZ) / FS_HZ
    phase = (t % 0.8) - 0.3

    def bump(at: float, width: float) -> np.ndarray:
        return np.exp(-0.5 * ((phase - at) / width) ** 2)

    ecg = r_mv * bump(-0.012, 0.008) - s_mv * bump(0.012, 0.012) + t_mv * bump(0.27, 0.05)
    return ecg + 0.003 * np.random.default_rng(1).standard_normal(t.size)


def codes(ecg: np.ndarray) -> list[str]:
    return [finding.code for finding in analyse_signal(ecg, fs_hz=FS_HZ).findings]


@pytest.mark.parametrize(
    ("r_mv", "s_mv", "t_mv", "expected"),
    [
        (1.2, 0.2, 0.3, []),
        (0.1, 1.2, 0.25, ["lead_not_limb_like"]),
        (0.0, 1.2, -0.3, ["lead_upside_down"]),
        (0.12, 0.02, 0.03, ["low_amplitude"]),
    ],
)
def test_lead_is_judged_by_its_normal_beat(r_mv: float, s_mv: float, t_mv: float, expected: list[str]) -> None:
    """An rS complex with an upright T wave is not limb-like, with its T wave it is upside down, a tiny one is small."""
    assert codes(lead(r_mv, s_mv, t_mv)) == expected


def test_mostly_noise_is_said() -> None:
    """A recording of which more than half is missing says so."""
    ecg = np.concatenate([lead(1.2, 0.2, 0.3), np.full(200 * FS_HZ, np.nan)])
    assert "mostly_noise" in codes(ecg)
