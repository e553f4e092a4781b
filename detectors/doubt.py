"""Ventricular runs that are more likely noise: of shapes that belong to noise, or that nothing repeats."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.episodes import stretches

RARE = 5  # beats of a family in the recording
NOISE_SHARE = 0.4  # of a family's beats in time that is not analysable: the family is noise
NOISE_EXCESS = 4.0  # and at least so many times the share of all beats
SHORTEST = 3  # beats of a run
DOUBTFUL_SHARE = 0.5  # of the beats of a run


class Runs(NamedTuple):
    """Half-open ranges of beats. Arrays of shape (n_runs,)."""

    first: NDArray[np.int64]
    last: NDArray[np.int64]


def doubtful_runs(
    is_v: NDArray[np.bool_], starts: NDArray[np.bool_], family: NDArray[np.int16], is_analysable: NDArray[np.bool_]
) -> Runs:
    """Ventricular runs of three or more beats of which at least half have a doubtful shape.

    `starts` marks beats that do not follow the one before in time. A real run repeats a shape, its own or one that
    occurs elsewhere; a burst of electrode motion makes a new shape with every beat, or shapes that come back in noise
    only.
    """
    is_doubtful = _has_doubtful_shape(family, is_analysable)
    first, last = stretches(is_v, starts)
    total = np.concatenate([[0], np.cumsum(is_doubtful)])
    length = last - first
    found = (length >= SHORTEST) & (total[last] - total[first] >= DOUBTFUL_SHARE * length)
    return Runs(first[found], last[found])


def _has_doubtful_shape(family: NDArray[np.int16], is_analysable: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Beats of no family, of a rare one, or of one that lives in noise, shape (n_beats,)."""
    row = family.astype(np.int64) + 1
    count = np.bincount(row, minlength=1)
    in_noise = np.bincount(row, ~is_analysable, minlength=1) / np.maximum(count, 1)
    usual = np.count_nonzero(~is_analysable) / max(is_analysable.size, 1)
    doubtful = (count < RARE) | ((in_noise > NOISE_SHARE) & (in_noise > NOISE_EXCESS * usual))
    doubtful[0] = True
    return doubtful[row]
