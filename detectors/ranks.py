"""Are the values of later days lower or higher than those of earlier days, by their order alone?

For values that have no counts behind them, such as the longest run of a day.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

Floats = NDArray[np.float64]

EXACT_DAYS = 20  # days of both sides together up to which every arrangement is counted; normal theory beyond


class RankShift(NamedTuple):
    """Probability, if nothing changed, of ranks as low (as high) after as those seen; 1 without days on a side."""

    lower: float
    higher: float


def rank_shift(before: Floats, after: Floats, excess: float = 0.0) -> RankShift:
    """Wilcoxon's rank sum of the days after, ties at their mean rank, one-sided both ways.

    `before` and `after` hold one value per day. Days are exchangeable if nothing changed, all arrangements are equally
    likely (Wilcoxon 1945, doi:10.2307/3001968). We depart from that for the time between the sides: `excess` is the
    variance that it adds to the difference of the sides' means, as a multiple of the variance between days
    (`variability.excess_of_gap`), and the standard normal deviate of the probability shrinks accordingly.
    """
    if min(len(before), len(after)) == 0:
        return RankShift(1.0, 1.0)
    doubled = _doubled_ranks(np.concatenate([before, after]))
    seen = int(doubled[len(before) :].sum())
    tails = _exact_tails if len(doubled) <= EXACT_DAYS else _normal_tails
    widening = np.sqrt(1 + excess / (1 / len(before) + 1 / len(after)))
    return RankShift(*(float(ndtr(ndtri(tail) / widening)) for tail in tails(doubled, len(after), seen)))


def _doubled_ranks(values: Floats) -> NDArray[np.int64]:
    """Twice the rank of each value, which is whole for tied values too: those share their mean rank."""
    _, which, count = np.unique(values, return_inverse=True, return_counts=True)
    last = np.cumsum(count)
    return (2 * last - count + 1)[which]


def _exact_tails(doubled: NDArray[np.int64], chosen: int, seen: int) -> tuple[float, float]:
    """Share of all choices of `chosen` days whose rank sum is at most, and at least, the one seen."""
    ways = np.zeros((chosen + 1, int(doubled.sum()) + 1))
    ways[0, 0] = 1
    for rank in doubled:
        ways[1:, rank:] += ways[:-1, : ways.shape[1] - rank].copy()
    of_sum = ways[chosen]  # whole numbers: shares of them could add up to more than 1
    return float(of_sum[: seen + 1].sum() / of_sum.sum()), float(of_sum[seen:].sum() / of_sum.sum())


def _normal_tails(doubled: NDArray[np.int64], chosen: int, seen: int) -> tuple[float, float]:
    """Normal theory with the variance of the tied ranks and half a rank for continuity."""
    n = len(doubled)
    rank_sd = float(doubled.std()) / 2
    if rank_sd == 0:
        return 1.0, 1.0
    sd = rank_sd * np.sqrt(chosen * (n - chosen) / (n - 1))
    off = (seen - chosen * float(doubled.mean())) / 2
    return float(ndtr((off + 0.5) / sd)), float(ndtr((0.5 - off) / sd))
