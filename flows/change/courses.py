"""What happened within the after period: is the burden back after it had fallen?"""

from __future__ import annotations

from datetime import date, timedelta
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from detectors import change as statistics
from detectors.shifts import shifts
from detectors.spread import GRID, Periods, UsualSpread, nothing_lent, shown_share
from detectors.variability import excess_of_gap, independent_share
from flows.change.measures import Measure, MeasuredDays
from flows.settings import ChangeSettings, WearSettings

EPOCH = date(1970, 1, 1)
NO_DAY = np.iinfo(np.int64).max
PRIOR_STEPS = 4
MEDIAN_STEP = 0.6745 * np.sqrt(2)  # median of |difference| of two normal values, in SDs of one


class Drift(NamedTuple):
    """What the published drift of the level means for the days of every event."""

    # variance that the time between the sides adds, for each SD between days, shape (n_events, n_grid); 0 without both
    excess: NDArray[np.float64]
    # share of the days that tell their spread as independent ones, shape (2 n_events,)
    independent: NDArray[np.float64]


def drift_of(measure: Measure, days: MeasuredDays, n_events: int, share: float) -> Drift:
    """`variability.excess_of_gap` and `variability.independent_share` of every event; `share` of the published drift."""
    grid = GRID * measure.day_sd
    drift = Drift(np.zeros((n_events, len(grid))), np.ones(2 * n_events))
    if measure.drift is None or share == 0:
        return drift
    beats = days.counts / days.dispersion
    ends = np.searchsorted(2 * days.event + days.is_after, np.arange(2 * n_events + 1))
    sides = [slice(first, last) for first, last in pairwise(ends)]
    for period, side in enumerate(sides):
        if side.start < side.stop:
            day = days.local_day[side] - days.local_day[side.start]
            seen_share = shown_share(beats[side].mean(), measure.day_sd)
            dependent = 1 - independent_share(tuple(day.tolist()), measure.drift)
            drift.independent[period] = 1 - share * float(seen_share) * dependent
    for event, (before, after) in enumerate(zip(sides[::2], sides[1::2], strict=True)):
        if before.start < before.stop and after.start < after.stop:
            of_sides = np.array([[beats[side].mean()] for side in (before, after)])
            told = shown_share(of_sides, grid) * drift.independent[2 * event : 2 * event + 2, None]
            gap = excess_of_gap(days.local_day[before], days.local_day[after], measure.drift, (told[0], told[1]))
            drift.excess[event] = share * gap
    return drift


def excess_at(measure: Measure, drift: Drift, sd: ArrayLike) -> NDArray[np.float64]:
    """Excess of every event for its SD between days, or one of all, shape (n_events,): that of the nearest in the grid."""
    off = np.log(GRID * measure.day_sd)[:, None] - np.log(np.broadcast_to(sd, len(drift.excess)))
    return drift.excess[np.arange(len(drift.excess)), np.abs(off).argmin(axis=0)]


def seen(measure: Measure, days: MeasuredDays, n_events: int, drift: Drift) -> statistics.Seen:
    """The two sides of every event, before the programme lends anything."""
    periods = Periods(2 * days.event + days.is_after, days.counts, days.exposure, days.dispersion)
    return statistics.seen(periods, n_events, measure.day_sd, drift.independent)


def compared(
    measure: Measure,
    of: statistics.Seen,
    drift: Drift,
    usual: UsualSpread,
    change: ChangeSettings,
    wear: WearSettings,
) -> statistics.Comparison:
    """The comparison of the two sides of every event, given what the programme lends."""
    return statistics.compare(
        of,
        usual=usual,
        excess=drift.excess,
        error=measure.error(change.detector_error_share),
        success_limit_pct=change.success_limit_pct,
        min_days=wear.min_days_per_period,
    )


def recurrence_days(
    measure: Measure, days: MeasuredDays, n_events: int, change: ChangeSettings, wear: WearSettings
) -> list[date | None]:
    """First day on which the burden is back beyond chance after it had fallen beyond chance, per event.

    The after days are cut where their level first steps up (`detectors.shifts`). It is a recurrence when the days
    before the cut lie below the baseline beyond chance and the days from the cut on above those before, beyond chance.
    Nothing is borrowed from the programme, whose spread between days the recurrences themselves have swollen.
    """
    cut = _first_rise(days, n_events, measure.day_sd)
    candidates = np.flatnonzero(cut != NO_DAY)
    of_candidates = days.where(cut[days.event] != NO_DAY)
    row = np.searchsorted(candidates, of_candidates.event)
    is_late = of_candidates.is_after & (of_candidates.local_day >= cut[of_candidates.event])
    rising = of_candidates._replace(event=row)
    later = rising._replace(is_after=is_late).where(rising.is_after)

    def verdict(sides: MeasuredDays) -> NDArray[np.str_]:
        drift = drift_of(measure, sides, len(candidates), change.gap_drift_share)
        of = seen(measure, sides, len(candidates), drift)
        return compared(measure, of, drift, nothing_lent(measure.day_sd), change, wear).verdict

    fell = verdict(rising.where(~is_late)) == statistics.FELL
    rose = verdict(later) == statistics.ROSE
    back = {int(event): EPOCH + timedelta(days=int(cut[event])) for event in candidates[fell & rose]}
    return [back.get(event) for event in range(n_events)]


def log_levels(days: MeasuredDays) -> NDArray[np.float64]:
    """ln level of every day, half an independent beat added so that none has a level."""
    return np.asarray(np.log((days.counts + days.dispersion / 2) / days.exposure))


def day_noise(days: MeasuredDays, sd: float) -> NDArray[np.float64]:
    """SD of ln level of every day around its true level: between days and by counting."""
    return np.sqrt(sd**2 + 1 / (days.counts / days.dispersion + 0.5))


def step_sd(series: NDArray[np.float64], typical_sd: float) -> float:
    """SD between days from their successive differences, which a few shifts of level hardly touch.

    Drawn towards the typical SD as if PRIOR_STEPS differences had shown it.
    """
    steps = len(series) - 1
    own = float(np.median(np.abs(np.diff(series)))) / MEDIAN_STEP if steps > 0 else 0.0
    return float(np.sqrt((PRIOR_STEPS * typical_sd**2 + max(steps, 0) * own**2) / (PRIOR_STEPS + max(steps, 0))))


def _first_rise(days: MeasuredDays, n_events: int, typical_sd: float) -> NDArray[np.int64]:
    """Day number on which the after level first steps up, NO_DAY where it does not."""
    cut = np.full(n_events, NO_DAY)
    after = days.where(days.is_after)
    log_level = log_levels(after)
    for event, (first, last) in enumerate(pairwise(np.searchsorted(after.event, np.arange(n_events + 1)))):
        series = log_level[first:last]
        noise = day_noise(after, step_sd(series, typical_sd))[first:last]
        edges = [0, *shifts(series, noise).tolist(), len(series)]
        level = [series[a:b].mean() for a, b in pairwise(edges) if b > a]
        rises = np.flatnonzero(np.diff(level) > 0)
        if rises.size:
            cut[event] = after.local_day[first + edges[rises[0] + 1]]
    return cut
