"""When did the level shift? A search that knows no therapy date, to be drawn beside the dates that are known.

Least squares on a series, one change (`single_shift`) or as many as a penalty allows (`shifts`, the exact search of
Killick, Fearnhead, Eckley, J Am Stat Assoc 2012;107:1590 with pruning). A shift is a description, never a verdict:
ectopy drifts by itself, and a drift is cut into steps as well.
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
    cost = _SegmentCost(values, weights)
    n = len(cost)
    if n < 2:
        raise ValueError(f"a series of {n} values has no shift; expected at least two")
    split = np.arange(1, n)
    remaining = cost(np.zeros(n - 1, dtype=int), split) + cost(split, np.full(n - 1, n))
    best = int(split[np.argmin(remaining)])
    gain = float(cost(np.array([0]), np.array([n]))[0] - remaining.min())
    return Shift(best, cost.mean(0, best), cost.mean(best, n), gain)


def shifts(values: ArrayLike, noise_sd: ArrayLike, *, penalty: float | None = None, min_length: int = 2) -> Ints:
    """Indices of the first values after each shift, ascending; empty when the level holds.

    `noise_sd` is the SD of a value around its level, one number or shape (n,). A shift must lower the squares, in units
    of the noise variance, by more than `penalty` (default 3 ln n); levels hold for at least `min_length` values.
    """
    y = np.asarray(values, dtype=float)
    n = len(y)
    cost = _SegmentCost(y, np.broadcast_to(1 / np.asarray(noise_sd, dtype=float) ** 2, n))
    toll = PENALTY_PER_LOG_N * np.log(max(n, 2)) if penalty is None else penalty
    best = np.full(n + 1, np.inf)
    best[0] = -toll
    last = np.zeros(n + 1, dtype=int)
    starts = np.array([0])
    for end in range(min_length, n + 1):
        total = best[starts] + cost(starts, np.full(len(starts), end)) + toll
        chosen = int(np.argmin(total))
        best[end], last[end] = total[chosen], starts[chosen]
        new = end - min_length + 1
        starts = np.append(starts[total - toll <= best[end]], new) if np.isfinite(best[new]) else starts
    return _walk_back(last, n)


def _walk_back(last: Ints, n: int) -> Ints:
    found = []
    while n > 0 and last[n] > 0:
        n = int(last[n])
        found.append(n)
    return np.array(found[::-1], dtype=np.int64)


class _SegmentCost:
    """Weighted squares around the mean of any stretch, from running sums."""

    def __init__(self, values: ArrayLike, weights: ArrayLike | None) -> None:
        y = np.asarray(values, dtype=float)
        w = np.ones(len(y)) if weights is None else np.asarray(weights, dtype=float)
        y = y - y.mean() if len(y) else y  # keeps the sums small
        self._shift = float(np.asarray(values, dtype=float).mean()) if len(y) else 0.0
        self._w, self._wy, self._wyy = (np.concatenate([[0.0], np.cumsum(w * y**k)]) for k in (0, 1, 2))

    def __len__(self) -> int:
        return len(self._w) - 1

    def __call__(self, start: Ints, end: Ints) -> Floats:
        w, wy, wyy = (table[end] - table[start] for table in (self._w, self._wy, self._wyy))
        return np.maximum(wyy - wy**2 / w, 0.0)

    def mean(self, start: int, end: int) -> float:
        """Weighted mean of the values from `start` to before `end`."""
        return float((self._wy[end] - self._wy[start]) / (self._w[end] - self._w[start]) + self._shift)
