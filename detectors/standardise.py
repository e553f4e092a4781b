"""Days made comparable: what a day would have shown had it been worn round the clock.

Ectopy follows the hour of the day, so a day without its night is not a small day but another mixture of hours.
Each patient's own clock-hour profile is fitted together with the level of each day (two-way multiplicative model,
indirect standardisation); a day's exposure is then counted in "average hours".
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

CLOCK_HOURS = 24
FIT_ROUNDS = 6
PRIOR_CELLS = 24.0  # cells of plain counting noise that the over-dispersion starts from


class HourCells(NamedTuple):
    """One entry per day and clock hour with exposure. All arrays have shape (n_cells,)."""

    day: Ints  # row of the day, 0-based
    clock_hour: Ints  # 0 to 23
    counts: Floats
    exposure: Floats  # > 0, in the unit of the denominator


class DayLevels(NamedTuple):
    """One entry per day. All arrays have shape (n_days,)."""

    counts: Floats
    exposure: Floats  # standardised: counts / exposure is the level of a day worn round the clock


def standardised_days(cells: HourCells, profile_of_day: Ints) -> tuple[DayLevels, Floats]:
    """Counts and standardised exposures per day, and the expected count of every cell.

    `profile_of_day`, shape (n_days,), says which days share a clock-hour profile. The profile of an hour is shrunk
    towards flat by one average cell, so that an hour seen once does not carry its noise into every day.
    """
    n_days = len(profile_of_day)
    owner = profile_of_day[cells.day]
    slot = owner * CLOCK_HOURS + cells.clock_hour
    n_slots = (int(profile_of_day.max(initial=-1)) + 1) * CLOCK_HOURS
    day_count = _sums(cells.day, cells.counts, n_days)
    slot_count = _sums(slot, cells.counts, n_slots)
    profile = np.ones(n_slots)
    exposure = _sums(cells.day, cells.exposure, n_days)
    for _ in range(FIT_ROUNDS):
        expected = _ratio(day_count, exposure)[cells.day] * cells.exposure
        profile = _profile(slot_count, _sums(slot, expected, n_slots), slot, cells)
        exposure = _sums(cells.day, cells.exposure * profile[slot], n_days)
    expected = _ratio(day_count, exposure)[cells.day] * cells.exposure * profile[slot]
    return DayLevels(day_count, exposure), expected


def over_dispersion(cells: HourCells, expected: Floats, group_of_day: Ints, n_groups: int) -> Floats:
    """Variance of the hourly counts over their mean (Pearson), per group, shape (n_groups,), at least 1.

    Degrees of freedom: cells less one per day; groups with few cells are drawn towards 1.
    """
    possible = expected > 0
    day = cells.day[possible]
    deviation = (cells.counts[possible] - expected[possible]) ** 2 / expected[possible]
    pearson = _sums(group_of_day[day], deviation, n_groups)
    seen_days = np.unique(day)
    freedom = np.bincount(group_of_day[day], minlength=n_groups)
    freedom -= np.bincount(group_of_day[seen_days], minlength=n_groups)
    return np.maximum(1.0, (pearson + PRIOR_CELLS) / (freedom + PRIOR_CELLS))


def _profile(slot_count: Floats, slot_expected: Floats, slot: Ints, cells: HourCells) -> Floats:
    """Clock-hour factors per owner and hour, whose mean over the owner's usual exposure is 1."""
    visits = np.bincount(slot, minlength=len(slot_count))
    table = (-1, CLOCK_HOURS)
    cell_mean = _ratio(slot_expected.reshape(table).sum(1), visits.reshape(table).sum(1))[:, None]
    factor = _ratio(slot_count.reshape(table) + cell_mean, slot_expected.reshape(table) + cell_mean, otherwise=1.0)
    usual = _ratio(_sums(slot, cells.exposure, len(slot_count)), visits).reshape(table)
    any_hour = _ratio(usual.sum(1), (usual > 0).sum(1))[:, None]
    weight = np.where(usual > 0, usual, any_hour)
    mean = _ratio((weight * factor).sum(1), weight.sum(1), otherwise=1.0)[:, None]
    return (factor / np.where(mean > 0, mean, 1.0)).ravel()


def _sums(group: Ints, values: Floats, n_groups: int) -> Floats:
    return np.bincount(group, values, n_groups).astype(float)


def _ratio(above: Floats, below: NDArray[np.generic], otherwise: float = 0.0) -> Floats:
    result = np.full(np.shape(above), otherwise)
    np.divide(above, below, out=result, where=np.asarray(below) > 0)
    return result
