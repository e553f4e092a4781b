"""Days made comparable over the hours of the clock."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from detectors.standardise import HourCells, over_dispersion, standardised_days

PROFILE = 1 + 0.9 * np.sin(2 * np.pi * (np.arange(24) - 6) / 24)


def cells_of(levels, hours_of_day, *, exposure=1.0) -> HourCells:
    """Exact counts: level of the day times the profile of the hour."""
    day = np.repeat(np.arange(len(levels)), [len(hours) for hours in hours_of_day])
    clock_hour = np.concatenate([np.asarray(hours) for hours in hours_of_day])
    exposures = np.full(len(day), exposure)
    return HourCells(day, clock_hour, np.asarray(levels)[day] * PROFILE[clock_hour] * exposures, exposures)


def test_whole_days_keep_their_plain_level():
    """Days worn round the clock keep counts over hours."""
    level, _ = standardised_days(cells_of([10, 40, 20], [range(24)] * 3), np.zeros(3, dtype=int))
    assert level.counts / level.exposure == pytest.approx([10, 40, 20], rel=1e-6)


def test_half_days_are_compared_over_the_same_clock():
    """A day without its nights is corrected most of the way to what it would have shown round the clock."""
    hours = [range(24)] * 8 + [range(6, 18)]
    level, _ = standardised_days(cells_of([10.0] * 9, hours), np.zeros(9, dtype=int))
    plain = PROFILE[6:18].mean() * 10
    assert plain > 15
    assert level.counts[-1] / level.exposure[-1] == pytest.approx(10, rel=0.06)


def test_each_patient_has_an_own_profile():
    """The profile of one patient does not touch the days of another."""
    both = cells_of([10, 10, 10], [range(24), range(24), range(6, 18)])
    apart, _ = standardised_days(both, np.array([0, 0, 1]))
    assert apart.counts[2] / apart.exposure[2] == pytest.approx(10 * PROFILE[6:18].mean())


@given(st.floats(0.1, 50), st.lists(st.floats(0.5, 100), min_size=2, max_size=5))
def test_levels_scale_with_the_unit_of_exposure(unit, levels):
    """Measuring exposure in another unit changes every level by that unit and nothing else."""
    hours = [range(3, 20)] + [range(24)] * (len(levels) - 1)
    owner = np.zeros(len(levels), dtype=int)
    one, _ = standardised_days(cells_of(levels, hours), owner)
    other, _ = standardised_days(cells_of(levels, hours, exposure=unit), owner)
    assert other.counts / other.exposure == pytest.approx(one.counts / one.exposure, rel=1e-6)


def test_days_without_beats_stay_without():
    """No beats at all give level 0, not an error."""
    level, expected = standardised_days(cells_of([0, 0], [range(24), range(5)]), np.zeros(2, dtype=int))
    assert level.counts.tolist() == [0, 0]
    assert (level.exposure > 0).all()
    assert (expected == 0).all()


def test_over_dispersion_is_that_of_the_hours():
    """Poisson hours have dispersion near 1, hours in salvos of nine have nine."""
    rng = np.random.default_rng(0)
    cells = cells_of([20.0] * 60, [range(24)] * 60)
    poisson = cells._replace(counts=rng.poisson(cells.counts).astype(float))
    salvos = cells._replace(counts=9.0 * rng.poisson(cells.counts / 9))
    owner = np.zeros(60, dtype=int)
    for found, expected in ((poisson, 1), (salvos, 9)):
        _, fitted = standardised_days(found, owner)
        assert over_dispersion(found, fitted, owner, 1)[0] == pytest.approx(expected, rel=0.12)
