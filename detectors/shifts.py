"""When did the level shift? A search that knows no therapy date, to be drawn beside the dates that are known.

Least squares on a series, one change (`single_shift`) or as many as a penalty allows (`shifts`, the exact search over
all partitions of Jackson et al., IEEE Signal Process Lett 2005;12:105, without pruning as series are short).
A shift is a description, never a verdict: ectopy drifts by itself, and a drift is cut into steps as well.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

PENALTY_PER_LOG_N = 3.0  # cost of a shift in units of the noise variance, times ln n


class Shift(NamedTuple):
    """The split of a series in two that leaves the least squares."""

    first_after: int  # index of the first value after the shift
    mean_before: float
    mean_after: float
    gain: float  # reduction of the sum of squares


def single_shift(values: ArrayLike, weights: ArrayLike | None = None) -> Shift:
    """Best split of a series of shape (n,), n >= 2, with optional positive weights (inverse variances)."""
    y = np.asarray(values, dtype=float)
    w = np.ones(len(y)) if weights is None else np.asarray(weights, dtype=float)
    n = len(y)
    if n < 2:
        raise ValueError(f"a series of {n} values has no shift; expected at least two")
    squares = _squares(y, w)
    split = np.arange(1, n)
    remaining = squares[0, split] + squares[split, n]
    best = int(split[np.argmin(remaining)])
    before, after = (float(np.average(y[part], weights=w[part])) for part in (slice(best), slice(best, n)))
    return Shift(best, before, after, float(squares[0, n] - remaining.min()))


def shifts(values: ArrayLike, noise_sd: ArrayLike, *, penalty: float | None = None, min_length: int = 2) -> Ints:
    """Indices of the first values after each shift, ascending; empty when the level holds.

    `noise_sd` is the SD of a value around its level, one number or shape (n,). A shift must lower the squares, in units
    of the noise variance, by more than `penalty` (default 3 ln n); levels hold for at least `min_length` values.
    """
    y = np.asarray(values, dtype=float)
    n = len(y)
    squares = _squares(y, np.broadcast_to(1 / np.asarray(noise_sd, dtype=float) ** 2, n))
    toll = PENALTY_PER_LOG_N * np.log(max(n, 2)) if penalty is None else penalty
    best = np.full(n + 1, np.inf)
    best[0] = -toll
    start = np.zeros(n + 1, dtype=np.int64)
    for end in range(min_length, n + 1):
        total = best[: end - min_length + 1] + squares[: end - min_length + 1, end]
        start[end] = np.argmin(total)
        best[end] = total[start[end]] + toll
    return _walk_back(start, n)


def _walk_back(start: Ints, end: int) -> Ints:
    found = []
    while end > 0 and start[end] > 0:
        end = int(start[end])
        found.append(end)
    return np.array(found[::-1], dtype=np.int64)


def _squares(values: Floats, weights: Floats) -> Floats:
    """Weighted squares around the mean of values i to before j, shape (n + 1, n + 1); 0 where j <= i."""
    y = values - values.mean() if len(values) else values  # keeps the sums small
    w, wy, wyy = (np.concatenate([[0.0], np.cumsum(weights * y**k)]) for k in (0, 1, 2))
    between = np.triu(w - w[:, None], 1)
    mean_part = np.divide((wy - wy[:, None]) ** 2, between, out=np.zeros_like(between), where=between > 0)
    return np.maximum(np.triu(wyy - wyy[:, None], 1) - mean_part, 0.0)
