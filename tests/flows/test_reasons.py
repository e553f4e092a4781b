"""What a row of changes says in words to a physician who reads nothing else."""

from datetime import date
from typing import Any

import pytest

from flows.change.reasons import reason
from flows.settings import ChangeSettings, WearSettings

ROW: dict[str, Any] = {
    "measure": "v_burden_pct", "verdict": "within_chance", "baseline_days": 7, "after_days": 6, "baseline_value": 12.0,
    "after_value": 9.0, "ratio": 0.75, "ratio_low": 0.3, "ratio_high": 1.9, "change_pct": -25.0,
    "chance_fall_limit_pct": 61.3, "chance_rise_limit_pct": 158.0, "success_probability_pct": 2.0, "days_to_settle": None,
    "expected_regression_pct": None, "recurrence_day": None, "variance_source": "patient",
    "baseline_clock_coverage_pct": 100.0, "after_clock_coverage_pct": 100.0,
}  # fmt: skip


def said(**changed: Any) -> str:
    return reason(ROW | changed, ChangeSettings(), WearSettings())


def test_a_fall_within_chance_tells_its_figures_and_what_would_settle_it():
    """The fall, its interval, what chance explains, the days, and that more wear would not help, in this order."""
    assert said() == (
        "Ventricular burden fell by 25 % (ratio 0.75, 95 % interval 0.30 to 1.90); chance alone explains falls up to "
        "61.3 %; 7 days before, 6 after. More wear days at the same level would not settle it."
    )
    assert "About 3 more wear days after, at the same level, would settle it." in said(days_to_settle=3)
    assert "would not settle it" in said(days_to_settle=4000)


def test_a_fall_beyond_chance_tells_how_often_chance_passes_the_limit_and_how_likely_success_is():
    """One-sidedness is told as 1 of 20, beside the probability that the fall exceeds the programme's limit."""
    told = said(verdict="fell_beyond_chance", ratio=0.15, change_pct=-85.0, success_probability_pct=71.1)
    assert "beyond the 61.3 % that chance alone would pass in 1 of 20 such patients without any change" in told
    assert "The true fall exceeds 80 % with a probability of 71 %." in told
    assert "probability of over 99 %" in said(verdict="fell_beyond_chance", success_probability_pct=99.99)


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"ratio": 0.0, "change_pct": -100.0, "after_value": 0.0}, "fell to none (ratio 0, 95 % interval"),
        ({"ratio": 55.4, "change_pct": 5440.0, "chance_rise_limit_pct": 83_100.0}, "rose 55-fold"),
        ({"ratio": 55.4, "change_pct": 5440.0, "chance_rise_limit_pct": 83_100.0}, "rises up to 832-fold"),
        ({"ratio_high": 18_732.0}, "to 19,000)"),
        ({"chance_fall_limit_pct": 100.0}, "even a total absence could be chance"),
        ({"ratio": None, "baseline_value": 0.0, "after_value": 0.0}, "Ventricular burden: none before, none after: nothing"),
        ({"baseline_value": 0.015, "after_value": 0.01}, "so that no fall can be told"),
        ({"after_value": 0.015}, "the fall may be complete"),
        ({"expected_regression_pct": 20.0}, "a fall of 20 % is expected without any effect (regression to the mean"),
        ({"variance_source": "both"}, "Part of the day-to-day variation is borrowed from the programme."),
        ({"measure": "s_burden_pct"}, "taken from ventricular beats, as nothing else is published"),
        ({"after_clock_coverage_pct": 62.5}, "24 of the 24 clock hours were seen before, 15 after"),
        ({"recurrence_day": date(2026, 3, 25)}, "back beyond chance since 2026-03-25. Over all days after, ventricular burden"),
    ],
)  # fmt: skip
def test_what_a_reader_must_know_is_said(changed, words):
    """Absence, many-fold rises, false beats, borrowed variation, missing hours and returns each have their words."""
    told = said(**changed)
    assert words in told
    assert "e+" not in told


def test_too_little_wear_says_what_there_is_and_what_is_needed():
    """A row without a verdict names the days of both sides, the days needed and what makes a day valid."""
    told = said(verdict="too_little_wear", ratio=None, baseline_value=None, after_value=None, after_days=1)
    assert told == (
        "7 valid days before and 1 after; at least 2 on each side are needed (a valid day has at least 10 analysable hours)."
    )
