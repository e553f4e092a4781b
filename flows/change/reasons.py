"""Why a verdict: the figures behind it in one sentence, and what a reader must know beside it in the next."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from detectors import change as statistics
from flows.change.extremes import BY_NAME, rank_reason
from flows.change.measures import NOUNS
from flows.settings import WearSettings

FULL_CLOCK_PCT = 100.0
NOTABLE_SHARE_OF_FALL = 0.25  # of the observed fall, from which regression to the mean is worth a sentence


def reason(row: Mapping[str, Any], wear: WearSettings) -> str:
    """Sentences for one row of `changes`: the verdict with its figures, then what qualifies it."""
    if row["measure"] in BY_NAME:
        return rank_reason(row, wear)
    verdict = {
        statistics.TOO_LITTLE: _too_little,
        statistics.FELL: _beyond_chance,
        statistics.ROSE: _beyond_chance,
        statistics.WITHIN: _within_chance,
    }[row["verdict"]]
    notes = (
        _recurrence(row),
        verdict(row, wear),
        _settling(row),
        _regression(row),
        _borrowed(row),
        _partial_clock(row),
    )
    return " ".join(note for note in notes if note)


def _too_little(row: Mapping[str, Any], wear: WearSettings) -> str:
    return (
        f"{row['baseline_days']} valid days before and {row['after_days']} after; at least {wear.min_days_per_period} "
        f"on each side are needed (a valid day has {wear.min_analysable_h_per_day:g} analysable hours)."
    )


def _beyond_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    noun = NOUNS[row["measure"]]
    if row["ratio"] is None:
        return f"No {noun} before, {row['after_value']:.3g} after: more than chance explains."
    fell = row["verdict"] == statistics.FELL
    verb, limit = ("fell", row["chance_fall_limit_pct"]) if fell else ("rose", row["chance_rise_limit_pct"])
    return (
        f"{noun.capitalize()} {verb} by {abs(row['change_pct']):.3g} % ({_interval(row)}), "
        f"more than the {limit:.3g} % that chance explains for this patient{_days_used(row)}."
    )


def _within_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    noun = NOUNS[row["measure"]]
    if row["ratio"] is None:
        after = "none" if row["after_value"] == 0 else f"{row['after_value']:.3g}"
        return f"No {noun} before and {after} after: nothing beyond chance{_days_used(row)}."
    if row["change_pct"] < 0:
        fall = row["chance_fall_limit_pct"]
        reach = (
            "even a total absence could be chance" if fall >= 100 else f"chance alone explains falls up to {fall:.3g} %"
        )
        return f"{noun.capitalize()} fell by {-row['change_pct']:.3g} % ({_interval(row)}); {reach}{_days_used(row)}."
    return (
        f"{noun.capitalize()} rose by {row['change_pct']:.3g} % ({_interval(row)}); chance alone explains rises up to "
        f"{row['chance_rise_limit_pct']:.3g} %{_days_used(row)}."
    )


def _interval(row: Mapping[str, Any]) -> str:
    ratio, low, high = (_digits(row[name]) for name in ("ratio", "ratio_low", "ratio_high"))
    return f"ratio {ratio}, 95 % interval {low} to {high}"


def _digits(ratio: float) -> str:
    return f"{ratio:.2f}" if 0.1 <= ratio < 10 else f"{ratio:.2g}"


def _days_used(row: Mapping[str, Any]) -> str:
    return f"; {row['baseline_days']} days before, {row['after_days']} after"


def _borrowed(row: Mapping[str, Any]) -> str:
    borrowed = {"programme": "The day-to-day variation", "both": "Part of the day-to-day variation"}
    if row["verdict"] == statistics.TOO_LITTLE or row["variance_source"] not in borrowed:
        return ""
    return f"{borrowed[row['variance_source']]} is borrowed from the programme."


def _partial_clock(row: Mapping[str, Any]) -> str:
    before, after = row["baseline_clock_coverage_pct"], row["after_clock_coverage_pct"]
    if min(before, after) >= FULL_CLOCK_PCT or min(row["baseline_days"], row["after_days"]) == 0:
        return ""
    return f"Part of the day is missing: clock hours covered {before:.0f} % before, {after:.0f} % after."


def _recurrence(row: Mapping[str, Any]) -> str:
    if row["recurrence_day"] is None:
        return ""
    return f"Recurrence: fell beyond chance at first and is back beyond chance since {row['recurrence_day']}."


def _settling(row: Mapping[str, Any]) -> str:
    if row["days_to_settle"] is None:
        return ""
    days = row["days_to_settle"]
    return f"About {days} more wear day{'s' if days > 1 else ''} after, at the same level, would settle it."


def _regression(row: Mapping[str, Any]) -> str:
    expected, fell_pct = row["expected_regression_pct"], -(row["change_pct"] or 0)
    if expected is None or fell_pct <= 0 or expected < NOTABLE_SHARE_OF_FALL * fell_pct:
        return ""
    return (
        f"If this baseline was chosen for being high, a fall of {expected:.0f} % is expected without any effect "
        "(regression to the mean of the programme)."
    )
