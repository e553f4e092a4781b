"""Which time is analysable."""

from __future__ import annotations

import numpy as np

from detectors import quality
from detectors.chunks import Blocks
from detectors.qrs import BLOCK
from detectors.results import QualityWindows

FS_HZ = 125.0
N_BLOCKS = 60


def seen(noise: np.ndarray, distance: np.ndarray, level: np.ndarray | None = None) -> quality.Seen:
    """A segment with one beat in each block."""
    flag = np.zeros(N_BLOCKS, dtype=bool)
    level = np.full(N_BLOCKS, 10, dtype=np.float32) if level is None else level.astype(np.float32)
    blocks = Blocks(flag, flag, flag, flag, noise.astype(np.float32), level)
    return quality.Seen(N_BLOCKS * BLOCK, blocks, distance.astype(np.float32), np.ones(N_BLOCKS, dtype=np.int16))


def quiet() -> tuple[np.ndarray, np.ndarray]:
    return np.full(N_BLOCKS, 0.4), np.full(N_BLOCKS, 0.004)


def without_qrs() -> quality.Seen:
    """Blocks 30 to 39 have a tenth of the level and of the noise."""
    noise, distance = quiet()
    level = np.full(N_BLOCKS, 10.0)
    level[30:40], noise[30:40] = 1.0, 0.04
    return seen(noise, distance, level)


def test_quiet_time_is_analysable() -> None:
    """Nothing is left out of a quiet segment."""
    assert quality.windows([seen(*quiet())], FS_HZ).segment.size == 0


def test_noise_needs_slope_and_odd_shapes_together() -> None:
    """Much slope between beats that stay readable, or odd beats alone, leave time analysable; both together do not."""
    noise, distance = quiet()
    noise[20:30], distance[40:50] = 1.6, 0.05
    assert quality.windows([seen(noise, distance)], FS_HZ).segment.size == 0
    distance[20:30] = 0.05
    bad = quality.windows([seen(noise, distance)], FS_HZ)
    assert bad.quality_reason.tolist() == ["noise"]
    assert bad.first_sample[0] <= 21 * BLOCK and bad.last_sample[0] >= 29 * BLOCK - 1


def test_suspect_time_holds_all_noise_and_more() -> None:
    """A lower limit finds the same noise, and weaker noise beside it."""
    noise, distance = quiet()
    noise[10:30], distance[10:20], distance[20:30] = 1.6, 0.05, 0.016
    bad, suspect = (
        quality.windows([seen(noise, distance)], FS_HZ, limit) for limit in (quality.NOISY, quality.SUSPECT)
    )
    assert bad.last_sample[0] < 24 * BLOCK
    assert suspect.first_sample[0] <= bad.first_sample[0] and suspect.last_sample[0] >= 29 * BLOCK - 1


def test_beats_unlike_any_throughout_are_noise() -> None:
    """In a recording without any quiet time, beats far from every family are not taken for its usual scatter."""
    noise, _ = quiet()
    assert quality.windows([seen(noise, np.full(N_BLOCKS, 0.2))], FS_HZ).last_sample[0] == N_BLOCKS * BLOCK - 1


def test_limits_follow_the_recordings_own_quiet_time() -> None:
    """A recording that is twice as noisy throughout loses nothing."""
    noise, distance = quiet()
    assert quality.windows([seen(2 * noise, 3 * distance)], FS_HZ).segment.size == 0


def test_vanished_qrs_is_lead_off() -> None:
    """Time in which the QRS level falls to a tenth is lead-off, not a pause."""
    bad = quality.windows([without_qrs()], FS_HZ)
    assert bad.quality_reason.tolist() == ["lead_off"]
    assert (bad.first_sample[0], bad.last_sample[0]) == (30 * BLOCK, 40 * BLOCK - 1)


def test_analysable_time_is_what_is_left() -> None:
    """Analysable seconds are the samples outside all windows."""
    one = without_qrs()
    bad = quality.windows([one], FS_HZ)
    assert quality.analysable_s(one.n_samples, bad, FS_HZ) == (N_BLOCKS - 10) * BLOCK / FS_HZ


def test_more_noise_leaves_known_windows_as_they_are() -> None:
    """Added noise fills only time that was not bad yet; windows stay disjoint and ordered."""
    bad = QualityWindows(np.zeros(1, dtype=np.int16), np.array([100]), np.array([199]), np.array(["missing"]))
    more = quality.with_noise(bad, np.array([0, 1], dtype=np.int16), np.array([50, 10]), np.array([250, 20]))
    rows = list(zip(*(column.tolist() for column in more), strict=True))
    assert rows == [(0, 50, 99, "noise"), (0, 100, 199, "missing"), (0, 200, 250, "noise"), (1, 10, 20, "noise")]


def test_beats_are_placed_against_windows_per_segment() -> None:
    """A beat is outside when its own segment has no window there; a silent window breaks the chain behind it."""
    bad = QualityWindows(np.array([1], dtype=np.int16), np.array([100]), np.array([199]), np.array(["missing"]))
    segment, sample = np.array([0, 0, 1, 1, 1], dtype=np.int16), np.array([50, 150, 50, 150, 250])
    assert quality.is_outside(bad, segment, sample).tolist() == [True, True, True, False, True]
    assert quality.has_gap_before(bad, segment, sample).tolist() == [False, False, False, False, True]
