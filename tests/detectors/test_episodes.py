"""Episodes from labelled beats."""

from __future__ import annotations

import numpy as np

from detectors.episodes import Rhythm, find_episodes

FS_HZ = 100


def episodes_of(classes: str, rr_ms: float = 500, *, gaps: tuple[int, ...] = (), cycles: int = 3, segment_at: int = 0):
    """(kind, first beat, last beat, beats) of every episode of a row of classes, one beat every rr_ms."""
    n_beats = len(classes)
    before = np.full(n_beats, rr_ms, dtype=np.float32)
    before[[0, *gaps]] = np.nan
    segment = (np.arange(n_beats) >= (segment_at or n_beats)).astype(np.int16)
    sample = np.arange(n_beats, dtype=np.int64) * int(rr_ms * FS_HZ / 1000)
    beats = Rhythm(segment, sample, np.array(list(classes)), before, np.zeros(n_beats, dtype=np.float32))
    found = find_episodes(beats, fs_hz=FS_HZ, bigeminy_min_cycles=cycles, trigeminy_min_cycles=cycles, pause_ms=2000)
    step = int(rr_ms * FS_HZ / 1000)
    return [
        (str(kind), int(first) // step, int(last) // step, int(count))
        for kind, first, last, count in zip(
            found.episode_kind, found.first_sample, found.last_sample, found.beat_count, strict=True
        )
    ]


def test_two_in_a_row_are_a_couplet_and_three_a_run() -> None:
    """Exactly two ventricular beats make a couplet, three or more a run, one nothing."""
    # Source: reference comparator rxr (WFDB): a couplet is 2, a run 3 or more consecutive ventricular beats
    assert episodes_of("NVNNVVNNVVVN") == [("couplet", 4, 5, 2), ("run", 8, 10, 3)]


def test_rate_of_a_run() -> None:
    """Intervals of 500 ms are 120 beats a minute."""
    beats = Rhythm(
        np.zeros(3, dtype=np.int16),
        np.array([0, 50, 100]),
        np.array(["V", "V", "V"]),
        np.array([np.nan, 500, 500], dtype=np.float32),
        np.zeros(3, dtype=np.float32),
    )
    found = find_episodes(beats, fs_hz=FS_HZ, bigeminy_min_cycles=3, trigeminy_min_cycles=3, pause_ms=2000)
    assert found.rate_bpm.tolist() == [120.0] and found.duration_s.tolist() == [1.0]


def test_a_gap_ends_a_run() -> None:
    """Ventricular beats on both sides of a gap are not one run."""
    assert episodes_of("NVVVVN", gaps=(3,)) == [("couplet", 1, 2, 2), ("couplet", 3, 4, 2)]


def test_bigeminy_and_trigeminy_need_their_cycles() -> None:
    """Every second beat is bigeminy, every third trigeminy, from the stated number of cycles on."""
    # common practice, no source: three cycles; the number is a setting
    assert episodes_of("NNVNVNVNVNN") == [("bigeminy", 2, 8, 7)]
    assert episodes_of("NNVNVNVNN") == []
    assert episodes_of("NVNNVNNVNNVN") == [("trigeminy", 1, 10, 10)]
    assert episodes_of("NVNVNVN", cycles=2) == [("bigeminy", 1, 5, 5)]


def test_supraventricular_runs_are_kept_apart() -> None:
    """Three supraventricular beats in a row make a run of their own kind."""
    assert episodes_of("NSSSNSN") == [("sv_run", 1, 3, 3)]


def test_long_intervals_are_pauses() -> None:
    """An interval of the stated length is a pause from the beat before to the beat after."""
    assert episodes_of("NN", rr_ms=2000) == [("pause", 0, 1, 2)]
    assert episodes_of("NN", rr_ms=1990) == []
