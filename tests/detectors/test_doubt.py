"""Ventricular runs that are more likely noise."""

from __future__ import annotations

import numpy as np

from detectors.doubt import doubtful_runs


def doubtful(run_families: list[int], *, n_quiet: int = 200, in_noise: tuple[int, ...] = ()) -> bool:
    """Whether a run of the given families, after a quiet stretch of family 0 and 20 beats of family 1, is doubtful.

    Families `in_noise` have twenty more beats in time that is not analysable.
    """
    family = [0] * n_quiet + [1] * 20 + [0] + run_families + [0] * 20 + [f for f in in_noise for _ in range(20)]
    n_beats, n_bad = len(family), 20 * len(in_noise)
    is_v = np.zeros(n_beats, dtype=bool)
    is_v[n_quiet + 21 : n_quiet + 21 + len(run_families)] = True
    is_analysable = np.arange(n_beats) < n_beats - n_bad
    runs = doubtful_runs(is_v, np.zeros(n_beats, dtype=bool), np.array(family, dtype=np.int16), is_analysable)
    return runs.first.size == 1


def test_a_run_of_a_known_shape_is_believed() -> None:
    """A run whose beats share a shape that occurs elsewhere, or repeat their own shape, stays."""
    assert not doubtful([1, 1, 1])
    assert not doubtful([7] * 12)


def test_a_run_of_ever_new_shapes_is_doubted() -> None:
    """A run of beats without a family or of rare families is doubtful."""
    assert doubtful([-1, -1, -1])
    assert doubtful([5, -1, 6, 1])


def test_a_shape_that_lives_in_noise_makes_no_run() -> None:
    """A run of a family whose beats mostly lie in time that is not analysable is doubtful."""
    assert doubtful([8, 8, 8, 8, 8, 8], in_noise=(8,))


def test_couplets_are_left_alone() -> None:
    """Two beats are no run and are not judged."""
    assert not doubtful([-1, -1])
