"""Ventricular runs that are more likely noise."""

from __future__ import annotations

import numpy as np

from detectors.doubt import doubtful_runs


def doubtful(
    run_families: list[int], *, n_quiet: int = 200, in_noise: tuple[int, ...] = (), is_quiet: bool = True
) -> bool:
    """Whether a run of the given families, after a quiet stretch of family 0 and 20 beats of family 1, is doubtful.

    Families `in_noise` have twenty more beats in time that is not analysable.
    """
    family = [0] * n_quiet + [1] * 20 + [0] + run_families + [0] * 20 + [f for f in in_noise for _ in range(20)]
    n_beats, n_bad = len(family), 20 * len(in_noise)
    is_v, quiet = np.zeros(n_beats, dtype=bool), np.ones(n_beats, dtype=bool)
    run = slice(n_quiet + 21, n_quiet + 21 + len(run_families))
    is_v[run], quiet[run] = True, is_quiet
    is_analysable = np.arange(n_beats) < n_beats - n_bad
    starts = np.zeros(n_beats, dtype=bool)
    return doubtful_runs(is_v, starts, np.array(family, dtype=np.int16), is_analysable, quiet).first.size == 1


def test_a_run_of_a_known_shape_is_believed() -> None:
    """A run whose beats share a shape that occurs elsewhere, or repeat their own shape, stays."""
    assert not doubtful([1, 1, 1])
    assert not doubtful([7] * 12)


def test_a_run_of_ever_new_shapes_is_doubted() -> None:
    """A run of beats without a family or of rare families is doubtful."""
    assert doubtful([-1, -1, -1])
    assert doubtful([5, -1, 6, 1])


def test_a_shape_that_lives_in_noise_is_doubted_outside_quiet_time() -> None:
    """A single beat or a run of a family whose beats mostly lie in noise is doubtful, but not in quiet time."""
    for run in ([8], [8] * 6):
        assert doubtful(run, in_noise=(8,), is_quiet=False)
        assert not doubtful(run, in_noise=(8,))


def test_a_shape_of_the_whole_recording_is_believed_near_noise() -> None:
    """A family with as many beats in noise as all others have is not noise, however near noise it lies."""
    assert not doubtful([1, 1, 1], in_noise=(0, 1), n_quiet=20, is_quiet=False)


def test_couplets_are_left_alone() -> None:
    """Two beats that nothing repeats are no run and are not judged."""
    assert not doubtful([-1, -1])
