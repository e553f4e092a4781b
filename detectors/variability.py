"""How much ectopy varies by itself: published chance limits and the formulas behind them.

All on natural logarithms of counts or rates, standard normal theory. Nothing here knows a patient; `change` does.
"""

from __future__ import annotations

from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtri, stdtrit

Floats = NDArray[np.float64]

ONE_SIDED_95 = float(ndtri(0.95))
MIN_PATIENTS = 5  # fewer patients say too little on how patients differ
TYPICAL_WEAR_DAYS = 7  # length of wear whose spread stands for "within a period" where a period has one day only


class Spread(NamedTuple):
    """Variance components of a balanced one-way layout, in the squared unit of the values."""

    mean: float
    mean_square_between: float
    mean_square_within: float
    sd_between: float
    sd_within: float
    standard_error: float  # of the mean


class SpontaneousSeries(NamedTuple):
    """Published smallest falls (%) beyond chance of one untreated 24 h count against another, by days between them."""

    gap_d: tuple[float, ...]
    fall_limit_pct: tuple[float, ...]


# Circulation 1988;78:286, 47 untreated patients, one-sided 95 %: 1 day, 1, 2, 3, 4 weeks, 1 year and more.
SINGLE_BEATS = SpontaneousSeries((1, 7, 14, 21, 28, 365), (55, 85, 86, 93, 96, 96))
REPETITIVE_FORMS = SpontaneousSeries((1, 7, 14, 21, 28, 365), (75, 95, 92, 95, 94, 98))


def chance_fall_pct(sd_of_log_ratio: ArrayLike, quantile: float = ONE_SIDED_95) -> Floats:
    """Smallest fall, in %, that spontaneous variation of the log ratio does not explain."""
    return -100.0 * np.expm1(-quantile * np.asarray(sd_of_log_ratio, dtype=float))


def sd_from_chance_fall(fall_pct: ArrayLike, quantile: float = ONE_SIDED_95) -> Floats:
    """SD of the log ratio that a published chance limit implies; the inverse of `chance_fall_pct`."""
    return -np.log1p(-np.asarray(fall_pct, dtype=float) / 100.0) / quantile


def mirror_rise_pct(fall_pct: ArrayLike) -> Floats:
    """Rise, in %, that is as unusual as a fall on the log scale."""
    fall = np.asarray(fall_pct, dtype=float)
    return 100.0 * fall / (100.0 - fall)


def mirror_fall_pct(rise_pct: ArrayLike) -> Floats:
    """Fall, in %, that is as unusual as a rise on the log scale."""
    rise = np.asarray(rise_pct, dtype=float)
    return 100.0 * rise / (100.0 + rise)


def chance_fall_for_days(one_day_fall_pct: ArrayLike, days: ArrayLike) -> Floats:
    """Chance limit for `days` days each side from the limit for one day each side, days being independent."""
    one_day_ratio = 1.0 - np.asarray(one_day_fall_pct, dtype=float) / 100.0
    return 100.0 * (1.0 - one_day_ratio ** (1.0 / np.sqrt(np.asarray(days, dtype=float))))


def nested_variance(
    day: float, block: float, hour: float, *, days: ArrayLike, blocks_per_day: int, hours_per_block: int
) -> Floats:
    """Variance of a period mean from the variances between days, blocks in a day and hours in a block."""
    n_days = np.asarray(days, dtype=float)
    return day / n_days + block / (n_days * blocks_per_day) + hour / (n_days * blocks_per_day * hours_per_block)


def one_way(values: ArrayLike) -> Spread:
    """Variance components of equally large groups, values of shape (groups, members); a negative one is cut at 0."""
    table = np.asarray(values, dtype=float)
    if table.ndim != 2 or min(table.shape) < 2:
        raise ValueError(f"values have shape {table.shape}; expected at least two groups of at least two members")
    groups, members = table.shape
    between = members * table.mean(axis=1).var(ddof=1)
    within = table.var(axis=1, ddof=1).mean()
    sd_between = np.sqrt(max(between - within, 0.0) / members)
    standard_error = np.sqrt(between / (groups * members))
    return Spread(table.mean(), between, within, float(sd_between), float(np.sqrt(within)), float(standard_error))


def untreated_pairs_limit_pct(baseline: ArrayLike, later: ArrayLike, at_baseline: ArrayLike) -> Floats:
    """Smallest fall (%) beyond chance at given baselines, from a regression of later on earlier untreated counts.

    `baseline` and `later` are positive counts per hour of the same untreated patients, shape (n,). The limit is the
    lower one-sided 95 % prediction limit of ln later on ln baseline (Sami et al., Circulation 1980;62:1172); it may be
    negative where the regression expects a rise.
    """
    x, y = np.log(np.asarray(baseline, dtype=float)), np.log(np.asarray(later, dtype=float))
    if x.size < 3 or x.shape != y.shape:
        raise ValueError(f"{x.size} baseline and {y.size} later counts; expected at least three pairs")
    centred = x - x.mean()
    spread = centred @ centred
    slope = centred @ y / spread
    residual = y - y.mean() - slope * centred
    s = np.sqrt(residual @ residual / (x.size - 2))
    x0 = np.log(np.asarray(at_baseline, dtype=float))
    error = s * np.sqrt(1 + 1 / x.size + (x0 - x.mean()) ** 2 / spread)
    lower = y.mean() + slope * (x0 - x.mean()) - stdtrit(x.size - 2, 0.95) * error
    return -100.0 * np.expm1(lower - x0)


def variogram(gap_d: ArrayLike, series: SpontaneousSeries) -> Floats:
    """Half the variance of the log ratio of two untreated days `gap_d` days apart; 0 for a day against itself.

    Read off the published limits, linear in ln(gap) between them, constant beyond the last.
    """
    gap = np.abs(np.asarray(gap_d, dtype=float))
    half_variance = sd_from_chance_fall(series.fall_limit_pct) ** 2 / 2
    return np.where(gap > 0, np.interp(np.log(np.maximum(gap, 1.0)), np.log(series.gap_d), half_variance), 0.0)


@lru_cache(maxsize=4096)
def independent_share(day: tuple[int, ...], series: SpontaneousSeries) -> float:
    """As how many independent days these days tell their spread, over their number; both less one, 1 for a single day.

    Days of a drifting level resemble their neighbours, so that the sum of squares around their mean varies more than
    that of independent ones. Its degrees of freedom are those of Satterthwaite (doi:10.2307/3002019) under the
    published series.
    """
    n = len(day)
    if n < 2:
        return 1.0
    gaps = np.subtract.outer(np.array(day), np.array(day))
    alike = -variogram(gaps, series)
    alike -= alike.mean(axis=0)
    around_mean = alike - alike.mean(axis=1, keepdims=True)
    return float(np.trace(around_mean) ** 2 / (around_mean * around_mean.T).sum() / (n - 1))


def excess_of_gap(
    before_d: ArrayLike, after_d: ArrayLike, series: SpontaneousSeries, seen: tuple[ArrayLike, ArrayLike] = (1.0, 1.0)
) -> Floats:
    """Variance that the time between two periods adds, as a multiple of the variance between days of a period.

    `before_d` and `after_d` are day numbers. With independent days the log ratio of the period means has variance
    s^2 (1/n1 + 1/n2); the published series makes it s^2 (1/n1 + 1/n2 + excess), where s^2 is what the days of one
    period show. The series gives the shape only: a patient whose days vary little also drifts little. `seen` is how
    much of the days' variation shows through the counting noise on each side (1 all, 0 none), which depends on s: s^2
    comes from there. Returned is an excess for each entry of `seen`.
    """
    before, after = np.asarray(before_d, dtype=float), np.asarray(after_d, dtype=float)
    between = variogram(before[:, None] - after[None, :], series).mean()
    within = [variogram(days[:, None] - days[None, :], series) for days in (before, after)]
    contrast = 2 * between - sum(table.mean() for table in within)
    shares = [np.asarray(share, dtype=float) for share in seen]
    freedom = sum(share * (len(table) - 1) for share, table in zip(shares, within, strict=True))
    shown = sum(share * table.sum() / len(table) for share, table in zip(shares, within, strict=True))
    typical = np.full(np.shape(freedom), _typical_within(series))
    scale = np.divide(shown, freedom, out=typical, where=freedom > 0)
    return np.maximum(0.0, contrast / scale - 1 / len(before) - 1 / len(after))


class UsualLevel(NamedTuple):
    """The usual ln level of a programme's patients and how much patients differ; NaN where too few are known."""

    log_level: float
    between_variance: float


def usual_of(log_level: ArrayLike, error_variance: ArrayLike) -> UsualLevel:
    """Mean and variance between patients of ln levels of shape (n,), known with `error_variance`; NaN are left out.

    Rounded (mean to 0.1, variance to two digits), so that one patient of many seldom moves what is said of the others.
    NaN with fewer than MIN_PATIENTS known levels.
    """
    level, error = np.asarray(log_level, dtype=float), np.asarray(error_variance, dtype=float)
    known = np.isfinite(level) & np.isfinite(error)
    if known.sum() < MIN_PATIENTS:
        return UsualLevel(np.nan, np.nan)
    between = max(float(level[known].var(ddof=1) - error[known].mean()), 0.0)
    return UsualLevel(round(float(level[known].mean()), 1), float(f"{between:.2g}"))


def regression_to_mean(log_level: ArrayLike, error_variance: ArrayLike, usual: UsualLevel) -> Floats:
    """Change of ln level that a second look brings by itself to patients chosen for their first, shape (n,).

    Each patient is drawn to the mean of all by the share that chance has in the differences between patients
    (from memory: Davis, Am J Epidemiol 1976;104:493). NaN where the usual level is.
    """
    level, error = np.asarray(log_level, dtype=float), np.asarray(error_variance, dtype=float)
    return np.asarray((usual.log_level - level) * error / (usual.between_variance + error))


def _typical_within(series: SpontaneousSeries) -> float:
    days = np.arange(TYPICAL_WEAR_DAYS, dtype=float)
    table = variogram(days[:, None] - days[None, :], series)
    return float(table.sum() / (table.size - len(table)))
