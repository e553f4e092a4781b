"""Ectopy and heart rate."""

import numpy as np
import pytest
from scipy.stats import pearsonr

from detectors.rate_dependence import (
    FOLLOWS,
    INDEPENDENT,
    OPPOSES,
    UNKNOWN,
    dependence,
    expected_change_pct,
    ratio_at_equal_rate,
)


def days_of_hours(rng, *, slope, ratio, rate_change, days=10, day_sd=0.2):
    """Hours of `days` days a side: counts whose logarithm follows the rate with `slope` per 10 bpm."""
    day = np.repeat(np.arange(2 * days), 24)
    is_after = day >= days
    rate = 72 + 9 * np.sin(2 * np.pi * np.tile(np.arange(24) - 9, 2 * days) / 24) + 3 * rng.standard_normal(len(day))
    rate = rate + rate_change * is_after
    level = (
        np.log(200) + slope * (rate - 72) / 10 + np.log(ratio) * is_after + day_sd * rng.standard_normal(2 * days)[day]
    )
    return rng.poisson(np.exp(level)), np.ones(len(day)), rate, is_after, day


@pytest.mark.parametrize(("slope", "kind"), [(0.4, FOLLOWS), (-0.4, OPPOSES), (0.0, INDEPENDENT)])
def test_kind_of_dependence(slope, kind):
    """Counts that follow, oppose or ignore the rate are sorted so."""
    counts, _, rate, _, _ = days_of_hours(np.random.default_rng(1), slope=slope, ratio=1, rate_change=0, day_sd=0.0)
    assert dependence(counts, rate).kind == kind


@pytest.mark.parametrize("noise", [0.0, 0.5, 5.0, 50.0])
def test_correlation_and_its_probability_are_pearsons(noise):
    """r and p equal those of scipy, for hours on a line too."""
    rng = np.random.default_rng(2)
    rate = 60 + 20 * rng.random(48)
    counts = 3 * rate + noise * rng.standard_normal(48)
    assert dependence(counts, rate)[:2] == pytest.approx(pearsonr(counts, rate), rel=1e-9, abs=1e-12)


def test_few_or_constant_hours_are_unknown():
    """Without hours or without variation no kind is given."""
    assert dependence([1, 2, 3], [60, 70, 80]).kind == UNKNOWN
    assert dependence(np.zeros(48), np.arange(48)).kind == UNKNOWN


def test_ten_pct_more_rate_has_the_published_change():
    """A mean rate 10 % higher goes with 76.6 % more beats where they follow the rate, with 13.4 % more elsewhere."""
    # Source: scilit.com/publications/950819913d02feebadb5994523a15e9b
    assert expected_change_pct(10, FOLLOWS) == pytest.approx(76.6)
    assert expected_change_pct(10, INDEPENDENT) == pytest.approx(13.4)


def test_a_rate_effect_is_not_sold_as_suppression():
    """A fall that comes from the rate alone is no fall at equal rate; a true suppression stays one."""
    rng = np.random.default_rng(2)
    by_rate = days_of_hours(rng, slope=0.5, ratio=1.0, rate_change=-10)
    counts, is_after = by_rate[0], by_rate[3]
    assert counts[is_after].mean() / counts[~is_after].mean() < 0.75
    found = ratio_at_equal_rate(*by_rate)
    assert found.low < 1 < found.high
    suppressed = ratio_at_equal_rate(*days_of_hours(rng, slope=0.5, ratio=0.3, rate_change=-10))
    assert suppressed.low < 0.3 < suppressed.high < 0.6


def test_interval_at_equal_rate_covers():
    """Over simulated patients the interval at equal rate holds the true ratio in about 95 %."""
    rng = np.random.default_rng(4)
    found = [ratio_at_equal_rate(*days_of_hours(rng, slope=0.3, ratio=0.5, rate_change=-6)) for _ in range(200)]
    covered = np.mean([each.low <= 0.5 <= each.high for each in found])
    assert covered > 0.95 - 3 * np.sqrt(0.05 * 0.95 / 200)


def test_sides_without_beats_or_days_have_no_ratio():
    """No beats on a side, or a single day, give no ratio at equal rate."""
    counts, hours, rate, is_after, day = days_of_hours(np.random.default_rng(3), slope=0, ratio=1, rate_change=0)
    assert np.isnan(ratio_at_equal_rate(np.where(is_after, 0, counts), hours, rate, is_after, day).ratio)
    one = day <= 10
    assert np.isnan(ratio_at_equal_rate(counts[one], hours[one], rate[one], is_after[one], day[one]).ratio)
