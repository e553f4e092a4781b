"""Does the change statistic keep its promises? Simulated programmes, one line per cell.

    python -m tests.benchmarks.calibration [--patients 1000] [--csv FILE] [--every N] [--batches 30] [--series 1000]

All 432 cells take half an hour of one core; a share of 5 % has a standard error of 0.7 points. With --csv every cell is
written at once, and another run with the same file goes on with the cells that are missing.

Every patient has hours with a circadian shape, salvos, lost blocks (half of the patients lose their nights in the
after period), days that vary with a log SD, and in half of the cells the published drift between the periods.
Printed: coverage of the 95 % interval, false falls under no change, power, and the power of an ideal analyst who
compares the same period means, knows every variance and has lost no hour (normal theory on logarithms); "best" is his
power with the best linear weights of days instead of the means. Cells outside the promise (coverage 93 to 97 % with
three or more days a side, false falls at most 5 %, power at least 90 % of the ideal) are marked where the simulation
shows it with two standard errors; in this many cells a few are marked by chance. Then the probability of success in
tenths, and the coverage of step and slope of an interrupted time series whose days resemble their neighbours.
"""

from __future__ import annotations

import argparse
import csv
import itertools
import sys
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from detectors import change, variability
from detectors.rates import fit_quasi_poisson, serial_ratio, series_design
from detectors.spread import programme_spread
from detectors.standardise import HourCells, over_dispersion, standardised_days
from flows.change.courses import compared, drift_of, seen
from flows.change.measures import MEASURES, MeasuredDays
from flows.settings import ChangeSettings, WearSettings

Floats = NDArray[np.float64]

SETTLING_D = 7
HOUR_SD = 0.4  # of ln count within a day
CIRCADIAN = 1 + 0.6 * np.cos(2 * np.pi * (np.arange(24) - 14) / 24)
SERIES_LOG_LEVEL, SERIES_DAY_SD = 7.0, 0.4  # of daily counts
SUCCESS_RATIO = 0.2  # the default limit of success, a fall of 80 %
NIGHT = np.arange(24) < 8


class Cell(NamedTuple):
    """One simulated programme: what is varied."""

    before_d: int
    after_d: int
    day_sd: float
    per_h: float
    drift: bool
    ratio: float


CELLS = [
    Cell(before, after, sd, per_h, drift, ratio)
    for (before, after), sd, per_h, drift, ratio in itertools.product(
        [(14, 14), (7, 7), (3, 14), (3, 3), (1, 7), (1, 1)], [0.3, 0.6, 1.0], [60.0, 1.0, 0.05], [False, True],
        [1.0, 0.5, 0.2, 0.05],
    )
]  # fmt: skip

RELIABILITY_CELLS = [
    Cell(5, 7, 0.6, 60.0, False, 1.0),
    Cell(3, 3, 0.6, 60.0, False, 1.0),
    Cell(5, 7, 0.6, 1.0, False, 1.0),
]


def days_of(cell: Cell) -> tuple[Floats, NDArray[np.bool_]]:
    """Day numbers of both periods and which lie after."""
    after = np.arange(cell.after_d) + SETTLING_D
    return np.concatenate([np.arange(cell.before_d) - cell.before_d, after]), np.repeat(
        [False, True], [cell.before_d, cell.after_d]
    )


def covariance_of(cell: Cell, days: Floats) -> Floats:
    """Covariance of ln level between days: independent, or with the published variogram scaled to `day_sd`."""
    if not cell.drift:
        return cell.day_sd**2 * np.eye(len(days))
    series = variability.SINGLE_BEATS
    half = variability.variogram(days[:, None] - days[None, :], series)
    week = variability.variogram(np.subtract.outer(np.arange(7.0), np.arange(7.0)), series)
    scale = cell.day_sd**2 / (week.sum() / 42)
    return scale * (half.max() - half)


def simulate(cell: Cell, patients: int, rng: np.random.Generator, ratio: Floats) -> change.Comparison:
    """Run the statistic as the flows do, on `patients` patients with the given true ratios."""
    days, is_after = days_of(cell)
    values, vectors = np.linalg.eigh(covariance_of(cell, days))
    root = vectors * np.sqrt(np.maximum(values, 0))
    log_level = rng.standard_normal((patients, len(days))) @ root.T + np.where(is_after, np.log(ratio)[:, None], 0.0)
    mean = cell.per_h * np.exp(log_level)[:, :, None] * CIRCADIAN
    counts = rng.poisson(mean * np.exp(HOUR_SD * rng.standard_normal(mean.shape) - HOUR_SD**2 / 2))
    worn = rng.random(mean.shape) > 0.05
    worn[::2] &= ~(is_after[:, None] & NIGHT)
    patient, day, hour = np.nonzero(worn)
    row = patient * len(days) + day
    cells = HourCells(row, hour, counts[worn].astype(float), np.ones(len(row)))
    owner = np.repeat(np.arange(patients), len(days))
    period = 2 * owner + np.tile(is_after, patients)
    level, expected = standardised_days(cells, owner)
    dispersion = over_dispersion(cells, expected, period, 2 * patients)
    measured = MeasuredDays(
        owner, np.tile(is_after, patients), np.tile(days, patients), level.counts, level.exposure, dispersion[period]
    )
    settings = ChangeSettings(gap_drift_share=float(cell.drift), detector_error_share=0.0)
    drift = drift_of(MEASURES[0], measured, patients, settings.gap_drift_share)
    of = seen(MEASURES[0], measured, patients, drift)
    usual = programme_spread(of.fit, of.grid, of.typical_sd)
    return compared(MEASURES[0], of, drift, usual, settings, WearSettings(min_days_per_period=1))


def ideal_power(cell: Cell) -> tuple[float, float]:
    """Power of the one-sided 5 % test, variances known: period means, best weights; NaN where logs are not normal."""
    days, is_after = days_of(cell)
    beats = 24 * cell.per_h * np.where(is_after, cell.ratio, 1.0)
    if beats.min() < 5:
        return float("nan"), float("nan")
    hours = np.expm1(HOUR_SD**2) * (CIRCADIAN**2).sum() / CIRCADIAN.sum() ** 2
    covariance = covariance_of(cell, days) + np.diag(1 / beats + hours)
    means = np.where(is_after, 1 / cell.after_d, -1 / cell.before_d)
    inverse = np.linalg.inv(covariance)
    design = np.column_stack([np.ones(len(days)), is_after])
    variances = means @ covariance @ means, np.linalg.inv(design.T @ inverse @ design)[1, 1]
    plain, best = (float(norm.cdf(-np.log(cell.ratio) / np.sqrt(v) - norm.ppf(0.95))) for v in variances)
    return plain, best


def measured(cell: Cell, patients: int, seed: int) -> dict[str, Any]:
    found = simulate(cell, patients, np.random.default_rng(seed), np.full(patients, cell.ratio))
    low, high = np.nan_to_num(found.ratio_low, nan=0.0), np.nan_to_num(found.ratio_high, nan=np.inf)
    plain, best = ideal_power(cell)
    result = {
        "coverage_pct": 100 * float(np.mean((low <= cell.ratio) & (cell.ratio <= high))),
        "fell_pct": 100 * float(np.mean(found.verdict == change.FELL)),
        "ideal_pct": 100 * plain,
        "best_pct": 100 * best,
        "day_sd_found": float(np.median(found.day_sd)),
        "limit_pct": float(np.nanmedian(found.chance_fall_limit_pct)),
    }
    return cell._asdict() | {"patients": patients} | result | {"mark": " ".join(_marks(cell, result, patients))}


def _marks(cell: Cell, result: dict[str, Any], patients: int) -> list[str]:
    def two_errors(pct: float) -> float:
        return float(200 * np.sqrt(pct / 100 * (1 - pct / 100) / patients))

    marks = []
    if min(cell.before_d, cell.after_d) >= 3:
        marks += ["under"] if result["coverage_pct"] < 93 - two_errors(93) else []
        marks += ["over"] if result["coverage_pct"] > 97 + two_errors(97) else []
    if cell.ratio == 1:
        marks += ["false_falls"] if result["fell_pct"] > 5 + two_errors(5) else []
    elif result["fell_pct"] < 0.9 * result["ideal_pct"] - two_errors(result["fell_pct"]):
        marks.append("weak")
    return marks


def done_before(path: Path | None, patients: int) -> dict[Cell, dict[str, Any]]:
    """Rows of an earlier run over as many patients."""
    if path is None or not path.is_file():
        return {}
    with path.open(newline="") as file:
        rows = [{name: _value(text) for name, text in row.items()} for row in csv.DictReader(file)]
    return {Cell(*(row[name] for name in Cell._fields)): row for row in rows if row["patients"] == patients}


def _value(text: str) -> Any:
    if text in ("True", "False"):
        return text == "True"
    try:
        return float(text)
    except ValueError:
        return text


def print_summary(rows: list[dict[str, Any]]) -> None:
    """Print the range of each promise, over cells with three or more days a side where it is one of those."""
    for mark in ("under", "over", "false_falls", "weak"):
        print(f"{mark}: {sum(mark in row['mark'].split() for row in rows)} of {len(rows)} cells")
    for beats, of in (("at 1 and 60 per hour", (1.0, 60.0)), ("at 0.05 per hour", (0.05,))):
        enough = [row for row in rows if min(row["before_d"], row["after_d"]) >= 3 and row["per_h"] in of]
        covered = [row["coverage_pct"] for row in enough]
        false = [row["fell_pct"] for row in enough if row["ratio"] == 1]
        if covered and false:
            print(f"three or more days a side, {beats}: coverage {min(covered):.1f} to {max(covered):.1f} %, ", end="")
            print(f"false falls {np.mean(false):.1f} % on average, {max(false):.1f} % at most")


def reliability(cell: Cell, batches: int, patients: int) -> list[tuple[float, float, int]]:
    """Stated probability of success against its frequency in tenths, true ln ratios uniform; (stated, true, n)."""
    stated, succeeded = [], []
    for seed in range(batches):
        rng = np.random.default_rng(seed)
        ratio = np.exp(rng.uniform(np.log(0.01), np.log(2.0), patients))
        stated.append(simulate(cell, patients, rng, ratio).success_probability_pct)
        succeeded.append(ratio < SUCCESS_RATIO)
    said, true = np.concatenate(stated), np.concatenate(succeeded)
    tenth = np.minimum((said // 10).astype(int), 9)
    tenths = [tenth == k for k in range(10) if (tenth == k).any()]
    return [(float(said[of].mean()), 100 * float(true[of].mean()), int(of.sum())) for of in tenths]


def print_reliability(batches: int, patients: int) -> None:
    """Print the tenths of every cell of RELIABILITY_CELLS; those off by more than the promise are marked."""
    for cell in RELIABILITY_CELLS if batches else ():
        print(f"success probability, {cell.before_d} and {cell.after_d} days, {cell.per_h:g} per hour: stated, true")
        for stated, true, n in reliability(cell, batches, patients):
            mark = "off" if abs(stated - true) > 5 else ""
            print(f"{stated:6.1f} {true:6.1f} {n:7} patients  {mark}", flush=True)


def series_coverage(n_days: int, rho: float, series: int) -> tuple[float, float]:
    """Coverage of the 95 % intervals of step and slope, %, where days k days apart correlate with rho^k."""
    rng = np.random.default_rng(n_days)
    day = np.arange(n_days) - n_days // 2
    day[n_days // 2 :] += SETTLING_D
    root = np.linalg.cholesky(rho ** np.abs(np.subtract.outer(day, day)))
    design, names = series_design(day, 0.0, slope=True)
    covered = np.zeros(2)
    for _ in range(series):
        counts = rng.poisson(np.exp(SERIES_LOG_LEVEL + SERIES_DAY_SD * root @ rng.standard_normal(n_days)))
        fit = fit_quasi_poisson(counts, design)
        ends = (serial_ratio(fit, counts, design, day, names.index(name)) for name in ("step", "slope"))
        covered += [low <= 1 <= high for _, low, high in ends]
    step, slope = 100 * covered / series
    return float(step), float(slope)


def print_series(series: int) -> None:
    """Print the coverage of step and slope by days of both sides and resemblance of neighbouring days."""
    for n_days, rho in itertools.product((8, 14, 28, 60), (0.0, 0.3, 0.5, 0.7)) if series else ():
        step, slope = series_coverage(n_days, rho, series)
        print(
            f"series of {n_days:2} days, correlation {rho:.1f}: step covered {step:5.1f} %, slope {slope:5.1f} %",
            flush=True,
        )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--patients", type=int, default=1000, help="patients per cell")
    parser.add_argument("--csv", type=Path, help="write the table there, cell by cell, and go on from what is there")
    parser.add_argument("--every", type=int, default=1, help="run every n-th cell only")
    parser.add_argument("--batches", type=int, default=30, help="programmes for the probability of success, 0 for none")
    parser.add_argument("--series", type=int, default=1000, help="interrupted time series per line, 0 for none")
    given = parser.parse_args()
    print("before after day_sd  per_h drift ratio | cover%  fell% ideal%  best%  sd limit%  outside the promise")
    rows = []
    before = done_before(given.csv, given.patients)
    for seed, cell in list(enumerate(CELLS))[:: given.every]:
        row = before.get(cell) or measured(cell, given.patients, seed)
        if cell not in before and given.csv:
            _append(given.csv, row)
        rows.append(row)
        print(
            f"{row['before_d']:6g} {row['after_d']:5g} {row['day_sd']:6} {row['per_h']:6} {row['drift']!s:>5} "
            f"{row['ratio']:5} | {row['coverage_pct']:6.1f} {row['fell_pct']:6.1f} {row['ideal_pct']:6.1f} "
            f"{row['best_pct']:6.1f} {row['day_sd_found']:5.2f} {row['limit_pct']:5.1f}  {row['mark']}",
            flush=True,
        )
    print_summary(rows)
    print_reliability(given.batches, given.patients)
    print_series(given.series)
    return 0


def _append(path: Path, row: dict[str, Any]) -> None:
    is_new = not path.is_file()
    with path.open("a", newline="") as file:
        writer = csv.DictWriter(file, row)
        if is_new:
            writer.writeheader()
        writer.writerow(row)


if __name__ == "__main__":
    sys.exit(main())
