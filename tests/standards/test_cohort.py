"""Cohort figures against published worked numbers and a general-purpose library."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportion_confint

from detectors import cohort


@pytest.mark.parametrize(
    ("successes", "of", "wilson", "exact"),
    [
        # from memory: Newcombe, Stat Med 1998;17:857; recomputed with statsmodels
        (81, 263, (0.2553, 0.3662), (0.2527, 0.3676)),
        (15, 148, (0.0624, 0.1605), (0.0578, 0.1617)),
        (0, 20, (0.0, 0.1611), (0.0, 0.1684)),
        (1, 29, (0.0061, 0.1718), (0.0009, 0.1776)),
    ],
)
def test_intervals_of_shares(successes, of, wilson, exact):
    """Score and exact intervals have the worked numbers."""
    assert cohort.wilson_share(successes, of)[1:] == pytest.approx(wilson, abs=6e-5)
    assert cohort.exact_share(successes, of)[1:] == pytest.approx(exact, abs=6e-5)


def test_sensitivity_and_specificity_of_the_burden_threshold():
    """The published 79 % of 57 and 78 % of 117 fit only 45 and 91 patients; their intervals follow."""
    # Source: Baman et al., Heart Rhythm 2010;7:865 (Se 79, Sp 78; the denominators are an inference)
    assert [k for k in range(58) if round(100 * k / 57) == 79] == [45]
    assert [k for k in range(118) if round(100 * k / 117) == 78] == [91]
    assert cohort.wilson_share(45, 57)[1:] == pytest.approx((0.6671, 0.8753), abs=6e-5)
    assert cohort.wilson_share(91, 117)[1:] == pytest.approx((0.6943, 0.8436), abs=6e-5)


@given(st.integers(1, 300).flatmap(lambda of: st.tuples(st.integers(0, of), st.just(of))))
def test_shares_equal_the_library(pair):
    """Any share has the library's intervals and lies inside them."""
    # Source: statsmodels.stats.proportion.proportion_confint
    assert cohort.wilson_share(*pair)[1:] == pytest.approx(proportion_confint(*pair, method="wilson"), abs=1e-9)
    assert cohort.exact_share(*pair)[1:] == pytest.approx(proportion_confint(*pair, method="beta"), abs=1e-9)
    share, low, high = cohort.wilson_share(*pair)
    assert low <= share + 1e-12 and share <= high + 1e-12


def test_nobody_has_no_share():
    """Nobody of nobody is unknown; more than all is refused."""
    assert np.isnan(cohort.wilson_share(0, 0)).all()
    with pytest.raises(ValueError, match="3 of 2"):
        cohort.exact_share(3, 2)


def test_geometric_mean_ratio_is_students_on_logs():
    """The mean ratio and its interval are those of the logarithms."""
    ratios = np.array([0.1, 0.4, 0.25, 1.2, 0.6])
    found = cohort.geometric_mean_ratio(ratios)
    # Source: scipy.stats
    interval = stats.ttest_1samp(np.log(ratios), 0).confidence_interval(0.95)
    assert found == pytest.approx((stats.gmean(ratios), *np.exp(interval)))


FIRST = [494, 395, 516, 434, 476, 557, 413, 442, 650, 433, 417, 656, 267, 478, 178, 423, 427]
SECOND = [512, 430, 520, 428, 500, 600, 364, 380, 658, 445, 432, 626, 260, 477, 259, 350, 451]


def test_limits_of_agreement():
    """Two peak-flow meters agree within the published limits."""
    found = cohort.agreement(FIRST, SECOND)
    # from memory: Bland and Altman, Lancet 1986;i:307 prints -2.1, 38.8, -79.7, 75.5, -22.0, 17.8; mean and SD by hand
    difference = np.subtract(FIRST, SECOND)
    assert (found.mean, found.sd) == pytest.approx((difference.mean(), difference.std(ddof=1)))
    assert found == pytest.approx((-2.1, 38.8, -79.7, 75.5, -22.0, 17.8), abs=0.1)


FIFTEEN = [
    0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0,
]  # fmt: skip


def test_p_values_looked_at_together():
    """Of fifteen p-values three fall by Holm and four by Benjamini and Hochberg."""
    # from memory: worked example of Benjamini and Hochberg, JRSS B 1995;57:289
    assert cohort.holm_rejected(FIFTEEN).sum() == 3
    assert cohort.benjamini_hochberg_rejected(FIFTEEN).sum() == 4


@settings(max_examples=25)  # the library takes its time
@given(st.lists(st.floats(0, 1), min_size=1, max_size=30))
def test_multiple_p_values_equal_the_library(p_values):
    """Both procedures reject what the library rejects, in any order."""
    # Source: statsmodels.stats.multitest.multipletests
    assert cohort.holm_rejected(p_values).tolist() == multipletests(p_values, method="holm")[0].tolist()
    library = multipletests(p_values, method="fdr_bh")[0].tolist()
    assert cohort.benjamini_hochberg_rejected(p_values).tolist() == library
