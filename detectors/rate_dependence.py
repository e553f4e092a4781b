"""Does ectopy follow the heart rate, and what is left of a change at equal heart rate?

A drug that slows the heart shifts ectopy through the rate alone; that is not suppression.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import stdtr, stdtrit

from detectors.rates import FitError, clustered_covariance, fit_poisson

Floats = NDArray[np.float64]

FEWEST_HOURS = 12
SIGNIFICANT = 0.05
RATE_UNIT_BPM = 10.0
FOLLOWS, OPPOSES, INDEPENDENT, UNKNOWN = "follows_rate", "opposes_rate", "independent", "unknown"
# y = a x + b: change (%) of the 24 h count by change (%) of the mean rate, where counts follow the rate and elsewhere.
# Source: scilit.com/publications/950819913d02feebadb5994523a15e9b
FOLLOWING_LINE, OTHER_LINE = (5.9, 17.6), (1.8, -4.6)


class Dependence(NamedTuple):
    """Pearson correlation of hourly counts with hourly mean rate, and its kind."""

    r: float
    p: float
    kind: str  # follows_rate, opposes_rate, independent or unknown


class EqualRate(NamedTuple):
    """Ratio after / before of the count per hour at equal heart rate, with 95 % interval."""

    ratio: float
    low: float
    high: float


def dependence(per_hour: ArrayLike, rate_bpm: ArrayLike) -> Dependence:
    """Kind of dependence from hours, arrays of shape (n_hours,).

    Counts follow (oppose) the rate when r is above (below) 0 with p < 0.05. Hours are not independent, so p is a
    convention for sorting, not a test. Unknown with fewer than FEWEST_HOURS hours or without variation.
    """
    beats, rate = np.asarray(per_hour, dtype=float), np.asarray(rate_bpm, dtype=float)
    if len(beats) < FEWEST_HOURS or np.ptp(beats) == 0 or np.ptp(rate) == 0:
        return Dependence(np.nan, np.nan, UNKNOWN)
    r = float(np.corrcoef(beats, rate)[0, 1])
    freedom = len(beats) - 2
    with np.errstate(divide="ignore"):
        deviate = abs(r) * np.sqrt(freedom / np.maximum(1 - r**2, 0))
    p = 2 * float(stdtr(freedom, -deviate))
    kind = INDEPENDENT if p >= SIGNIFICANT else FOLLOWS if r > 0 else OPPOSES
    return Dependence(r, p, kind)


def expected_change_pct(rate_change_pct: float, kind: str) -> float:
    """Change of the 24 h count that goes with a change of the mean rate in untreated patients of that kind."""
    slope, offset = FOLLOWING_LINE if kind == FOLLOWS else OTHER_LINE
    return slope * rate_change_pct + offset


def ratio_at_equal_rate(
    counts: ArrayLike,
    hours: ArrayLike,
    rate_bpm: ArrayLike,
    is_after: ArrayLike,
    day: ArrayLike,
    extra_variance: float = 0.0,
) -> EqualRate:
    """Ratio of the two sides with the hourly heart rate held, arrays of shape (n_hours,).

    Poisson regression of the counts over `hours` on side and rate, ln linear in the rate; days are the clusters of
    the covariance, Student's t with days - 2 degrees of freedom. `extra_variance` is added to that of the log ratio
    (time between the periods). NaN where a side has no beats or fewer than two days, or the sides share no rate.
    """
    y, after, rate = (np.asarray(column, dtype=float) for column in (counts, is_after, rate_bpm))
    design = np.column_stack([np.ones(len(y)), after, (rate - rate.mean()) / RATE_UNIT_BPM if len(y) else rate])
    clusters = np.unique(np.asarray(day))
    unknown = EqualRate(np.nan, np.nan, np.nan)
    sides = [np.unique(np.asarray(day)[after == side]).size for side in (0, 1)]
    if min(sides) < 2 or min(y[after == side].sum() for side in (0, 1)) == 0:
        return unknown
    try:
        fit = fit_poisson(y, design, hours)
    except FitError:
        return unknown
    covariance = clustered_covariance(fit, y, design, np.searchsorted(clusters, day))
    error = stdtrit(len(clusters) - 2, 0.975) * np.sqrt(covariance[1, 1] + extra_variance)
    low, ratio, high = np.exp(fit.coefficients[1] + np.array([-error, 0.0, error]))
    return EqualRate(float(ratio), float(low), float(high))
