"""Ventricular beats that are more likely noise: shapes of noise in time that is not quiet, and runs that nothing repeats."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.episodes import stretches

RARE = 5  # beats of a family in the recording
NOISE_ODDS = 3.0  # a family whose beats are so much likelier than all beats to lie in noise, is noise
NOISE_SHARE = 0.15  # and at least so many of its beats do
PRIOR_BEATS = 5.0  # as many beats that lie in noise as usual are added to each family: few beats do not tell
SHORTEST = 3  # beats of a run
DOUBTFUL_SHARE = 0.5  # of the beats of a stretch


class Runs(NamedTuple):
    """Half-open ranges of beats. Arrays of shape (n_runs,)."""

    first: NDArray[np.int64]
    last: NDArray[np.int64]


def doubtful_runs(
    is_v: NDArray[np.bool_],
    starts: NDArray[np.bool_],
    family: NDArray[np.int16],
    is_analysable: NDArray[np.bool_],
    is_quiet: NDArray[np.bool_],
) -> Runs:
    """Stretches of ventricular beats, single ones too, of which at least half are doubtful.

    `starts` marks beats that do not follow the one before in time, `is_quiet` those that lie in no suspect time. A beat
    that does is doubtful when its shape comes back in noise mostly. In three beats or more one whose shape nothing
    repeats is doubtful as well, wherever it lies: a real run repeats a shape, its own or one that occurs elsewhere,
    while a burst of electrode motion makes a new one with every beat.
    """
    first, last = stretches(is_v, starts)
    length = last - first
    of_noise = _is_of_noise(family, is_analysable) & ~is_quiet
    is_new = np.bincount(family.astype(np.int64) + 1)[family + 1] < RARE
    is_new |= family < 0

    def mostly(doubtful: NDArray[np.bool_]) -> NDArray[np.bool_]:
        total = np.concatenate([[0], np.cumsum(doubtful)])
        return total[last] - total[first] >= DOUBTFUL_SHARE * length

    found = mostly(of_noise) | (length >= SHORTEST) & mostly(of_noise | is_new)
    return Runs(first[found], last[found])


def _is_of_noise(family: NDArray[np.int16], is_analysable: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Beats of a family that lives in time that is not analysable, shape (n_beats,)."""
    row = family.astype(np.int64) + 1
    count, in_noise = np.bincount(row, minlength=1), np.bincount(row, ~is_analysable, minlength=1)
    usual = np.count_nonzero(~is_analysable) / max(is_analysable.size, 1)
    noise, quiet = in_noise + PRIOR_BEATS * usual, count - in_noise + PRIOR_BEATS * (1 - usual)
    of_noise = (noise * (1 - usual) > NOISE_ODDS * usual * quiet) & (in_noise > NOISE_SHARE * count)
    of_noise[0] = False  # beats without a family share no shape
    return of_noise[row]
