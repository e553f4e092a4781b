"""Why a verdict: the figures behind it in one sentence, and what a reader must know beside it in the next."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from detectors import change as statistics
from flows.change import extremes
from flows.change.measures import BY_NAME
from flows.settings import ChangeSettings, WearSettings

IN_FOLDS_PCT = 1000.0  # rises from which a multiple is plainer than a percentage
MOST_DAYS_WORTH_TELLING = 90
NOTABLE_SHARE_OF_FALL = 0.25  # of the observed fall, from which regression to the mean is worth a sentence


def reason(row: Mapping[str, Any], change: ChangeSettings, wear: WearSettings) -> str:
    """Sentences for one row of `changes`: the verdict with its figures, then what qualifies it."""
    if row["measure"] in extremes.BY_NAME:
        return extremes.rank_reason(row, wear)
    verdict = {
        statistics.TOO_LITTLE: _too_little,
        statistics.FELL: _beyond_chance,
        statistics.ROSE: _beyond_chance,
        statistics.WITHIN: _within_chance,
    }[row["verdict"]]
    notes = (
        _recurrence(row),
        verdict(row, wear),
        _success(row, change),
        _settling(row),
        _false_counts(row, change),
        _regression(row),
        _borrowed(row),
        _partial_clock(row),
    )
    return " ".join(note for note in notes if note)


def _too_little(row: Mapping[str, Any], wear: WearSettings) -> str:
    return (
        f"{row['baseline_days']} valid days before and {row['after_days']} after; at least {wear.min_days_per_period} "
        f"on each side are needed (a valid day has at least {wear.min_analysable_h_per_day:g} analysable hours)."
    )


def _beyond_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    if row["ratio"] is None:
        return f"{_none_before(row)}: more than chance explains{_days_used(row)}."
    fell = row["verdict"] == statistics.FELL
    limit = row["chance_fall_limit_pct"] if fell else row["chance_rise_limit_pct"]
    return (
        f"{_moved(row)}, beyond the {_by(limit)} that chance alone would pass in 1 of 20 such patients without any "
        f"change{_days_used(row)}."
    )


def _within_chance(row: Mapping[str, Any], wear: WearSettings) -> str:
    if row["ratio"] is None:
        return f"{_none_before(row)}: nothing beyond chance{_days_used(row)}."
    fell, limit = row["change_pct"] < 0, row["chance_fall_limit_pct"]
    if fell and limit >= 100:
        reach = "even a total absence could be chance"
    else:
        reach = f"chance alone explains {'falls' if fell else 'rises'} up to "
        reach += _by(limit if fell else row["chance_rise_limit_pct"])
    return f"{_moved(row)}; {reach}{_days_used(row)}."


def _none_before(row: Mapping[str, Any]) -> str:
    return f"{_noun(row)}: none before, {_figure(row['after_value']) if row['after_value'] else 'none'} after"


def _moved(row: Mapping[str, Any]) -> str:
    change_pct = row["change_pct"]
    if row["ratio"] == 0:
        how = "fell to none"
    elif change_pct < 0:
        how = f"fell by {_by(-change_pct)}"
    else:
        how = f"rose {'by ' if change_pct < IN_FOLDS_PCT else ''}{_by(change_pct)}"
    figures = (
        f"ratio {_figure(row['ratio'])}, 95 % interval {_figure(row['ratio_low'])} to {_figure(row['ratio_high'])}"
    )
    return f"{_noun(row)} {how} ({figures})"


def _noun(row: Mapping[str, Any]) -> str:
    noun = BY_NAME[row["measure"]].noun
    return f"Over all days after, {noun}" if row["recurrence_day"] else noun.capitalize()


def _by(pct: float) -> str:
    return f"{pct:.3g} %" if pct < IN_FOLDS_PCT else f"{_figure(1 + pct / 100)}-fold"


def _figure(value: float) -> str:
    """Two or three digits, without an exponent where the number is large."""
    if value >= 1000:
        return f"{float(f'{value:.2g}'):,.0f}"
    if value >= 10:
        return f"{value:.0f}"
    return f"{value:.2f}" if value >= 0.1 else f"{value:.2g}"


def _days_used(row: Mapping[str, Any]) -> str:
    return f"; {row['baseline_days']} days before, {row['after_days']} after"


def _success(row: Mapping[str, Any], change: ChangeSettings) -> str:
    if row["verdict"] != statistics.FELL or row["success_probability_pct"] is None:
        return ""
    probability = row["success_probability_pct"]
    shown = "over 99" if probability > 99 else "under 1" if probability < 1 else f"{probability:.0f}"
    return f"The true fall exceeds {change.success_limit_pct:g} % with a probability of {shown} %."


def _false_counts(row: Mapping[str, Any], change: ChangeSettings) -> str:
    measure = BY_NAME[row["measure"]]
    false = measure.per * measure.error(change.detector_error_share).false_rate
    if row["ratio"] is None or row["verdict"] == statistics.TOO_LITTLE or false == 0:
        return ""
    beside = f"than the detector may count falsely ({_figure(false)} {measure.unit})"
    if row["baseline_value"] <= false:
        return f"The baseline is no more {beside}, so that no fall can be told."
    if row["after_value"] <= false:
        return f"What is left is no more {beside}: the fall may be complete."
    return ""


def _borrowed(row: Mapping[str, Any]) -> str:
    if row["verdict"] == statistics.TOO_LITTLE or row["ratio"] is None:
        return ""
    sentences = {
        "programme": ["The day-to-day variation is borrowed from the programme."],
        "both": ["Part of the day-to-day variation is borrowed from the programme."],
    }.get(row["variance_source"], [])
    if BY_NAME[row["measure"]].drift_is_borrowed:
        sentences = [
            *sentences,
            "How it drifts over weeks is taken from ventricular beats, as nothing else is published.",
        ]
    return " ".join(sentences)


def _partial_clock(row: Mapping[str, Any]) -> str:
    before, after = (round(row[f"{side}_clock_coverage_pct"] * 24 / 100) for side in ("baseline", "after"))
    if min(before, after) == 24 or min(row["baseline_days"], row["after_days"]) == 0:
        return ""
    return (
        f"Part of the day is missing: {before} of the 24 clock hours were seen before, {after} after. The hours are "
        "weighed alike on both sides; what happens in hours never seen is not known."
    )


def _recurrence(row: Mapping[str, Any]) -> str:
    if row["recurrence_day"] is None:
        return ""
    return f"Recurrence: fell beyond chance at first and is back beyond chance since {row['recurrence_day']}."


def _settling(row: Mapping[str, Any]) -> str:
    if row["verdict"] != statistics.WITHIN or row["ratio"] is None:
        return ""
    days = row["days_to_settle"]
    if days is None or days > MOST_DAYS_WORTH_TELLING:
        return "More wear days at the same level would not settle it."
    return f"About {days} more wear day{'s' if days > 1 else ''} after, at the same level, would settle it."


def _regression(row: Mapping[str, Any]) -> str:
    expected, fell_pct = row["expected_regression_pct"], -(row["change_pct"] or 0)
    if expected is None or fell_pct <= 0 or expected < NOTABLE_SHARE_OF_FALL * fell_pct:
        return ""
    return (
        f"If this baseline was chosen for being high, a fall of {expected:.0f} % is expected without any effect "
        "(regression to the mean of the programme)."
    )
