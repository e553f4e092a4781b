"""Search for shifts of level."""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from detectors.shifts import shifts, single_shift


def test_the_nile_shifts_after_1898():
    """Yearly flows of the Nile 1871 to 1970 have one shift, after the 28th year."""
    flow = sm.datasets.nile.load_pandas().data["volume"].to_numpy()
    # Source: Cobb, Biometrika 1978;65:243-51 (change near 1898, data of statsmodels.datasets.nile); means of that split
    found = single_shift(flow)
    assert 1871 + found.first_after - 1 == 1898
    assert (found.mean_before, found.mean_after) == pytest.approx((1097.75, 849.97), abs=0.01)
    assert shifts(flow, noise_sd=125).tolist() == [28]


def test_steps_are_found_where_they_are():
    """Two clear steps are found at their places, a level series has none."""
    rng = np.random.default_rng(0)
    series = np.concatenate([np.zeros(12), np.full(9, -2.0), np.full(15, 0.5)]) + 0.3 * rng.standard_normal(36)
    assert shifts(series, noise_sd=0.3).tolist() == [12, 21]
    assert shifts(0.3 * rng.standard_normal(40), noise_sd=0.3).tolist() == []


def test_a_single_odd_day_is_no_level():
    """One outlying value does not make two shifts, because a level holds for at least two values."""
    series = np.zeros(20)
    series[9] = 3.0
    assert shifts(series, noise_sd=1.0).tolist() == []


def test_uncertain_values_weigh_less():
    """A value with ten times the noise does not pull the shift to itself."""
    series = np.array([0, 0, 0, 3.0, 0, 0, 2, 2, 2, 2.0])
    noise = np.full(10, 0.4)
    noise[3] = 4.0
    assert shifts(series, noise).tolist() == [6]
    assert single_shift(series, 1 / noise**2).first_after == 6


def _every_split(series, toll, min_length):
    """Least penalised squares by trying every set of shifts."""
    n = len(series)
    best = (np.inf, [])
    for code in range(2 ** (n - 1)):
        cuts = [i + 1 for i in range(n - 1) if code >> i & 1]
        pieces = np.split(series, cuts)
        if min(map(len, pieces)) >= min_length:
            cost = sum(((piece - piece.mean()) ** 2).sum() for piece in pieces) + toll * len(cuts)
            best = min(best, (cost, cuts))
    return best


@settings(max_examples=60, deadline=None)
@given(st.lists(st.integers(-20, 20), min_size=4, max_size=10), st.integers(1, 3))
def test_search_is_exact(values, min_length):
    """The pruned search costs no more than the best of all possible splits."""
    series = np.array(values, dtype=float)
    toll = 9.3
    expected, _ = _every_split(series, toll, min_length)
    cuts = shifts(series, 1.0, penalty=toll, min_length=min_length).tolist()
    pieces = np.split(series, cuts)
    assert min(map(len, pieces)) >= min_length
    found = sum(((piece - piece.mean()) ** 2).sum() for piece in pieces) + toll * len(cuts)
    assert found == pytest.approx(expected)


@pytest.mark.parametrize("values", [[], [1.0]])
def test_too_short_a_series_has_no_shift(values):
    """A series of fewer than two values is refused by the single search and level for the other."""
    assert shifts(values, 1.0).tolist() == []
    with pytest.raises(ValueError, match="at least two"):
        single_shift(values)
