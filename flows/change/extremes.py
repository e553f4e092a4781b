"""The longest and the fastest run in `changes`: the largest value of each side, the days compared by rank.

A largest value grows with the days and hours that were looked at, so it has no ratio, interval or chance limit. Asked
is whether the largest values of single days lie lower or higher after, over the clock hours worn on both sides.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors.change import CHANCE_LIMIT, FELL, ROSE, TOO_LITTLE, WITHIN
from detectors.ranks import rank_shift
from detectors.spread import shown_share
from flows.change.courses import drift_of, excess_at
from flows.change.measures import RUNS_PER_24H, measured_days
from flows.settings import ChangeSettings, WearSettings


class Extreme(NamedTuple):
    """A column of hours whose largest value is compared; a day without a run has the longest run 0 and no fastest."""

    name: str
    noun: str
    unit: str
    lower: str
    higher: str


EXTREMES = (
    Extreme("longest_run_beats", "longest run", "beats", "shorter", "longer"),
    Extreme("fastest_run_bpm", "fastest run", "/min", "slower", "faster"),
)
BY_NAME = {extreme.name: extreme for extreme in EXTREMES}


def compared_by_rank(
    extreme: Extreme, cells: pl.DataFrame, n_events: int, excess: NDArray[np.float64], wear: WearSettings
) -> pl.DataFrame:
    """Columns of `changes`, one row per event in their order, and beside them the figures that the reason tells.

    `cells` are the hours of valid days as for `measures.measured_days`, `excess` as from `excess_of_runs`.
    """
    before, after = (pl.col(extreme.name).filter(pl.col("side") == side) for side in (0, 1))
    largest = cells.group_by("event").agg(baseline_value=before.max(), after_value=after.max())
    on_both = cells.filter(pl.col("side").n_unique().over("event", "clock_hour") == 2)
    days = on_both.group_by("event", "side", "day").agg(pl.col(extreme.name).max()).sort("day")
    of_days = days.group_by("event").agg(
        before=before.drop_nulls(),
        after=after.drop_nulls(),
        shared_days=pl.min_horizontal((pl.col("side") == 0).sum(), (pl.col("side") == 1).sum()),
    )
    events = pl.DataFrame({"event": np.arange(n_events)}, schema={"event": cells.schema["event"]})
    table = events.join(largest, on="event", how="left").join(of_days, on="event", how="left").sort("event")
    return table.select(
        "baseline_value",
        "after_value",
        measure=pl.lit(extreme.name),
        ranked_before=pl.col("before").list.len(),
        ranked_after=pl.col("after").list.len(),
        **_judged(table, excess, wear.min_days_per_period),
    )


def _judged(table: pl.DataFrame, excess: NDArray[np.float64], min_days: int) -> dict[str, pl.Series]:
    sides = zip(table["before"].to_list(), table["after"].to_list(), excess, strict=True)
    shifts = [rank_shift(np.array(before or ()), np.array(after or ()), more) for before, after, more in sides]
    lower, higher = (np.array([shift[i] for shift in shifts]) for i in (0, 1))
    is_short = table["shared_days"].fill_null(0).to_numpy() < max(min_days, 1)
    verdict = np.select([is_short, lower < CHANCE_LIMIT, higher < CHANCE_LIMIT], [TOO_LITTLE, FELL, ROSE], WITHIN)
    return {
        "verdict": pl.Series(verdict, dtype=pl.String),
        "rank_chance_pct": pl.Series(100 * np.minimum(lower, higher)),
    }


def excess_of_runs(cells: pl.DataFrame, n_events: int, change: ChangeSettings) -> NDArray[np.float64]:
    """What the time between the sides adds, as a multiple of all variance between days, for values taken from runs.

    As for the number of runs, whose level drifts; a day's own chance of having few or many does not.
    """
    days = measured_days(RUNS_PER_24H, cells, n_events)
    runs = np.bincount(days.event, days.counts / days.dispersion, n_events)
    per_day = runs / np.maximum(np.bincount(days.event, minlength=n_events), 1)
    share = np.sqrt(shown_share(per_day, RUNS_PER_24H.day_sd))
    drift = drift_of(RUNS_PER_24H, days, n_events, change.gap_drift_share)
    return np.asarray(excess_at(RUNS_PER_24H, drift, RUNS_PER_24H.day_sd) * share)


def rank_reason(row: Mapping[str, Any], wear: WearSettings) -> str:
    """Sentences for a row of one of EXTREMES: the values, how the days compare, and why there is no ratio."""
    extreme = BY_NAME[row["measure"]]
    before, after = (_shown(row[side], extreme) for side in ("baseline_value", "after_value"))
    values = f"{extreme.noun.capitalize()}: {before} before, {after} after."
    if row["verdict"] == TOO_LITTLE:
        return (
            f"{values} {row['baseline_days']} valid days before and {row['after_days']} after; at least "
            f"{wear.min_days_per_period} on each side, over the same clock hours, are needed."
        )
    if not row["baseline_value"] and not row["after_value"]:
        return f"{values} There is nothing to compare."
    return f"{values} {_comparison(row, extreme)} A largest value grows with the wear, so no ratio is given."


def _comparison(row: Mapping[str, Any], extreme: Extreme) -> str:
    before, after = row["ranked_before"], row["ranked_after"]
    if min(before, after) == 0:
        return f"Days with runs are {before} before and {after} after, so that they cannot be compared."
    probability = row["rank_chance_pct"]
    chance = f"{probability:.2g} %" if probability < 10 else f"{probability:.0f} %"
    days = f"{before} days before and {after} after, ordered by theirs over the same clock hours"
    if row["verdict"] == WITHIN:
        return f"Chance explains how the days differ: {days}, would lie so in {chance} of cases without any change."
    shift = extreme.lower if row["verdict"] == FELL else extreme.higher
    return (
        f"That of single days is {shift} beyond chance: {days}, would lie so in {chance} of cases without any change."
    )


def _shown(value: float | None, extreme: Extreme) -> str:
    return f"{value:.0f} {extreme.unit}" if value else "none"
