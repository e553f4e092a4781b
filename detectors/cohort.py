"""Figures over a cohort: shares with intervals, mean ratios, and p-values that are looked at together."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betaincinv, ndtri, stdtrit

Floats = NDArray[np.float64]


class Share(NamedTuple):
    """A share with its 95 % interval, all between 0 and 1; NaN of nobody."""

    share: float
    low: float
    high: float


class MeanRatio(NamedTuple):
    """Geometric mean of ratios with its 95 % interval."""

    ratio: float
    low: float
    high: float


class Agreement(NamedTuple):
    """Mean difference of two methods with limits of agreement and the 95 % interval of the mean."""

    mean: float
    sd: float
    limit_low: float
    limit_high: float
    mean_low: float
    mean_high: float


def wilson_share(successes: int, of: int) -> Share:
    """Share with the score interval of Wilson 1927, which behaves with few patients and shares near 0 or 1."""
    _check_share(successes, of)
    if of == 0:
        return Share(np.nan, np.nan, np.nan)
    z, p = ndtri(0.975), successes / of
    centre = (p + z**2 / (2 * of)) / (1 + z**2 / of)
    half = z / (1 + z**2 / of) * np.sqrt(p * (1 - p) / of + z**2 / (4 * of**2))
    return Share(p, max(0.0, float(centre - half)), min(1.0, float(centre + half)))


def exact_share(successes: int, of: int) -> Share:
    """Share with the exact interval of Clopper and Pearson 1934, at least 95 % whatever the truth."""
    _check_share(successes, of)
    if of == 0:
        return Share(np.nan, np.nan, np.nan)
    low = betaincinv(successes, of - successes + 1, 0.025) if successes else 0.0
    high = betaincinv(successes + 1, of - successes, 0.975) if successes < of else 1.0
    return Share(successes / of, float(low), float(high))


def geometric_mean_ratio(ratios: ArrayLike) -> MeanRatio:
    """Mean of positive log ratios, shape (n,), with Student's interval; no interval for n < 3."""
    logs = np.log(np.asarray(ratios, dtype=float))
    if len(logs) < 3:
        return MeanRatio(float(np.exp(logs.mean())) if len(logs) else np.nan, np.nan, np.nan)
    half = stdtrit(len(logs) - 1, 0.975) * logs.std(ddof=1) / np.sqrt(len(logs))
    ratio, low, high = np.exp(logs.mean() + np.array([0.0, -half, half]))
    return MeanRatio(float(ratio), float(low), float(high))


def agreement(first: ArrayLike, second: ArrayLike) -> Agreement:
    """Differences first - second of two methods on the same n >= 3 subjects (Bland and Altman, Lancet 1986;i:307).

    Limits are mean +- 2 SD as there; for counts give logarithms.
    """
    difference = np.asarray(first, dtype=float) - np.asarray(second, dtype=float)
    n = len(difference)
    if n < 3:
        raise ValueError(f"{n} pairs; expected at least three")
    mean, sd = float(difference.mean()), float(difference.std(ddof=1))
    half = float(stdtrit(n - 1, 0.975) * sd / np.sqrt(n))
    return Agreement(mean, sd, mean - 2 * sd, mean + 2 * sd, mean - half, mean + half)


def holm_rejected(p_values: ArrayLike, level: float = 0.05) -> NDArray[np.bool_]:
    """Which hypotheses fall when the chance of any false call is held at `level` (Holm 1979), shape of the input."""
    p = np.asarray(p_values, dtype=float)
    order = np.argsort(p)
    passes = np.cumprod(p[order] <= level / np.arange(len(p), 0, -1)).astype(bool)
    rejected = np.zeros(len(p), dtype=bool)
    rejected[order] = passes
    return rejected


def benjamini_hochberg_rejected(p_values: ArrayLike, level: float = 0.05) -> NDArray[np.bool_]:
    """Which fall when the share of false calls among all calls is held at `level` (Benjamini and Hochberg 1995)."""
    p = np.asarray(p_values, dtype=float)
    order = np.argsort(p)
    below = np.flatnonzero(p[order] <= level * np.arange(1, len(p) + 1) / len(p))
    rejected = np.zeros(len(p), dtype=bool)
    rejected[order[: below[-1] + 1 if below.size else 0]] = True
    return rejected


def _check_share(successes: int, of: int) -> None:
    if not 0 <= successes <= of:
        raise ValueError(f"{successes} of {of} is no share; expected 0 <= successes <= of")
