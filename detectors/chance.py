"""What chance alone would do: how many beats the after period would hold had nothing changed.

A mixture of lognormal levels, over what is not known of the days, with counting noise on top. Every sum over the
mixture goes column after column, so that an event's answer is the same to the last bit whichever others are asked with it.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import elementwise
from scipy.special import digamma, ndtr, polygamma

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NODE_STEP = 0.25
GAMMA_NODES = np.arange(-7.0, 5.1, NODE_STEP)  # SDs of a log-gamma variable around its mean
NEGLIGIBLE_WEIGHT = 1e-4
LEAST_SHAPE = 0.05  # fewer beats than this count as this many
LOG_TOLERANCE = 1e-6
WIDEST_LOG = 34.0  # ln beats beyond which nothing is searched
FARTHEST_COUNT = 8.0  # ln ratio that counting alone may need on top of the other variation
INTERVAL_TAIL = 0.025  # of each side
CHANCE_LIMIT = 0.05  # one-sided


class Chance(NamedTuple):
    """ln of the beats that the after period would hold had nothing changed: a mixture of normals over s.

    Arrays of shape (n_events, n_grid), `false_beats` (n_events,). The counting noise of the after period is not in them.
    """

    centre: Floats
    sd: Floats
    weight: Floats
    false_beats: Floats  # that come on top of the mixture


def trimmed(chance: Chance) -> Chance:
    """As many values of s as hold nearly all weight of every event: the rest costs time only.

    An event's own values do not depend on how many others need: further ones have no weight and repeat its first.
    """
    order = np.argsort(-chance.weight, axis=1, kind="stable")
    weight = np.take_along_axis(chance.weight, order, axis=1)
    is_needed = np.cumsum(weight, axis=1) - weight < 1 - NEGLIGIBLE_WEIGHT
    order = np.where(is_needed, order, order[:, :1])[:, : int(is_needed.sum(axis=1).max(initial=1))]
    weight = np.where(is_needed, weight, 0.0)[:, : order.shape[1]]
    centre, sd = (np.take_along_axis(table, order, axis=1) for table in (chance.centre, chance.sd))
    return Chance(centre, sd, weight / _sum(weight)[:, None], chance.false_beats)


def at_most(chance: Chance, shape: Floats, log_ratio: Floats) -> Floats:
    """Probability that a log-gamma variable of `shape` exceeds ln total, the true ratio being exp(log_ratio).

    With shape c + 1 it is the probability of at most c beats; with shape c, one less that of at least c beats.
    """
    shape = np.maximum(shape, LEAST_SHAPE)
    spread = np.sqrt(polygamma(1, shape))
    node = digamma(shape)[:, None] + spread[:, None] * GAMMA_NODES
    from_peak = node - np.log(shape)[:, None]
    mass = np.exp(-shape[:, None] * (np.expm1(from_peak) - from_peak))
    mass /= mass.sum(axis=1, keepdims=True)
    centre = chance.centre + log_ratio[:, None]
    sd = np.sqrt(chance.sd**2 + (NODE_STEP * spread[:, None]) ** 2 / 12)  # a node stands for its cell
    total = np.zeros(len(shape))
    for of_node, share in zip(_less_false(node, chance.false_beats).T, mass.T, strict=True):
        total += share * mean(chance.weight, ndtr((of_node[:, None] - centre) / sd))
    return total


def _less_false(log_beats: Floats, false_beats: Floats) -> Floats:
    """ln of what is left of beats, shape (n, k), when the false ones, shape (n,), are taken off; -inf for nothing."""
    share = np.minimum(false_beats[:, None] * np.exp(-log_beats), 1.0)
    with np.errstate(divide="ignore"):
        return np.asarray(log_beats + np.log1p(-share))


def fewest_by_chance(falling: Chance) -> Floats:
    """Beats below which the after period lies beyond chance; 0 when none is few enough."""

    def too_few(log_beats: Floats, row: Ints) -> Floats:
        return at_most(_rows(falling, row), np.expm1(log_beats) + 1, np.zeros(len(row))) - CHANCE_LIMIT

    nothing, rows = np.zeros(len(falling.centre)), np.arange(len(falling.centre))
    attainable = too_few(nothing, rows) < 0
    return np.where(attainable, np.expm1(_root(too_few, nothing, _widest(falling), rows)), 0.0)


def most_by_chance(rising: Chance) -> Floats:
    """Beats above which the after period lies beyond chance."""

    def too_many(log_beats: Floats, row: Ints) -> Floats:
        return at_most(_rows(rising, row), np.expm1(log_beats), np.zeros(len(row))) - (1 - CHANCE_LIMIT)

    n = len(rising.centre)
    return np.asarray(np.expm1(_root(too_many, np.zeros(n), _widest(rising), np.arange(n))))


def _widest(chance: Chance) -> Floats:
    farthest = (chance.centre + 12 * chance.sd).max(axis=1, initial=0.0) + 3 + np.log1p(chance.false_beats)
    return np.clip(farthest, 3, WIDEST_LOG)


def interval(falling: Chance, rising: Chance, observed: Floats) -> tuple[Floats, Floats]:
    """Ratios under which at least, and at most, the observed beats have the probability INTERVAL_TAIL.

    The observed number itself counts by half (mid-P), which keeps the coverage near its nominal value where beats are
    few; at no beats the upper end is the exact one-sided bound of twice that probability, the lower end 0. The lower
    end is also 0 where false beats alone may be all that was observed.
    """
    n = len(observed)

    def fewer(chance: Chance, log_ratio: Floats, row: Ints) -> Floats:
        beats, of_row = observed[row], _rows(chance, row)
        below = np.where(beats > 0, at_most(of_row, beats, log_ratio), 0.0)
        return (below + at_most(of_row, beats + 1, log_ratio)) / 2

    def ends(chance: Chance) -> tuple[Floats, Floats]:
        middle = np.log(np.maximum(observed, LEAST_SHAPE)) - mean(chance.weight, chance.centre)
        reach = 10 * chance.sd.max(axis=1, initial=0.0) + np.ptp(chance.centre, axis=1) + FARTHEST_COUNT
        reach = np.minimum(reach, WIDEST_LOG)
        return middle - reach, middle + reach

    rows = np.arange(n)
    high = np.exp(_root(lambda log_ratio, row: fewer(falling, log_ratio, row) - INTERVAL_TAIL, *ends(falling), rows))
    least, most = ends(rising)
    may_be_all = fewer(rising, least, rows) < 1 - INTERVAL_TAIL
    low = np.exp(_root(lambda log_ratio, row: fewer(rising, log_ratio, row) - 1 + INTERVAL_TAIL, least, most, rows))
    return np.where((observed > 0) & ~may_be_all, low, 0.0), high


def _root(f: Callable[..., Floats], low: Floats, high: Floats, *arguments: NDArray[Any]) -> Floats:
    found = elementwise.find_root(f, (low, high), args=arguments, tolerances={"xatol": LOG_TOLERANCE, "xrtol": 0})
    return np.asarray(found.x)


def _rows(chance: Chance, rows: Ints) -> Chance:
    return Chance._make(table[rows] for table in chance)


def mean(weight: Floats, values: Floats) -> Floats:
    return _sum(weight * values)


def _sum(table: Floats) -> Floats:
    """Sums of rows, column after column: further columns of 0 change nothing, nor do other rows."""
    total = np.zeros(len(table))
    for column in table.T:
        total += column
    return total
