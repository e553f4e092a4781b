"""The interval of a day's burden from its own clock hours."""

from typing import Any

import numpy as np
import polars as pl
import pytest
from scipy import stats
from statsmodels.api import GLM, add_constant
from statsmodels.genmod.families import Binomial
from statsmodels.stats.proportion import proportion_confint

HOURLY_V = np.array([200, 40, 12, 88, 400, 0, 120, 60])
HOURLY_BEATS = np.array([4000, 3600, 3000, 4400, 4000, 2800, 4000, 3600])


def day(lake: Any, v_beats: np.ndarray, all_beats: np.ndarray) -> dict[str, Any]:
    """Build the day of a recording with these beats in the quarter hours of each clock hour."""
    lake.patient("P1")
    quarters = [np.repeat(counts // 4, 4) for counts in (v_beats, all_beats)]
    v, n = (pl.Series(counts, dtype=pl.Int64) for counts in quarters)
    tally = {"v_beats": pl.lit(v), "n_beats": pl.lit(n - v), "s_beats": 0, "all_beats": pl.lit(n)}
    lake.recording("R1", "P1", "2026-05-01T00:00", f"2026-05-01T{len(v_beats):02d}:00", **tally)
    with lake.built() as build:
        assert build.check() == []
        return build.frame("wear_days").row(0, named=True)


def test_the_interval_is_wilsons_on_overdispersed_hours(lake: Any) -> None:
    """A day's interval is Wilson's, on beats over the dispersion of its hours, with Student's t."""
    found = day(lake, HOURLY_V, HOURLY_BEATS)
    # Source: statsmodels, GLM with binomial counts (Pearson chi-square over degrees of freedom) and proportion_confint
    counts = np.column_stack([HOURLY_V, HOURLY_BEATS - HOURLY_V])
    fit = GLM(counts, add_constant(np.zeros(8), has_constant="add")[:, :1], family=Binomial()).fit()
    dispersion = fit.pearson_chi2 / fit.df_resid
    alpha = 2 * stats.norm.sf(stats.t.isf(0.025, 7))
    effective = HOURLY_V.sum() / dispersion, HOURLY_BEATS.sum() / dispersion
    low, high = proportion_confint(*effective, alpha=alpha, method="wilson")
    assert dispersion > 50
    assert found["v_burden_low_pct"] == pytest.approx(100 * low, rel=2e-3)
    assert found["v_burden_high_pct"] == pytest.approx(100 * high, rel=2e-3)


def test_hours_in_waves_widen_the_interval(lake: Any) -> None:
    """Hours that resemble their neighbours have the serial dispersion of Newey and West where it is the larger."""
    v_beats = np.array([400, 360, 320, 200, 80, 40, 20, 40, 80, 200, 320, 360])
    all_beats = np.array([4000, 4400, 3600, 4000, 4400, 3600, 4000, 4400, 3600, 4000, 4400, 3600])
    found = day(lake, v_beats, all_beats)
    # Source: statsmodels, GLM with binomial counts: scatter of independent hours, and HAC with Bartlett weights over 3 lags
    counts, one = np.column_stack([v_beats, all_beats - v_beats]), np.ones((12, 1))
    model = GLM(counts, one, family=Binomial())
    independent = model.fit()
    waves = model.fit(cov_type="HAC", cov_kwds={"maxlags": 3, "use_correction": True})
    dispersion = (waves.bse / independent.bse).item() ** 2
    assert dispersion > 1.5 * independent.pearson_chi2 / independent.df_resid
    alpha = 2 * stats.norm.sf(stats.t.isf(0.025, 11))
    low, high = proportion_confint(
        v_beats.sum() / dispersion, all_beats.sum() / dispersion, alpha=alpha, method="wilson"
    )
    assert found["v_burden_low_pct"] == pytest.approx(100 * low, rel=2e-3)
    assert found["v_burden_high_pct"] == pytest.approx(100 * high, rel=2e-3)


@pytest.mark.parametrize("hours", [3, 8, 23])
def test_even_hours_leave_only_counting(lake: Any, hours: int) -> None:
    """Hours that scatter less than counting explains are taken as scattering that much."""
    found = day(lake, np.full(hours, 40), np.full(hours, 4000))
    # Source: statsmodels proportion_confint, Wilson, at Student's t of scipy
    alpha = 2 * stats.norm.sf(stats.t.isf(0.025, hours - 1))
    low, high = proportion_confint(40 * hours, 4000 * hours, alpha=alpha, method="wilson")
    assert found["v_burden_low_pct"] == pytest.approx(100 * low, rel=2e-2)
    assert found["v_burden_high_pct"] == pytest.approx(100 * high, rel=2e-2)


def test_a_day_without_ectopy_still_has_an_upper_end(lake: Any) -> None:
    """No beat in 32,000 is not a burden of exactly nothing."""
    found = day(lake, np.zeros(8, int), np.full(8, 4000))
    # Source: statsmodels proportion_confint, Wilson, at Student's t of scipy
    _, high = proportion_confint(0, 32000, alpha=2 * stats.norm.sf(stats.t.isf(0.025, 7)), method="wilson")
    assert found["v_burden_low_pct"] == 0
    assert found["v_burden_high_pct"] == pytest.approx(100 * high, rel=5e-3)


def test_two_clock_hours_are_too_few_for_an_interval(lake: Any) -> None:
    """A day with beats in fewer than three clock hours has a burden and no interval."""
    found = day(lake, np.array([40, 400]), np.array([4000, 4000]))
    assert found["v_burden_pct"] == 5.5
    assert (found["v_burden_low_pct"], found["v_burden_high_pct"]) == (None, None)
