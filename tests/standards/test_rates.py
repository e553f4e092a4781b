"""Rate models against published figures and general-purpose libraries."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.rates import test_poisson_2indep as poisson_2indep

from detectors import rates

# Source: RAND Health Insurance Experiment counts as shipped by statsmodels.datasets.randhie, summed
# (health excellent, good, fair, poor; plan idp 0 then 1): person-years, visits
PERSON_YEARS = np.array([8261, 5294, 1161, 225, 2758, 2015, 399, 77], dtype=float)
VISITS = np.array([22858, 15953, 4454, 1505, 6171, 5260, 1306, 245], dtype=float)
PLAN = np.repeat([0.0, 1.0], 4)
HEALTH = np.tile(np.eye(4)[:, 1:], (2, 1))
TABLE = np.column_stack([np.ones(8), PLAN, HEALTH])
NINE = ["lncoins", "idp", "lpi", "fmde", "physlm", "disea", "hlthg", "hlthf", "hlthp"]


@pytest.fixture(scope="module")
def people():
    data = sm.datasets.randhie.load_pandas().data
    counts = data["mdvis"].to_numpy(float)
    ones = np.ones(len(data))
    health = data[["hlthg", "hlthf", "hlthp"]].to_numpy(float)
    table = np.column_stack([ones, data["idp"], health])
    return counts, table, np.column_stack([data[NINE].to_numpy(float), ones])


def test_poisson_with_one_effect_is_the_closed_form():
    """The ratio of two groups is the ratio of their rates, its SE the root of the summed inverse counts."""
    fit = rates.fit_poisson(VISITS, TABLE[:, :2], PERSON_YEARS)
    # Source: closed form (12982/5249)/(44770/14941), SE sqrt(1/12982 + 1/44770)
    assert fit.ratio(1) == pytest.approx((0.825387, 0.809418, 0.841671), abs=2e-6)


def test_poisson_with_covariates():
    """Poisson regression with an offset gives the figures of a general library."""
    fit = rates.fit_poisson(VISITS, TABLE, PERSON_YEARS)
    # Source: statsmodels 0.15.0
    assert fit.ratio(1) == pytest.approx((0.823865, 0.807920, 0.840125), abs=2e-6)
    health = np.exp(fit.coefficients[[0, 2, 3, 4]])
    assert health == pytest.approx([2.755947, 1.106856, 1.402963, 2.201482], abs=2e-6)
    assert (fit.deviance, fit.pearson_chi2) == pytest.approx((85.11797, 78.06910), abs=1e-4)


def test_single_records_and_other_units_give_the_same_ratio(people):
    """Summed or single records give one ratio; another unit of time moves the intercept only."""
    counts, table, _ = people
    summed = rates.fit_poisson(VISITS, TABLE, PERSON_YEARS)
    assert rates.fit_poisson(counts, table).ratio(1) == pytest.approx(summed.ratio(1), abs=2e-6)
    hours = rates.fit_poisson(VISITS, TABLE, PERSON_YEARS * 24)
    assert hours.coefficients - summed.coefficients == pytest.approx([-np.log(24), 0, 0, 0, 0], abs=1e-9)


def test_quasi_poisson(people):
    """Over-dispersion widens the interval of the Poisson estimate, from a table and from single records."""
    counts, table, _ = people
    # Source: statsmodels 0.15.0, GLM Poisson with scale X2
    summed = rates.fit_quasi_poisson(VISITS, TABLE, PERSON_YEARS)
    assert summed.dispersion == pytest.approx(26.02303, abs=1e-4)
    assert summed.ratio(1)[1:] == pytest.approx((0.745689, 0.910237), abs=2e-6)
    single = rates.fit_quasi_poisson(counts, table)
    assert single.dispersion == pytest.approx(6.889223, abs=1e-4)
    assert single.ratio(1)[1:] == pytest.approx((0.782669, 0.867230), abs=2e-6)


def test_poisson_on_nine_columns(people):
    """All nine columns and the constant agree with published results to 1e-7."""
    counts, _, nine = people
    fit = rates.fit_poisson(counts, nine)
    # Source: Stata 11 results in the test suite of statsmodels
    expected = [-0.05253512, -0.24708679, 0.03529020, -0.03457751, 0.27171398, 0.03394147, -0.01263503, 0.05405633,
                0.20611512, 0.70035288]  # fmt: skip
    assert fit.coefficients == pytest.approx(expected, abs=1e-7)
    # Source: statsmodels 0.15.0
    assert fit.ratio(1) == pytest.approx((0.781073, 0.764987, 0.797497), abs=2e-6)
    quasi = rates.fit_quasi_poisson(counts, nine)
    assert quasi.dispersion == pytest.approx(6.279179, abs=1e-4)
    assert quasi.ratio(1)[1:] == pytest.approx((0.741388, 0.822882), abs=2e-6)


def test_own_fit_equals_the_library_on_any_design(people):
    """Coefficients and standard errors equal those of statsmodels to 1e-6 on made-up counts with an offset."""
    rng = np.random.default_rng(1)
    design = np.column_stack([np.ones(300), rng.normal(size=(300, 3))])
    exposure = rng.uniform(1, 24, 300)
    counts = rng.poisson(exposure * np.exp(design @ [1, 0.3, -0.5, 0.1]) * rng.gamma(2, 0.5, 300))
    own = rates.fit_quasi_poisson(counts, design, exposure)
    # Source: statsmodels GLM, family Poisson, scale X2
    library = sm.GLM(counts, design, family=sm.families.Poisson(), offset=np.log(exposure)).fit(scale="X2", tol=1e-12)
    assert own.coefficients == pytest.approx(library.params, abs=1e-6)
    assert np.sqrt(np.diag(own.covariance)) == pytest.approx(library.bse, abs=1e-6)


def test_harmonic_series_returns_its_coefficients():
    """Counts equal to the model mean give back step, trend and harmonics, with no over-dispersion."""
    t = np.arange(1, 60)
    design, names = rates.series_design(t, 37, period_d=12, harmonics=2)
    assert names == ("constant", "trend", "step", "sin1", "cos1", "sin2", "cos2")
    truth = np.array([-2, 0.05, -0.25, 0.10, -0.05, 0.03, 0.02])
    exposure = 1000 + 10.0 * t
    fit = rates.fit_quasi_poisson(exposure * np.exp(design @ truth), design, exposure)
    # Source: fixed point of the score equations
    assert fit.coefficients == pytest.approx(truth, abs=1e-9)
    assert fit.ratio(2)[0] == pytest.approx(0.7788008, abs=1e-7)
    assert fit.dispersion == pytest.approx(0, abs=1e-9)


def test_slope_starts_after_the_lag():
    """The slope column counts from the end of the lag and is 0 before."""
    design, names = rates.series_design([0, 5, 9, 12], 3, lag_d=4, slope=True)
    assert design[:, names.index("slope")] == pytest.approx([0, 0, 2 / 7, 5 / 7])
    assert design[:, names.index("step")].tolist() == [0, 0, 1, 1]


def test_negative_binomial_on_a_table():
    """Ratio and alpha of the summed table agree with a profile over alpha."""
    fit = rates.fit_negative_binomial(VISITS, TABLE, PERSON_YEARS)
    # Source: statsmodels 0.15.0, alpha by profile with the GLM family
    assert fit.ratio(1) == pytest.approx((0.742252, 0.633563, 0.869587), abs=5e-6)
    assert fit.alpha == pytest.approx(0.0124142, abs=5e-6)


def test_negative_binomial_on_single_records(people):
    """Single records give the alpha and ratio of a general library, and the coefficients of two others."""
    counts, table, nine = people
    fit = rates.fit_negative_binomial(counts, table)
    # Source: statsmodels 0.15.0
    assert fit.ratio(1) == pytest.approx((0.827591, 0.793127, 0.863553), abs=5e-6)
    assert fit.alpha == pytest.approx(1.437800, abs=5e-6)
    full = rates.fit_negative_binomial(counts, nine)
    # Source: R 2.15.1 MASS glm.nb and Stata results in the test suite of statsmodels
    expected = [-0.05794695, -0.26778772, 0.04120608, -0.03813768, 0.26891577, 0.03816374, -0.04413388, 0.01725218,
                0.17796079, 0.66355609]  # fmt: skip
    assert full.coefficients == pytest.approx(expected, abs=1e-7)
    assert full.alpha == pytest.approx(1.292953, abs=5e-6)
    assert full.ratio(1) == pytest.approx((0.765070, 0.731903, 0.799741), abs=5e-6)


def test_counts_without_over_dispersion_have_alpha_zero():
    """Counts less spread than Poisson fall back on Poisson."""
    fit = rates.fit_negative_binomial([10, 10, 11, 10, 9, 10], np.ones((6, 1)))
    assert fit.alpha == 0
    assert np.exp(fit.coefficients[0]) == pytest.approx(10)


def test_two_rates_compared_exactly():
    """Ratio, exact interval and p of two counts over their exposures."""
    # from memory: R help page of poisson.test; p and interval agree with scipy
    found = rates.compare_rates(11, 800, 21, 3011)
    assert (found.ratio, found.low, found.high) == pytest.approx((1.971488, 0.8584264, 4.277266), abs=5e-6)
    assert found.p == pytest.approx(0.07967, abs=5e-6)


def test_two_rates_compared_exactly_on_registry_data():
    """The second worked pair agrees with a general library in ratio, interval and p."""
    found = rates.compare_rates(60, 51477.5, 30, 54308.7)
    # from memory: data of Gu et al. 2008; recomputed with statsmodels
    assert (found.ratio, found.low, found.high) == pytest.approx((2.109998, 1.339736, 3.388366), abs=5e-6)
    assert found.p == pytest.approx(0.000675183, abs=5e-9)
    # Source: statsmodels.stats.rates, exact conditional test
    assert found.p == pytest.approx(poisson_2indep(60, 51477.5, 30, 54308.7, method="exact-cond").pvalue, abs=1e-12)


def test_covariance_by_day_equals_the_library():
    """Hours of one day going together widen the errors as in a general library."""
    rng = np.random.default_rng(5)
    day = np.repeat(np.arange(20), 24)
    design = np.column_stack([np.ones(480), day >= 10, rng.normal(size=480)])
    counts = rng.poisson(np.exp(design @ [3, -0.4, 0.2] + 0.4 * rng.standard_normal(20)[day]))
    fit = rates.fit_poisson(counts, design)
    library = sm.GLM(counts, design, family=sm.families.Poisson()).fit(cov_type="cluster", cov_kwds={"groups": day})
    # Source: statsmodels GLM with cov_type cluster
    assert rates.clustered_covariance(fit, counts, design, day) == pytest.approx(library.cov_params(), rel=1e-6)


def test_no_counts_have_open_ends():
    """None in one group leaves one end open, none in both says nothing."""
    assert rates.compare_rates(0, 10, 5, 10)[:2] == (0, 0)
    assert rates.compare_rates(5, 10, 0, 10).high == np.inf
    assert np.isnan(rates.compare_rates(0, 10, 0, 10).ratio)


@pytest.mark.parametrize(
    ("counts", "design", "exposure", "said"),
    [
        ([1, 2, 3], np.ones((3, 2)), None, "depend on each other"),
        ([0, 0], np.ones((2, 1)), None, "at least one is not 0"),
        ([1, 2], np.ones((2, 1)), [1, 0], "positive exposures"),
        ([1, 2], np.ones((3, 1)), None, "do not fit"),
    ],
)
def test_unfittable_input_is_refused_with_its_reason(counts, design, exposure, said):
    """A model that cannot be fitted is refused in a sentence."""
    with pytest.raises(rates.FitError, match=said):
        rates.fit_poisson(counts, design, exposure)


def series(rng, n_days: int, rho: float, step_at: int):
    """Counts of days whose ln level follows the day before with correlation rho, and the design of a step."""
    wave = rng.standard_normal(n_days)
    for i in range(1, n_days):
        wave[i] = rho * wave[i - 1] + np.sqrt(1 - rho**2) * wave[i]
    day = np.arange(n_days, dtype=float)
    design, _ = rates.series_design(day, step_at, slope=True)
    return rng.poisson(np.exp(7 + 0.4 * wave)).astype(float), design, day


def test_days_far_apart_have_the_interval_of_student():
    """Where no day has neighbours the interval of a ratio is Student's on the variance of over-dispersed counts."""
    counts, design, day = series(np.random.default_rng(18), 30, 0.6, 15)
    fit = rates.fit_quasi_poisson(counts, design)
    library = sm.GLM(counts, design, family=sm.families.Poisson()).fit(scale="X2")
    # Source: statsmodels GLM with scale X2, its standard error times Student's t
    expected = np.exp(library.params[2] + stats.t.ppf(0.975, 26) * library.bse[2] * np.array([0, -1, 1]))
    assert rates.serial_ratio(fit, counts, design, 1000 * day, 2) == pytest.approx(expected, rel=1e-6)


def test_days_that_resemble_their_neighbours_have_the_interval_of_a_general_library(monkeypatch):
    """With the correlation given, the residuals' variance and their likelihood are those of generalised least squares."""
    counts, design, day = series(np.random.default_rng(18), 30, 0.6, 15)
    day[15:] += 9  # a gap
    fit = rates.fit_quasi_poisson(counts, design)
    monkeypatch.setattr(rates, "RHOS", np.array([0.6]))
    root = np.sqrt(fit.fitted)
    alike = 0.6 ** np.abs(np.subtract.outer(day, day))
    # Source: statsmodels GLS for the residuals' variance; the sandwich of a fit that is not reweighted by hand
    library = sm.GLS((counts - fit.fitted) / root, root[:, None] * design, sigma=alike).fit()
    bread = np.linalg.inv(design.T @ (fit.fitted[:, None] * design))
    spread = bread @ (root[:, None] * design).T @ alike @ (root[:, None] * design) @ bread
    error = stats.t.ppf(0.975, 26) * np.sqrt(library.scale * spread[2, 2])
    _, low, high = rates.serial_ratio(fit, counts, design, day, 2)
    assert np.log(high / low) == pytest.approx(2 * error, rel=1e-6)


@pytest.mark.parametrize("n_days", [14, 40])
def test_the_step_of_a_series_is_covered_whether_or_not_days_resemble_their_neighbours(n_days):
    """Over simulated series without a step the interval covers 1 in 93 to 97 % with a correlation of 0.5, never less."""
    rng = np.random.default_rng(5)
    for rho in (0.0, 0.5):
        covered = []
        for _ in range(200):
            counts, design, day = series(rng, n_days, rho, n_days // 2)
            fit = rates.fit_quasi_poisson(counts, design)
            _, low, high = rates.serial_ratio(fit, counts, design, day, 2)
            covered.append(low < 1 < high)
        # Source: two standard errors of 200 series below 93 %
        assert np.mean(covered) > 0.93 - 2 * np.sqrt(0.93 * 0.07 / 200)
