"""Did it change? The ratio of two periods, its interval, and what chance alone would do.

Days are the unit. One question is asked throughout: given the baseline, how likely is it that the after period holds
at most (at least) the beats it does, if the true ratio is r? With r = 1 that gives the chance limits and the verdict;
solved for r it gives the interval; over all r it gives the probability of success. So they never contradict.
Uncertainty comes from counting (over-dispersed), from days (`spread`), from the time between the periods, and from the
detector: what differs between the periods in its share of beats found widens the log ratio, and its false beats can make
up a baseline that then seems to fall, or an after period that seems to rise.

`seen` looks at the days of each patient alone, `spread.programme_spread` at what all of them lend each other, and
`compare` answers. An event's answer follows from its own days and what is lent, to the last bit, whichever other events
are asked about with it.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri, polygamma

from detectors.chance import CHANCE_LIMIT, Chance, at_most, fewest_by_chance, interval, mean, most_by_chance, trimmed
from detectors.spread import (
    GRID,
    Levels,
    Periods,
    UsualSpread,
    levels,
    programme_spread,
    shown_share,
    spread_weights,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

OWN_DAYS_FEW, OWN_DAYS_ENOUGH = 1, 10  # degrees of freedom from which own days help, and settle, the spread
FELL, ROSE, WITHIN, TOO_LITTLE = "fell_beyond_chance", "rose_beyond_chance", "within_chance", "too_little_wear"
VERDICTS = (FELL, ROSE, WITHIN, TOO_LITTLE)
LEAST_VARIANCE = 1e-12
LEAST_TRUE_SHARE = 1e-3  # of a baseline that false beats may make up: keeps its logarithm


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


class Seen(NamedTuple):
    """What the days of both periods of every event say before the programme lends anything."""

    level: Levels  # period 2 i is the baseline of event i, 2 i + 1 what came after
    grid: Floats
    typical_sd: float
    fit: Floats  # shape (n_events, n_grid): log likelihood of the SD between days


class DetectorError(NamedTuple):
    """What the detector adds to a comparison of two periods of one patient."""

    sd_ln: float = 0.0  # of ln(found / true) of a period around the patient's usual one
    false_rate: float = 0.0  # false beats per unit of exposure that a period may hold, or may not


NO_ERROR = DetectorError()


class _Variances(NamedTuple):
    """Variances of the log ratio by where they come from, shape (n_events, n_grid)."""

    counting_before: Floats
    days: Floats
    gap: Floats
    detection: Floats


def seen(days: Periods, n_events: int, typical_sd: float, independent: Floats | None = None) -> Seen:
    """Look at the days of every event; period 2 i is the baseline and 2 i + 1 the after period of event i.

    `typical_sd` is the usual SD of ln level between days where the programme knows nothing yet, `independent` the share
    of each period's days that tell their spread as independent ones do (all by default), shape (2 n_events,).
    """
    grid = GRID * typical_sd
    level = levels(days, 2 * n_events, grid, independent)
    fit = level.fit[0::2] + level.fit[1::2]
    return Seen(level, grid, typical_sd, fit)


def usual_level(of: Seen, usual: UsualSpread) -> tuple[Floats, Floats]:
    """ln level of every baseline, NaN where it has no days or beats, and its variance; both of shape (n_events,)."""
    weight = spread_weights(of.fit, of.grid, usual)
    value, _, _ = _typical_day(of.level, np.repeat(weight, 2, axis=0))
    return _log(value[0::2]), mean(weight, of.level.variance[0::2])


def compare(
    of: Seen,
    *,
    excess: Floats,
    success_limit_pct: float,
    usual: UsualSpread | None = None,
    error: DetectorError = NO_ERROR,
    min_days: int = 1,
) -> Comparison:
    """Compare baseline and after of every event.

    `excess`, shape (n_events, n_grid), is the variance that the time between the periods adds, as a multiple of the
    variance between days, for each SD of the grid (`variability.excess_of_gap`; 0 to ignore it). `usual` is what the
    programme lends, by default what these events say together. Periods with fewer than `min_days` days give
    too_little_wear.
    """
    level, grid = of.level, of.grid
    n_events = len(of.fit)
    lent = programme_spread(of.fit, grid, of.typical_sd) if usual is None else usual
    weight = spread_weights(of.fit, grid, lent)
    variances = _variances(level, grid, excess, 2 * error.sd_ln**2)
    chance, falling, rising = _if_nothing_changed(level, weight, variances, error.false_rate)
    value, beats, per_beat = _typical_day(level, np.repeat(weight, 2, axis=0))
    baseline, after, observed = value[0::2], value[1::2], beats[1::2]
    least, most = fewest_by_chance(falling), most_by_chance(rising)
    low, high = interval(falling, rising, observed)
    success = 1 - at_most(chance, observed + 0.5, np.full(n_events, np.log1p(-success_limit_pct / 100)))
    fewer_days = np.minimum(level.days[0::2], level.days[1::2])
    is_short = fewer_days < max(min_days, 1)
    verdict = np.select([is_short, observed < least, observed > most], [TOO_LITTLE, FELL, ROSE], WITHIN)
    per_baseline = _divide(per_beat[1::2], np.where(fewer_days > 0, baseline, np.nan))
    known = per_baseline * 0  # NaN where there is no ratio
    day_sd = np.exp(mean(weight, np.log(grid)))
    missing = _days_to_settle(chance, level, weight, _told_log_ratio(baseline, after, error.false_rate))
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
        baseline_variance=mean(weight, level.variance[0::2] + variances.gap / 2),
    )


def _told_log_ratio(baseline: Floats, after: Floats, false_rate: float) -> Floats:
    """ln ratio that is left when false beats made up what they may of a fall or a rise; NaN for nothing."""
    told = _log(after) - np.where(after < baseline, _log(baseline - false_rate), _log(baseline + false_rate))
    return np.where((told < 0) == (after < baseline), told, np.nan)


def _days_to_settle(chance: Chance, level: Levels, weight: Floats, log_ratio: Floats) -> Floats:
    """Normal theory: the after period's own variance shrinks with its days, all else stays."""
    now = mean(chance.weight, chance.sd**2)
    own = mean(weight, level.variance[1::2])
    days = level.days[1::2]
    allowed = (log_ratio / ndtri(1 - CHANCE_LIMIT)) ** 2 - (now - mean(weight, level.day_variance[1::2]))
    more = np.ceil(_divide(own * days, allowed)) - days
    return np.where(np.isfinite(log_ratio), np.maximum(more, 1.0), np.nan)


def _typical_day(level: Levels, weight: Floats) -> tuple[Floats, Floats, Floats]:
    """Per period: level of a typical day, the independent beats that stand for it, and level per such beat."""
    shift = np.exp(-mean(weight, level.total_shift))
    per_beat = _divide(shift, level.exposure)
    by_logs = np.exp(mean(weight, level.log_level)) * level.exposure
    beats = np.where(level.is_sparse, level.total, by_logs)
    return np.where(level.days > 0, beats * per_beat, np.nan), beats, per_beat


def _variances(level: Levels, grid: Floats, excess: Floats, detection: float) -> _Variances:
    before, after = level.day_variance[0::2], level.day_variance[1::2]
    counting = level.variance[0::2] - before
    gap = grid**2 * np.asarray(excess, dtype=float)
    return _Variances(counting, before + after, gap, np.full_like(gap, detection))


def _if_nothing_changed(
    level: Levels, weight: Floats, variances: _Variances, false_rate: float
) -> tuple[Chance, Chance, Chance]:
    """As the detector counts; had false beats made up what they may of the baseline; had they come on top after it."""
    exposure = np.where(level.exposure[1::2] > 0, level.exposure[1::2], 1.0)
    centre = np.log(exposure)[:, None] + level.log_level[0::2] + level.total_shift[1::2]
    sd = np.sqrt(np.maximum(sum(variances), LEAST_VARIANCE))
    counted = trimmed(Chance(centre, sd, weight, np.zeros(len(weight))))
    false_beats = false_rate * exposure
    true_share = np.maximum(1 - false_beats[:, None] * np.exp(-counted.centre), LEAST_TRUE_SHARE)
    falling = counted._replace(centre=counted.centre + np.log(true_share))
    return counted, falling, counted._replace(false_beats=false_beats)


def _shares_pct(variances: _Variances, weight: Floats, observed: Floats) -> list[Floats]:
    counting, days, gap, detection = (mean(weight, part) for part in variances)
    parts = counting + polygamma(1, observed + 0.5), days, gap, detection
    return [100 * part / sum(parts) for part in parts]


def _variance_source(level: Levels, day_sd: Floats) -> NDArray[np.str_]:
    days = np.maximum(level.days, 1)
    told = level.independent * shown_share(level.total / days, np.repeat(day_sd, 2))
    own = ((days - 1) * told).reshape(-1, 2).sum(axis=1)
    return np.select([own < OWN_DAYS_FEW, own < OWN_DAYS_ENOUGH], ["programme", "both"], "patient")


def _log(values: Floats) -> Floats:
    return np.log(values, out=np.full(values.shape, np.nan), where=values > 0)


def _divide(above: Floats, below: Floats) -> Floats:
    result = np.full(np.broadcast(above, below).shape, np.nan)
    return np.divide(above, below, out=result, where=below > 0)
