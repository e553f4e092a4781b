"""Did it change? The ratio of two periods, its interval, and what chance alone would do.

Days are the unit. One question is asked throughout: given the baseline, how likely is it that the after period holds
at most (at least) the beats it does, if the true ratio is r? With r = 1 that gives the chance limits and the verdict;
solved for r it gives the interval; over all r it gives the probability of success. So they never contradict.
Uncertainty comes from counting (over-dispersed), from days (`spread`), and from the time between the periods.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import elementwise
from scipy.special import digamma, ndtr, polygamma
from scipy.stats import norm

from detectors.spread import GRID, Levels, Periods, levels, shown_share, spread_weights

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

CHANCE_LIMIT = 0.05  # one-sided
INTERVAL_TAIL = 0.025  # of each side
OWN_DAYS_FEW, OWN_DAYS_ENOUGH = 1, 10  # degrees of freedom from which own days help, and settle, the spread
FELL, ROSE, WITHIN, TOO_LITTLE = "fell_beyond_chance", "rose_beyond_chance", "within_chance", "too_little_wear"
VERDICTS = (FELL, ROSE, WITHIN, TOO_LITTLE)
NODE_STEP = 0.25
GAMMA_NODES = np.arange(-7.0, 5.1, NODE_STEP)  # SDs of a log-gamma variable around its mean
LEAST_VARIANCE = 1e-12
NEGLIGIBLE_WEIGHT = 1e-4
LEAST_SHAPE = 0.05  # fewer beats than this count as this many
LOG_TOLERANCE = 1e-6
WIDEST_LOG = 34.0  # ln beats beyond which nothing is searched
FARTHEST_COUNT = 8.0  # ln ratio that counting alone may need on top of the other variation


class Comparison(NamedTuple):
    """One entry per therapy event, shape (n_events,); NaN where there is nothing to say."""

    baseline: Floats  # level of a typical day (geometric mean), counts per unit of exposure
    after: Floats
    ratio: Floats
    ratio_low: Floats  # 95 % interval
    ratio_high: Floats
    chance_fall_limit_pct: Floats  # one-sided 95 %; 100 when even a total absence would not be beyond chance
    chance_rise_limit_pct: Floats
    success_probability_pct: Floats
    verdict: NDArray[np.str_]  # one of VERDICTS
    day_sd: Floats  # SD of ln level between days
    variance_source: NDArray[np.str_]  # patient, programme or both
    days_to_settle: Floats  # more days after that would put the same ratio beyond chance; NaN settled or never
    counting_share_pct: Floats  # of the variance of the log ratio: counting beats,
    day_share_pct: Floats  # variation between days,
    gap_share_pct: Floats  # time between the periods,
    detection_share_pct: Floats  # and the error of the detector
    baseline_variance: Floats  # of ln baseline as an estimate of the patient's usual level


class _Chance(NamedTuple):
    """ln of the beats that the after period would hold had nothing changed: a mixture of normals over s.

    Arrays of shape (n_events, n_grid). The counting noise of the after period is not in them.
    """

    centre: Floats
    sd: Floats
    weight: Floats


class _Variances(NamedTuple):
    """Variances of the log ratio by where they come from, shape (n_events, n_grid)."""

    counting_before: Floats
    days: Floats
    gap: Floats
    detection: Floats


def compare(
    days: Periods,
    n_events: int,
    *,
    excess: Floats,
    typical_sd: float,
    success_limit_pct: float,
    detection_variance: float = 0.0,
    min_days: int = 1,
) -> Comparison:
    """Compare period 2 i (baseline) with period 2 i + 1 (after) for every event i.

    `excess`, shape (n_events,), is the variance that the time between the periods adds, as a multiple of the variance
    between days (`variability.excess_of_gap`; 0 to ignore it). `typical_sd` is the usual SD of ln level between days
    where the programme knows nothing yet. `detection_variance` is what the error of the detector adds to the log ratio.
    Periods with fewer than `min_days` days give too_little_wear.
    """
    grid = GRID * typical_sd
    level = levels(days, 2 * n_events, grid)
    weight = spread_weights(level.fit[0::2] + level.fit[1::2], grid, typical_sd)
    variances = _variances(level, grid, excess, detection_variance)
    chance = _if_nothing_changed(level, weight, variances)
    value, beats, per_beat = _typical_day(level, np.repeat(weight, 2, axis=0))
    baseline, after, observed = value[0::2], value[1::2], beats[1::2]
    least, most = _chance_limits(chance)
    low, high = _interval(chance, observed)
    success = 1 - _at_most(chance, observed + 0.5, np.full(n_events, np.log1p(-success_limit_pct / 100)))
    fewer_days = np.minimum(level.days[0::2], level.days[1::2])
    is_short = fewer_days < max(min_days, 1)
    verdict = np.select([is_short, observed < least, observed > most], [TOO_LITTLE, FELL, ROSE], WITHIN)
    per_baseline = _divide(per_beat[1::2], np.where(fewer_days > 0, baseline, np.nan))
    known = per_baseline * 0  # NaN where there is no ratio
    day_sd = np.exp(weight @ np.log(grid))
    missing = _days_to_settle(chance, level, weight, _log(after) - _log(baseline))
    counting, between, gap, detection = _shares_pct(variances, weight, observed)
    return Comparison(
        baseline=baseline,
        after=after,
        ratio=observed * per_baseline,
        ratio_low=low + known,
        ratio_high=high + known,
        chance_fall_limit_pct=100 - 100 * least * per_baseline,
        chance_rise_limit_pct=100 * most * per_baseline - 100,
        success_probability_pct=100 * success + known,
        verdict=verdict,
        day_sd=day_sd,
        variance_source=_variance_source(level, day_sd),
        counting_share_pct=counting + known,
        day_share_pct=between + known,
        gap_share_pct=gap + known,
        detection_share_pct=detection + known,
        days_to_settle=np.where(verdict == WITHIN, missing, np.nan),
        baseline_variance=(weight * (level.variance[0::2] + variances.gap / 2)).sum(axis=1),
    )


def _days_to_settle(chance: _Chance, level: Levels, weight: Floats, log_ratio: Floats) -> Floats:
    """Normal theory: the after period's own variance shrinks with its days, all else stays."""
    now = (chance.weight * chance.sd**2).sum(axis=1)
    own = (weight * level.variance[1::2]).sum(axis=1)
    days = level.days[1::2]
    allowed = (log_ratio / norm.ppf(1 - CHANCE_LIMIT)) ** 2 - (now - (weight * level.day_variance[1::2]).sum(axis=1))
    more = np.ceil(_divide(own * days, allowed)) - days
    return np.where(np.isfinite(log_ratio), np.maximum(more, 1.0), np.nan)


def _typical_day(level: Levels, weight: Floats) -> tuple[Floats, Floats, Floats]:
    """Per period: level of a typical day, the independent beats that stand for it, and level per such beat."""
    shift = np.exp(-(weight * level.total_shift).sum(1))
    per_beat = _divide(shift, level.exposure)
    by_logs = np.exp((weight * level.log_level).sum(1)) * level.exposure
    beats = np.where(level.is_sparse, level.total, by_logs)
    return np.where(level.days > 0, beats * per_beat, np.nan), beats, per_beat


def _variances(level: Levels, grid: Floats, excess: Floats, detection: float) -> _Variances:
    before, after = level.day_variance[0::2], level.day_variance[1::2]
    counting = level.variance[0::2] - before
    gap = grid**2 * np.asarray(excess, dtype=float)[:, None]
    return _Variances(counting, before + after, gap, np.full_like(gap, detection))


def _if_nothing_changed(level: Levels, weight: Floats, variances: _Variances) -> _Chance:
    exposure = np.where(level.exposure[1::2] > 0, level.exposure[1::2], 1.0)
    centre = np.log(exposure)[:, None] + level.log_level[0::2] + level.total_shift[1::2]
    return _trimmed(_Chance(centre, np.sqrt(np.maximum(sum(variances), LEAST_VARIANCE)), weight))


def _trimmed(chance: _Chance) -> _Chance:
    """As many values of s as hold nearly all weight of every event: the rest costs time only."""
    order = np.argsort(-chance.weight, axis=1)
    kept = np.cumsum(np.take_along_axis(chance.weight, order, axis=1), axis=1) < 1 - NEGLIGIBLE_WEIGHT
    order = order[:, : 1 + int(kept.sum(axis=1).max(initial=0))]
    centre, sd, weight = (np.take_along_axis(table, order, axis=1) for table in chance)
    return _Chance(centre, sd, weight / weight.sum(axis=1, keepdims=True))


def _shares_pct(variances: _Variances, weight: Floats, observed: Floats) -> list[Floats]:
    counting, days, gap, detection = ((weight * part).sum(axis=1) for part in variances)
    parts = counting + polygamma(1, observed + 0.5), days, gap, detection
    return [100 * part / sum(parts) for part in parts]


def _at_most(chance: _Chance, shape: Floats, log_ratio: Floats) -> Floats:
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
    for j in range(len(GAMMA_NODES)):
        total += mass[:, j] * (chance.weight * ndtr((node[:, j, None] - centre) / sd)).sum(axis=1)
    return total


def _chance_limits(chance: _Chance) -> tuple[Floats, Floats]:
    """Beats below and above which the after period lies beyond chance; 0 when none is few enough."""
    n = len(chance.centre)
    widest = np.clip((chance.centre + 12 * chance.sd).max(axis=1, initial=0.0) + 3, 3, WIDEST_LOG)

    def too_few(log_beats: Floats, row: Ints) -> Floats:
        return _at_most(_rows(chance, row), np.expm1(log_beats) + 1, np.zeros(len(row))) - CHANCE_LIMIT

    def too_many(log_beats: Floats, row: Ints) -> Floats:
        return _at_most(_rows(chance, row), np.expm1(log_beats), np.zeros(len(row))) - (1 - CHANCE_LIMIT)

    rows = np.arange(n)
    attainable = too_few(np.zeros(n), rows) < 0
    least = np.where(attainable, np.expm1(_root(too_few, np.zeros(n), widest, rows)), 0.0)
    return least, np.expm1(_root(too_many, np.zeros(n), widest, rows))


def _interval(chance: _Chance, observed: Floats) -> tuple[Floats, Floats]:
    """Ratios under which at most, and at least, the observed beats have the probability INTERVAL_TAIL.

    The observed number itself counts by half (mid-P), which keeps the coverage near its nominal value where beats are
    few; at no beats the upper end is the exact one-sided bound of twice that probability, the lower end 0.
    """
    n = len(observed)

    def beyond(log_ratio: Floats, row: Ints, tail: Floats) -> Floats:
        beats, of_row = observed[row], _rows(chance, row)
        fewer = np.where(beats > 0, _at_most(of_row, beats, log_ratio), 0.0)
        return (fewer + _at_most(of_row, beats + 1, log_ratio)) / 2 - tail

    middle = np.log(np.maximum(observed, LEAST_SHAPE)) - (chance.weight * chance.centre).sum(axis=1)
    reach = 10 * chance.sd.max(axis=1, initial=0.0) + np.ptp(chance.centre, axis=1) + FARTHEST_COUNT
    reach = np.minimum(reach, WIDEST_LOG)
    ends = middle - reach, middle + reach
    high = np.exp(_root(beyond, *ends, np.arange(n), np.full(n, INTERVAL_TAIL)))
    low = np.exp(_root(beyond, *ends, np.arange(n), np.full(n, 1 - INTERVAL_TAIL)))
    return np.where(observed > 0, low, 0.0), high


def _root(f: Callable[..., Floats], low: Floats, high: Floats, *arguments: NDArray[Any]) -> Floats:
    found = elementwise.find_root(f, (low, high), args=arguments, tolerances={"xatol": LOG_TOLERANCE, "xrtol": 0})
    return np.asarray(found.x)


def _rows(chance: _Chance, rows: Ints) -> _Chance:
    return _Chance._make(table[rows] for table in chance)


def _variance_source(level: Levels, day_sd: Floats) -> NDArray[np.str_]:
    days = np.maximum(level.days, 1)
    own = ((days - 1) * shown_share(level.total / days, np.repeat(day_sd, 2))).reshape(-1, 2).sum(axis=1)
    return np.select([own < OWN_DAYS_FEW, own < OWN_DAYS_ENOUGH], ["programme", "both"], "patient")


def _log(values: Floats) -> Floats:
    return np.log(values, out=np.full(values.shape, np.nan), where=values > 0)


def _divide(above: Floats, below: Floats) -> Floats:
    result = np.full(np.broadcast(above, below).shape, np.nan)
    return np.divide(above, below, out=result, where=below > 0)
