"""Days compared by rank: against published critical values, a general library, and a drift of its own."""

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from scipy.stats import mannwhitneyu, permutation_test, rankdata

from detectors.ranks import rank_shift
from detectors.variability import SINGLE_BEATS, excess_of_gap, variogram


@pytest.mark.parametrize(("n", "share"), [(3, 1 / 20), (4, 1 / 70), (5, 1 / 252)])
def test_separate_days_have_the_probability_of_their_arrangement(n, share):
    """Sides that do not overlap are one arrangement of all, in the direction they lie."""
    found = rank_shift(np.arange(n) + 10.0, np.arange(n) + 1.0)
    # Source: one of C(2n, n) arrangements, by hand
    assert found.lower == pytest.approx(share)
    assert found.higher == pytest.approx(1)


@pytest.mark.parametrize("sizes", [(4, 7), (9, 8), (12, 14), (28, 60)])
@pytest.mark.parametrize("shift", [0.0, 0.8, -1.5])
def test_untied_days_as_in_a_general_library(sizes, shift):
    """Without ties both tails are those of the exact or the normal rank sum test."""
    rng = np.random.default_rng(sum(sizes))
    before, after = rng.normal(size=sizes[0]), rng.normal(shift, size=sizes[1])
    method = "exact" if sum(sizes) <= 20 else "asymptotic"
    found = rank_shift(before, after)
    for tail, side in ((found.lower, "less"), (found.higher, "greater")):
        # Source: scipy.stats.mannwhitneyu
        assert tail == pytest.approx(mannwhitneyu(after, before, alternative=side, method=method).pvalue, rel=1e-9)


def test_tied_days_as_by_all_permutations():
    """With many ties the tails are those of the rank sums of all permutations."""
    before, after = np.array([0, 0, 3, 4, 4, 9.0]), np.array([0, 0, 0, 3, 0.0])
    ranks = rankdata(np.concatenate([before, after]))

    def rank_sum(a, b):
        return a.sum()

    # Source: scipy.stats.permutation_test over all 462 arrangements of the mid-ranks
    expected = permutation_test((ranks[6:], ranks[:6]), rank_sum, alternative="less", n_resamples=np.inf)
    assert rank_shift(before, after).lower == pytest.approx(expected.pvalue)


@given(st.lists(st.integers(0, 9), max_size=30), st.lists(st.integers(0, 9), max_size=30))
@example([0, 1], [1, 1, 2, 3, 3, 4, 4, 4])
def test_the_sides_mirror_each_other(before, after):
    """Exchanging the sides exchanges the tails, which never fall below certainty together; empty sides say nothing."""
    found = rank_shift(np.array(before, float), np.array(after, float))
    mirrored = rank_shift(np.array(after, float), np.array(before, float))
    assert found.lower == pytest.approx(mirrored.higher) and found.higher == pytest.approx(mirrored.lower)
    assert found.lower + found.higher > 1 - 1e-9
    if not before or not after:
        assert found == (1, 1)


def test_time_between_the_sides_widens_what_chance_explains():
    """Days that drift as published are called a fall by chance no more often than allowed, and far too often without."""
    days = np.concatenate([np.arange(7), np.arange(7) + 35])
    half = variogram(days[:, None] - days[None, :], SINGLE_BEATS)
    root = np.linalg.cholesky(half.max() - half + 1e-9 * np.eye(14))
    levels = np.random.default_rng(4).standard_normal((1500, 14)) @ root.T
    excess = excess_of_gap(days[:7], days[7:], SINGLE_BEATS)
    falls = [[rank_shift(x[:7], x[7:], e).lower < 0.05 for x in levels] for e in (0.0, excess)]
    assert np.mean(falls[0]) > 0.10
    # Source: the nominal one-sided 5 %, two standard errors of 1,500 patients (1.1 %) allowed
    assert np.mean(falls[1]) < 0.05 + 0.011
