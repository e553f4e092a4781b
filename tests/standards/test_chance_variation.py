"""Published numbers on spontaneous variation, recomputed."""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from detectors import variability as v


@pytest.mark.parametrize(
    ("fall_pct", "rise_pct"),
    # Source: Circulation 1988;78:286 (first four rows); Am J Cardiol 1987;59:278 (last row)
    [(55, 124), (75, 303), (96, 2269), (98, 4091), (95, 1780)],
)
def test_published_rises_mirror_the_published_falls(fall_pct, rise_pct):
    """A published limit for rises gives back the published limit for falls within rounding."""
    assert v.mirror_fall_pct(rise_pct) == pytest.approx(fall_pct, abs=0.55)
    assert v.mirror_rise_pct(v.mirror_fall_pct(rise_pct)) == pytest.approx(rise_pct)


def test_three_days_each_side_lower_the_limit_as_published():
    """83 % for one day each side becomes 64 % for three, which the paper prints as 65 %."""
    # Source: Morganroth et al., Circulation 1978;58:408 (83 % for 24 h, 65 % for 72 h; 83.5 % rounds to 83)
    assert v.chance_fall_for_days(83, 3) == pytest.approx(64.05, abs=0.01)
    assert v.chance_fall_for_days(83.5, 3) >= 64.5
    # Source: implied by the same 83 %: -ln(0.17) / (1.645 sqrt 2)
    assert v.sd_from_chance_fall(83) / np.sqrt(2) == pytest.approx(0.7617, abs=1e-4)


def test_limits_by_days_follow_from_the_spread():
    """A spread of 0.5 between days gives the tabled limits for 1, 2, 3, 7 and 14 days each side."""
    sd = 0.5 * np.sqrt(2 / np.array([1, 2, 3, 7, 14]))
    # Source: normal theory on logarithms, one-sided 95 %, by hand
    assert v.chance_fall_pct(sd) == pytest.approx([68.7, 56.1, 48.9, 35.6, 26.7], abs=0.05)


def test_shares_of_day_block_and_hour_leave_the_published_part():
    """The published shares of day, 8 h block and hour leave 34.67 % of the variance in a mean over 24 h."""
    # Source: Morganroth et al., Circulation 1978;58:408 (shares 23, 29 and 48 %)
    left = v.nested_variance(0.23, 0.29, 0.48, days=1, blocks_per_day=3, hours_per_block=8)
    assert left == pytest.approx(0.3467, abs=1e-4)


DYESTUFF = [
    [1545, 1440, 1440, 1520, 1580], [1540, 1555, 1490, 1560, 1495], [1595, 1550, 1605, 1510, 1560],
    [1445, 1440, 1595, 1465, 1545], [1595, 1630, 1515, 1635, 1625], [1520, 1455, 1450, 1480, 1445],
]  # fmt: skip


def test_variance_components_of_a_balanced_layout():
    """The Dyestuff yields give the known components between and within batches."""
    found = v.one_way(DYESTUFF)
    # from memory: Davies 1947; the text on lme4 prints the same; the mean squares agree with the F test of scipy
    expected = (1527.5, 11271.5, 2451.25, 42.00, 49.51, 19.38)
    assert found == pytest.approx(expected, abs=0.01)
    # Source: scipy.stats.f_oneway
    assert found.mean_square_between / found.mean_square_within == pytest.approx(stats.f_oneway(*DYESTUFF).statistic)


def test_variance_between_is_cut_at_zero():
    """Groups more alike than chance would have them show no variance between."""
    assert v.one_way([[1, 5], [5, 1], [3, 3]]).sd_between == 0


def test_one_way_refuses_what_is_no_table():
    """A single group is refused with its shape."""
    with pytest.raises(ValueError, match=r"\(1, 3\)"):
        v.one_way([[1, 2, 3]])


def test_one_day_each_side_repeats_the_published_series():
    """With the spread of the series itself, one day against one day has the published limit at every gap."""
    series = v.SINGLE_BEATS
    within = v._typical_within(series)
    for gap, fall in zip(series.gap_d, series.fall_limit_pct, strict=True):
        variance = within * (2 + v.excess_of_gap([0], [gap], series))
        # Source: Circulation 1988;78:286; a day apart lies below the spread within a week, where 0 is the least excess
        expected = fall if gap > 1 else v.chance_fall_pct(np.sqrt(2 * within))
        assert v.chance_fall_pct(np.sqrt(variance)) == pytest.approx(expected)


@given(st.integers(1, 20), st.integers(1, 20), st.integers(1, 400))
def test_more_time_between_periods_never_narrows_the_limit(n_before, n_after, gap):
    """The excess variance is never negative and grows with the gap."""
    before = np.arange(n_before)
    near, far = (
        v.excess_of_gap(before, before[-1] + more + np.arange(n_after), v.SINGLE_BEATS) for more in (gap, 2 * gap)
    )
    assert 0 <= near <= far + 1e-12


def test_the_excess_is_that_of_the_days_whose_spread_shows():
    """Three days show less of a drift than fourteen: where counting hides the fourteen, the time between adds more."""
    before, after = np.arange(3), 10 + np.arange(14)
    of_all, of_three = v.excess_of_gap(before, after, v.SINGLE_BEATS, ([1, 1], [1, 0]))
    assert of_three > 1.5 * of_all
    half = v.variogram(np.subtract.outer(before, before), v.SINGLE_BEATS)
    # Source: the contrast of the published variogram over the variance that the three days show, by hand
    between = v.variogram(np.subtract.outer(before, after), v.SINGLE_BEATS).mean()
    within = v.variogram(np.subtract.outer(after, after), v.SINGLE_BEATS).mean()
    expected = (2 * between - half.mean() - within) / (half.sum() / 6) - 1 / 3 - 1 / 14
    assert of_three == pytest.approx(expected)


def test_regression_of_untreated_pairs_gives_the_prediction_limit():
    """The limit from untreated pairs is the one-sided prediction limit of a straight line on logarithms."""
    rng = np.random.default_rng(4)
    baseline = np.exp(rng.normal(4, 1, 21))
    later = np.exp(0.4 + 0.9 * np.log(baseline) + rng.normal(0, 0.5, 21))
    model = sm.OLS(np.log(later), sm.add_constant(np.log(baseline))).fit()
    at = np.array([5.0, 60.0, 500.0])
    frame = model.get_prediction(sm.add_constant(np.log(at))).summary_frame(alpha=0.10)
    # Source: statsmodels OLS prediction interval (90 % two-sided); method of Sami et al., Circulation 1980;62:1172
    expected = 100 * (1 - np.exp(frame["obs_ci_lower"].to_numpy()) / at)
    assert v.untreated_pairs_limit_pct(baseline, later, at) == pytest.approx(expected, abs=1e-9)


def test_a_second_look_regresses_by_the_share_of_chance():
    """Chosen for a high first look, patients fall back by the share of variance that is chance."""
    rng = np.random.default_rng(3)
    usual = rng.normal(2, 1.0, 4000)
    first, second = (usual + rng.normal(0, 0.7, 4000) for _ in range(2))
    error = np.full(4000, 0.49)
    expected = v.regression_to_mean(first, error, v.usual_of(first, error))
    high = first > 3
    assert (second - first)[high].mean() == pytest.approx(expected[high].mean(), abs=0.03)
    assert np.isnan(v.regression_to_mean(first, error, v.usual_of(first[:4], error[:4]))).all()
