"""Rate models of counts over exposure: Poisson, quasi-Poisson, negative binomial, and exact comparisons of two rates.

    ln E[count] = ln(exposure) + X beta

Fitted by Newton steps on the score (Fisher scoring), offset ln(exposure). The interrupted time series of
Lopez Bernal, Cummins, Gasparrini, Int J Epidemiol 2017;46:348-355 is one design matrix of it (`series_design`).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq
from scipy.special import betaincinv, digamma, gammaln, ndtri, stdtr, stdtrit, xlogy

Floats = NDArray[np.float64]

MAX_STEPS = 100
TOLERANCE = 1e-11  # change of every coefficient at which a fit has settled
LOG_ALPHA = (-14.0, 6.0)  # where ln alpha is searched; below it counts are Poisson
RHOS = np.arange(0.0, 1.0, 0.05)  # correlations of a day with the day before
TWO_SIDED_95 = float(ndtri(0.975))


class FitError(ValueError):
    """A rate model cannot be fitted; the message says why."""


class RateFit(NamedTuple):
    """Coefficients on the log scale with their covariance, shape (p,) and (p, p)."""

    coefficients: Floats
    covariance: Floats  # dispersion included
    dispersion: float  # variance over mean: 1 Poisson, Pearson chi2 / df quasi-Poisson
    alpha: float  # variance = mean + alpha mean^2; 0 unless negative binomial
    deviance: float
    pearson_chi2: float
    fitted: Floats  # expected counts

    def ratio(self, column: int, error: float | None = None) -> tuple[float, float, float]:
        """Rate ratio of one column, and `error` off on the log scale both ways (by default 95 %, normal theory)."""
        centre = self.coefficients[column]
        off = TWO_SIDED_95 * np.sqrt(self.covariance[column, column]) if error is None else error
        return float(np.exp(centre)), float(np.exp(centre - off)), float(np.exp(centre + off))


def fit_poisson(counts: ArrayLike, design: ArrayLike, exposure: ArrayLike | None = None) -> RateFit:
    """Poisson regression: counts of shape (n,), design (n, p), exposure (n,), all in one unit of time.

    Raises FitError where columns are dependent, exposures not positive, or all counts zero.
    """
    return _fit(*_checked(counts, design, exposure), alpha=0.0)


def fit_quasi_poisson(counts: ArrayLike, design: ArrayLike, exposure: ArrayLike | None = None) -> RateFit:
    """Poisson estimate whose covariance is multiplied by Pearson chi2 over its degrees of freedom."""
    fit = fit_poisson(counts, design, exposure)
    freedom = len(fit.fitted) - len(fit.coefficients)
    if freedom < 1:
        raise FitError(
            f"{len(fit.fitted)} counts for {len(fit.coefficients)} coefficients leave no over-dispersion to see"
        )
    dispersion = fit.pearson_chi2 / freedom
    return fit._replace(covariance=fit.covariance * dispersion, dispersion=dispersion)


def fit_negative_binomial(counts: ArrayLike, design: ArrayLike, exposure: ArrayLike | None = None) -> RateFit:
    """Negative binomial regression (NB2), alpha by maximum likelihood, its uncertainty not in the covariance.

    alpha is the root of its score along the profile over the coefficients, which is found where a joint search by
    gradients may fail; it is 0 when the counts are not over-dispersed.
    """
    arguments = _checked(counts, design, exposure)

    def score(log_alpha: float) -> float:
        return _alpha_score(arguments[0], _fit(*arguments, alpha=np.exp(log_alpha)).fitted, np.exp(log_alpha))

    if score(LOG_ALPHA[0]) <= 0:
        return _fit(*arguments, alpha=0.0)
    return _fit(*arguments, alpha=float(np.exp(brentq(score, *LOG_ALPHA, xtol=1e-12))))


def _alpha_score(counts: Floats, mean: Floats, alpha: float) -> float:
    """Derivative of the log likelihood by ln alpha, the mean held (at its best it need not be followed)."""
    size = 1 / alpha
    by_size = digamma(counts + size) - digamma(size) - np.log1p(alpha * mean) + (mean - counts) / (size + mean)
    return float(-size * by_size.sum())


def clustered_covariance(fit: RateFit, counts: ArrayLike, design: ArrayLike, cluster: ArrayLike) -> Floats:
    """Covariance of a Poisson fit when counts of one cluster (a day) go together (Liang and Zeger 1986), shape (p, p).

    `cluster` holds the cluster of every count, 0-based, shape (n,). With the usual correction for few clusters.
    """
    x, group = np.asarray(design, dtype=float), np.asarray(cluster, dtype=np.int64)
    n_groups = int(group.max()) + 1
    scores = np.zeros((n_groups, x.shape[1]))
    np.add.at(scores, group, x * (np.asarray(counts, dtype=float) - fit.fitted)[:, None])
    bread = np.linalg.inv(x.T @ (fit.fitted[:, None] * x))
    few = n_groups / (n_groups - 1) * (len(x) - 1) / (len(x) - x.shape[1])
    return np.asarray(few * bread @ scores.T @ scores @ bread)


def serial_ratio(
    fit: RateFit, counts: ArrayLike, design: ArrayLike, day: ArrayLike, column: int
) -> tuple[float, float, float]:
    """Rate ratio of one column of a fit with its 95 % interval where days may resemble their neighbours.

    `day` are the ascending day numbers of the counts, shape (n,); further as for the fit. Pearson's residuals of days
    k days apart correlate with rho^k. rho is not known: the interval is Student's, averaged over RHOS by the restricted
    likelihood of rho (Patterson and Thompson, Biometrika 1971;58:545, from memory) and a prior 1 - rho^2 (common
    practice, no source). The variance at each rho is that of the fit as it stands, not reweighted.
    """
    days, root = np.asarray(day), np.sqrt(fit.fitted)
    columns = root[:, None] * np.asarray(design, dtype=float)
    residual = (np.asarray(counts, dtype=float) - fit.fitted) / root
    freedom = len(root) - columns.shape[1]
    log_likelihood, scale = _of_rho(columns, residual, days)
    alike = RHOS[:, None, None] ** np.abs(np.subtract.outer(days, days))
    bread = np.linalg.inv(columns.T @ columns)
    sd = np.sqrt(scale * (bread @ columns.T @ alike @ columns @ bread)[:, column, column])
    weight = (1 - RHOS**2) * np.exp(log_likelihood - log_likelihood.max())

    def beyond(error: float) -> float:
        return float(weight @ (stdtr(freedom, -error / sd) - 0.025))

    widest = stdtrit(freedom, 0.975) * float(sd.max())
    return fit.ratio(column, brentq(beyond, 0.0, widest) if widest > 0 else 0.0)


def _of_rho(columns: Floats, residual: Floats, day: NDArray[np.generic]) -> tuple[Floats, Floats]:
    """Restricted log likelihood and variance of the residuals for each of RHOS, every day told by the one before it."""
    n, p = columns.shape
    table = np.column_stack([columns, residual])
    fade = RHOS[:, None] ** np.diff(day)
    kept = np.sqrt(1 - fade**2)
    news = (table[1:] - fade[:, :, None] * table[:-1]) / kept[:, :, None]
    square = news.transpose(0, 2, 1) @ news + np.outer(table[0], table[0])
    information, cross = square[:, :p, :p], square[:, :p, p:]
    left = square[:, p, p] - (cross * np.linalg.solve(information, cross)).sum(axis=(1, 2))
    left = np.maximum(left, np.finfo(float).tiny)
    determinants = np.linalg.slogdet(information)[1] / 2 + np.log(kept).sum(axis=1)
    return -(n - p) / 2 * np.log(left) - determinants, left / (n - p)


def _checked(counts: ArrayLike, design: ArrayLike, exposure: ArrayLike | None) -> tuple[Floats, Floats, Floats]:
    y, x = np.asarray(counts, dtype=float), np.asarray(design, dtype=float)
    hours = np.ones(len(y)) if exposure is None else np.asarray(exposure, dtype=float)
    if x.ndim != 2 or not len(y) == len(x) == len(hours):
        raise FitError(f"shapes {y.shape}, {x.shape}, {hours.shape} do not fit; expected (n,), (n, p), (n,)")
    if not (hours > 0).all() or (y < 0).any() or y.sum() == 0:
        raise FitError("a rate model needs positive exposures and counts of which at least one is not 0")
    if np.linalg.matrix_rank(x) < x.shape[1]:
        raise FitError(f"the {x.shape[1]} columns of the design depend on each other; leave one out")
    return y, x, hours


def _fit(counts: Floats, design: Floats, exposure: Floats, *, alpha: float) -> RateFit:
    offset = np.log(exposure)
    mean = (counts + counts.mean()) / 2 + 1e-12
    coefficients = np.zeros(design.shape[1])
    for _ in range(MAX_STEPS):
        weight = mean / (1 + alpha * mean)
        target = np.log(mean) - offset + (counts - mean) / mean
        information = design.T @ (weight[:, None] * design)
        before = coefficients
        coefficients = np.asarray(np.linalg.solve(information, design.T @ (weight * target)), dtype=float)
        mean = np.exp(np.clip(design @ coefficients + offset, -700, 700))
        if np.abs(before - coefficients).max() <= TOLERANCE * (1 + np.abs(coefficients).max()):
            break
    else:
        raise FitError(f"no fit after {MAX_STEPS} steps; a column may separate counts of 0 from the others")
    weight = mean / (1 + alpha * mean)
    covariance = np.asarray(np.linalg.inv(design.T @ (weight[:, None] * design)), dtype=float)
    pearson = float(((counts - mean) ** 2 / (mean * (1 + alpha * mean))).sum())
    return RateFit(coefficients, covariance, 1.0, alpha, _deviance(counts, mean, alpha), pearson, mean)


def _deviance(counts: Floats, mean: Floats, alpha: float) -> float:
    fitted = _log_likelihood(counts, mean, alpha)
    return 2 * (_log_likelihood(counts, np.maximum(counts, 1e-300), alpha) - fitted)


def _log_likelihood(counts: Floats, mean: Floats, alpha: float) -> float:
    """Log likelihood without the term that only the counts enter."""
    if alpha == 0:
        return float((xlogy(counts, mean) - mean).sum())
    size = 1 / alpha
    of_count = gammaln(counts + size) - gammaln(size) - (counts + size) * np.log1p(alpha * mean)
    return float((of_count + xlogy(counts, alpha * mean)).sum())


def series_design(
    day: ArrayLike,
    event_day: float,
    *,
    lag_d: float = 0.0,
    slope: bool = False,
    period_d: float = 7.0,
    harmonics: int = 0,
) -> tuple[Floats, tuple[str, ...]]:
    """Columns of an interrupted time series and their names: constant, trend, step, optional slope, harmonics.

    `day` has shape (n,). The step is 1 from `event_day` + `lag_d` on (wash-in or blanking); trend and slope are per
    `period_d`; harmonics are sine and cosine pairs of that period. Choose lag and shape before looking.
    """
    days = np.asarray(day, dtype=float)
    after = days >= event_day + lag_d
    columns = {"constant": np.ones(len(days)), "trend": days / period_d, "step": after.astype(float)}
    if slope:
        columns["slope"] = np.where(after, (days - event_day - lag_d) / period_d, 0.0)
    for k in range(1, harmonics + 1):
        columns[f"sin{k}"] = np.sin(2 * np.pi * k * days / period_d)
        columns[f"cos{k}"] = np.cos(2 * np.pi * k * days / period_d)
    return np.column_stack(list(columns.values())), tuple(columns)


class RateRatio(NamedTuple):
    """Ratio of two rates with exact 95 % interval and two-sided p; no over-dispersion is allowed for."""

    ratio: float
    low: float
    high: float
    p: float


def compare_rates(count_1: int, exposure_1: float, count_2: int, exposure_2: float) -> RateRatio:
    """Rate 1 over rate 2 by the binomial distribution of one count given both (Clopper and Pearson 1934).

    With no count in 2 the upper end is infinite, with none in 1 the lower end 0; none in both gives NaN.
    """
    if exposure_1 <= 0 or exposure_2 <= 0:
        raise FitError(f"exposures are {exposure_1} and {exposure_2}; expected two positive numbers")
    from scipy.stats import binomtest  # loads for half a second, which every run would pay for

    total, scale = count_1 + count_2, exposure_2 / exposure_1
    if total == 0:
        return RateRatio(np.nan, 0.0, np.inf, 1.0)
    low = betaincinv(count_1, count_2 + 1, 0.025) if count_1 else 0.0
    high = betaincinv(count_1 + 1, count_2, 0.975) if count_2 else 1.0
    ratio, low, high = (share / (1 - share) * scale if share < 1 else np.inf for share in (count_1 / total, low, high))
    p = binomtest(count_1, total, exposure_1 / (exposure_1 + exposure_2)).pvalue
    return RateRatio(float(ratio), float(low), float(high), float(p))
