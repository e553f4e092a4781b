"""What is measured on the days of a period, and how hours become comparable days."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors.change import DetectorError
from detectors.standardise import HourCells, over_dispersion, standardised_days
from detectors.variability import REPETITIVE_FORMS, SINGLE_BEATS, SpontaneousSeries

ECTOPY_DAY_SD = 0.6  # of ln level; the within-week spread of the 1988 series (variability.SINGLE_BEATS)
RATE_DAY_SD = 0.06  # common practice, no source: a mean heart rate varies by some 6 % from day to day

# What the detector does differently in two periods of one patient. Measured on the development records; derived from
# dashboards/development_figures.json in tests/flows/test_detector_error.py.
REPEATABILITY_SD_LN = 0.04  # of ln(found / true ventricular beats) between halves, counting taken off; upper 95 % bound
PLACEMENT_SD_LN = 0.07  # of the same between a lead and leads turned from it by up to 30 degrees: another patch
# False beats per beat: root mean square over records with little of that ectopy, or the upper bound where none was seen.
FALSE_V_PER_BEAT, FALSE_S_PER_BEAT = 0.0002, 0.0021
# None was seen in 3.3 hours of such records: the root mean square of what that leaves open.
FALSE_COUPLETS_PER_H, FALSE_RUNS_PER_H = 0.26, 0.26
BEATS_PER_H = 4200  # 70 beats a minute, to state false beats by the hour


@dataclass(frozen=True)
class Measure:
    """What is compared: a count over an exposure, in a unit, with the published drift that applies to it."""

    name: str
    count: pl.Expr
    exposure: pl.Expr
    per: float  # factor from counts per unit of exposure to the published unit
    day_sd: float
    drift: SpontaneousSeries | None
    noun: str
    unit: str
    beats_each: int = 1  # ectopic beats that must be found for one to count; 0 where the detector adds no error
    false_rate: float = 0.0  # false counts per unit of exposure
    drift_is_borrowed: bool = False  # published for other beats

    def error(self, share: float) -> DetectorError:
        """What the detector adds to a comparison; `share` of what was measured.

        Runs fail with each of their beats, so that their error is the larger. The two periods are taken to be worn on
        two patches. The false rate of bigeminy, of which no record without any held some, is taken as 0.
        """
        sd_ln = math.hypot(REPEATABILITY_SD_LN, PLACEMENT_SD_LN)
        return DetectorError(share * sd_ln * self.beats_each, share * self.false_rate)


_HOURS, _MINUTES = pl.col("analysable_s") / 3600, pl.col("analysable_s") / 60
_V, _S, _BEATS = pl.col("v_beats"), pl.col("s_beats"), pl.col("all_beats")
HEART_RATE = Measure(
    "mean_rate_bpm",
    pl.col("mean_rate_bpm") * _MINUTES,
    _MINUTES,
    1,
    RATE_DAY_SD,
    None,
    "mean heart rate",
    "/min",
    beats_each=0,
)
V_BURDEN = Measure(
    "v_burden_pct", _V, _BEATS, 100, ECTOPY_DAY_SD, SINGLE_BEATS, "ventricular burden", "%", false_rate=FALSE_V_PER_BEAT
)
V_PER_H = Measure(
    "v_per_h", _V, _HOURS, 1, ECTOPY_DAY_SD, SINGLE_BEATS, "ventricular beats per hour", "per hour",
    false_rate=FALSE_V_PER_BEAT * BEATS_PER_H,
)  # fmt: skip
RUNS_PER_24H = Measure(
    "runs_per_24h",
    pl.col("runs"),
    _HOURS,
    24,
    ECTOPY_DAY_SD,
    REPETITIVE_FORMS,
    "runs per 24 h",
    "per 24 h",
    beats_each=3,
    false_rate=FALSE_RUNS_PER_H,
)
MEASURES = (
    V_BURDEN,
    V_PER_H,
    # No series is published for supraventricular beats; the ventricular one is borrowed.
    Measure(
        "s_burden_pct", _S, _BEATS, 100, ECTOPY_DAY_SD, SINGLE_BEATS, "supraventricular burden", "%",
        false_rate=FALSE_S_PER_BEAT, drift_is_borrowed=True,
    ),
    HEART_RATE,
    Measure(
        "couplets_per_24h", pl.col("couplets"), _HOURS, 24, ECTOPY_DAY_SD, REPETITIVE_FORMS, "couplets per 24 h", "per 24 h",
        beats_each=2, false_rate=FALSE_COUPLETS_PER_H,
    ),
    Measure(
        "bigeminy_pct", pl.col("bigeminy_s"), pl.col("analysable_s"), 100, ECTOPY_DAY_SD, REPETITIVE_FORMS, "bigeminy", "%",
        beats_each=3,
    ),
    RUNS_PER_24H,
)  # fmt: skip

ECTOPY = tuple(measure.name for measure in MEASURES if measure is not HEART_RATE)
BY_NAME = {measure.name: measure for measure in MEASURES}


class MeasuredDays(NamedTuple):
    """Valid days of both periods of every event, ordered by event, side and day; arrays of shape (n_days,)."""

    event: NDArray[np.int64]
    is_after: NDArray[np.bool_]
    local_day: NDArray[np.int64]  # days since 1970-01-01
    counts: NDArray[np.float64]
    exposure: NDArray[np.float64]  # standardised over clock hours
    dispersion: NDArray[np.float64]  # variance over mean of the counts

    def where(self, chosen: NDArray[np.bool_]) -> MeasuredDays:
        return MeasuredDays._make(column[chosen] for column in self)


def measured_days(measure: Measure, cells: pl.DataFrame, n_events: int) -> MeasuredDays:
    """Days of one measure from `cells`: event, side (0 baseline, 1 after), day (row), local_day, clock_hour, counts.

    Hours and days without exposure are left out.
    """
    seen = cells.select(
        "event", "side", "day", "local_day", "clock_hour", count=measure.count, exposure=measure.exposure
    )
    seen = seen.drop_nulls().filter(pl.col("exposure") > 0)
    days = seen.group_by("day", maintain_order=True).agg(pl.col("event", "side", "local_day").first())
    row = seen["day"].rle_id().to_numpy().astype(np.int64)
    hours = HourCells(row, *(seen[name].to_numpy() for name in ("clock_hour", "count", "exposure")))
    event = days["event"].to_numpy().astype(np.int64)
    is_after = days["side"].to_numpy() == 1
    level, expected = standardised_days(hours, event)
    period = 2 * event + is_after
    dispersion = over_dispersion(hours, expected, period, 2 * n_events)[period]
    day = days["local_day"].to_physical().to_numpy().astype(np.int64)
    return MeasuredDays(event, is_after, day, level.counts, level.exposure, dispersion)
