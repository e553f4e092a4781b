"""How much a patient's days differ by themselves, with help from the programme where his own days are few.

Each day's level is seen through counting noise; ln level varies from day to day with a standard deviation s. A period
rich in beats is judged by the logarithms of its days, a sparse one by its total. For every s of a grid this module
gives the level of a period and how well the days agree with s; the programme's patients together give the prior of s.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.polynomial.hermite_e import hermegauss
from numpy.typing import NDArray
from scipy.special import digamma, logsumexp, polygamma

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

LEAST_WEIGHT = 1e-12  # of a period without days
RICH_BEATS_PER_DAY = 12.0  # independent beats per day from which the logarithm of a day is nearly normal
GRID = np.geomspace(1 / 16, 5, 32)  # of s, relative to the typical value of the measure
# Candidates for a programme: its median s, relative to the typical value, and the SD of ln s between its patients.
PRIOR_MEDIANS, PRIOR_SPREADS = (
    table.ravel() for table in np.meshgrid(np.geomspace(0.15, 4.0, 57), (0.1, 0.2, 0.4, 0.7))
)
ROUNDED_TO = 0.05  # of ln s: what the programme lends
MEDIAN_DOUBT = 1.0  # SD of ln median before any patient of the programme is seen
LEVEL_NODES = np.arange(-5.0, 5.1, 0.5)  # SDs around the level of a sparse period
TABLE_STEP = 0.1  # of ln mean
HERMITE_NODES, _HERMITE_MASS = hermegauss(21)
HERMITE_WEIGHTS = _HERMITE_MASS / _HERMITE_MASS.sum()


class Periods(NamedTuple):
    """Days of periods: arrays of shape (n_days,), `period` the row of the period they belong to."""

    period: Ints
    counts: Floats  # beats, or what else is counted
    exposure: Floats  # standardised over clock hours
    dispersion: Floats  # variance over mean of the counting noise, >= 1


class UsualSpread(NamedTuple):
    """What a programme says of the s of a patient whose days are not known: ln s is normal."""

    log_median: float
    sd: float  # between patients, with the doubt about the median


class Levels(NamedTuple):
    """Per period; (n_periods, n_grid) where it depends on s, else (n_periods,)."""

    days: Ints
    total: Floats  # independent beats: counts over their dispersion
    exposure: Floats  # so scaled that total / exposure is counts per unit of exposure
    is_sparse: Flags
    log_level: Floats  # mean of ln level of a typical day
    variance: Floats  # of log_level
    day_variance: Floats  # its part that counting noise does not make
    total_shift: Floats  # ln of a sparse period's expected total over that of typical days
    independent: Floats  # share of its days that tell the spread as independent ones do
    fit: Floats  # log likelihood of s


def levels(days: Periods, n_periods: int, grid: Floats, independent: Floats | None = None) -> Levels:
    """Level of every period at every s of `grid`, shape (n_grid,).

    `independent`, shape (n_periods,), says what share of the likelihood of s counts where days resemble their
    neighbours (`variability.independent_share`; all of it by default).

    Rich periods: normal theory on the days' ln(c + 1/2) of counts c, which vary as ln level does (Anscombe, Biometrika
    1948;35:246, from memory), all together lowered to digamma of their total, so that a period of one day has the level
    of its count. Their counting noise is trigamma(m + 1/2) for the m beats that a day of the period usually holds
    (harmonic mean of lognormal days): noise by its own count would make light of days with few beats. The likelihood of
    s is integrated over the level (restricted likelihood). Sparse
    periods: their total, the mean of n lognormal days taken as lognormal (Fenton 1960), and the likelihood of s that
    of Poisson counts of lognormal days, integrated over the level; fewer than two days or beats say nothing on s.
    """
    beats, exposure = days.counts / days.dispersion, days.exposure / days.dispersion
    n = np.bincount(days.period, minlength=n_periods)
    total, total_exposure = _sums(days.period, beats, n_periods), _sums(days.period, exposure, n_periods)
    is_sparse = total < RICH_BEATS_PER_DAY * n
    rich = ~is_sparse[days.period]
    by_logs = _by_logarithms(days.period[rich], beats[rich], exposure[rich], n_periods, grid)
    by_total = _by_total(n, total, total_exposure, grid)
    tells_spread = is_sparse & (n >= 2) & (total >= 2)
    sparse_days = Periods._make(column[tells_spread[days.period]] for column in days)
    of_sparse = _fit_of_sparse(sparse_days, by_total[0], by_total[1], grid)
    fit = np.select([tells_spread[:, None], is_sparse[:, None]], [of_sparse, 0.0], by_logs[3])
    log_level, variance, day_variance = (
        np.where(is_sparse[:, None], of_total, of_logs)
        for of_total, of_logs in zip(by_total[:3], by_logs[:3], strict=True)
    )
    shift = np.where(is_sparse[:, None], by_total[3], 0.0)
    share = np.ones(n_periods) if independent is None else independent
    fit = fit * share[:, None]
    return Levels(n, total, total_exposure, is_sparse, log_level, variance, day_variance, shift, share, fit)


def _sums(period: Ints, values: Floats, n_periods: int) -> Floats:
    return np.bincount(period, values, n_periods).astype(float)


def _by_logarithms(period: Ints, beats: Floats, exposure: Floats, n_periods: int, grid: Floats) -> tuple[Floats, ...]:
    seen = exposure > 0
    period, beats, exposure = period[seen], beats[seen], exposure[seen]
    log_day = np.log((beats + 0.5) / exposure)
    days = np.maximum(np.bincount(period, minlength=n_periods), 1)
    usual_beats = np.exp(_sums(period, log_day, n_periods) / days)[period] * exposure
    total = _sums(period, beats, n_periods) + 0.5
    log_level, variance, counting, fit = (np.zeros((n_periods, len(grid))) for _ in range(4))
    for k, s in enumerate(grid):
        noise = polygamma(1, usual_beats * np.exp(-(s**2) / 2) + 0.5)
        weight = 1 / (s**2 + noise)
        of_all = np.maximum(_sums(period, weight, n_periods), LEAST_WEIGHT)
        mean = _sums(period, weight * log_day, n_periods) / of_all
        misfit = _sums(period, weight * (log_day - mean[period]) ** 2 - np.log(weight), n_periods)
        log_level[:, k], variance[:, k], fit[:, k] = mean, 1 / of_all, -0.5 * (misfit + np.log(of_all))
        counting[:, k] = 1 / np.maximum(_sums(period, 1 / noise, n_periods), LEAST_WEIGHT)
    log_level += (digamma(total) - np.log(total))[:, None]
    return log_level, variance, np.maximum(variance - counting, 0.0), fit


def _by_total(n: Ints, total: Floats, exposure: Floats, grid: Floats) -> tuple[Floats, ...]:
    day_variance = np.log1p(np.expm1(grid**2) / np.maximum(n, 1)[:, None])
    shift = (grid**2 - day_variance) / 2
    log_mean = digamma(total + 0.5) - np.log(np.where(exposure > 0, exposure, 1.0))
    variance = day_variance + polygamma(1, total + 0.5)[:, None]
    return log_mean[:, None] - shift, variance, day_variance, shift


def _fit_of_sparse(days: Periods, log_level: Floats, variance: Floats, grid: Floats) -> Floats:
    """Log likelihood of s from Poisson counts of lognormal days, integrated over the level on LEVEL_NODES."""
    beats, row = np.unique(np.rint(days.counts / days.dispersion), return_inverse=True)
    log_exposure = np.log(days.exposure / days.dispersion)
    fit = np.zeros(log_level.shape)
    for k, s in enumerate(grid):
        width = np.sqrt(variance[:, k])
        level = log_level[:, k, None] + width[:, None] * LEVEL_NODES
        of_day = _log_count_probability(beats, row, level[days.period] + log_exposure[:, None], s)
        of_level = np.zeros(level.shape)
        np.add.at(of_level, days.period, of_day)
        fit[:, k] = logsumexp(of_level, axis=1) + np.log(width)
    return fit


def _log_count_probability(beats: Floats, row: Ints, log_mean: Floats, s: float) -> Floats:
    """ln P(count = beats[row]) up to a constant per count, for a day of ln mean `log_mean` that varies with SD `s`."""
    first, last = np.floor(log_mean.min(initial=0.0) / TABLE_STEP), np.ceil(log_mean.max(initial=0.0) / TABLE_STEP)
    table_at = np.arange(int(first), int(last) + 2) * TABLE_STEP  # the same places whichever other days are looked at
    of_node = table_at[:, None] + s * HERMITE_NODES
    expected = np.exp(of_node)
    table = np.empty((len(beats), len(table_at)))
    for i, c in enumerate(beats):
        table[i] = logsumexp(c * of_node - expected, axis=1, b=HERMITE_WEIGHTS)
    place = log_mean / TABLE_STEP
    left = np.floor(place).astype(np.int64)
    part, column = place - left, row[:, None]
    left -= int(first)
    return table[column, left] * (1 - part) + table[column, left + 1] * part


def shown_share(beats_per_day: Floats, sd: Floats | float) -> Floats:
    """Information on the variance between days that counting noise leaves: 1 with many beats a day, 0 with none."""
    of_days = np.asarray(sd) ** 2 * beats_per_day
    return np.asarray((of_days / (1 + of_days)) ** 2)


def programme_spread(fit: Floats, grid: Floats, typical: float) -> UsualSpread:
    """The usual s from what all patients of a programme show, `fit` of shape (n_patients, n_grid).

    s is lognormal between patients; its median and spread are averaged over candidates by how well they explain all
    patients (empirical Bayes with the candidates' doubt kept). Without patients it is the typical value, in doubt.
    Rounded to 0.05, so that new days of a few patients seldom move what the others borrow.
    """
    log_s = np.log(grid / typical)[:, None]
    prior = -0.5 * ((log_s - np.log(PRIOR_MEDIANS)) / PRIOR_SPREADS) ** 2
    prior = np.exp(prior - logsumexp(prior, axis=0))
    best = fit.max(axis=1, keepdims=True, initial=-np.inf)
    explained = np.log(np.exp(fit - best) @ prior).sum(axis=0)
    candidate = explained - 0.5 * (np.log(PRIOR_MEDIANS) / MEDIAN_DOUBT) ** 2
    weight = np.exp(candidate - logsumexp(candidate))
    log_median = weight @ np.log(PRIOR_MEDIANS)
    variance = weight @ (PRIOR_SPREADS**2 + (np.log(PRIOR_MEDIANS) - log_median) ** 2)
    return UsualSpread(_rounded(log_median) + np.log(typical), max(_rounded(np.sqrt(variance)), ROUNDED_TO))


def nothing_lent(typical: float) -> UsualSpread:
    """The usual s before any patient of the programme is seen."""
    return programme_spread(np.zeros((0, len(GRID))), GRID * typical, typical)


def spread_weights(fit: Floats, grid: Floats, usual: UsualSpread) -> Floats:
    """Posterior weights of s, shape of `fit`: (n_patients, n_grid), rows sum to 1.

    A patient with many days follows his own days, one with a single day the programme.
    """
    joint = fit - 0.5 * ((np.log(grid) - usual.log_median) / usual.sd) ** 2
    return np.asarray(np.exp(joint - logsumexp(joint, axis=1, keepdims=True)))


def _rounded(value: float) -> float:
    return round(float(value) / ROUNDED_TO) * ROUNDED_TO
