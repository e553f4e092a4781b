"""Wording of numbers and times, names of files, and colours that can be told apart."""

from __future__ import annotations

import re
from datetime import date, datetime
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

import dashboards
from dashboards import addresses, words
from flows.readers.codes import FINDINGS

STYLE = (Path(dashboards.__file__).parent / "assets" / "site.css").read_text("utf-8")


def test_numbers_set_thousands_apart_and_say_when_missing():
    """Thousands are apart by narrow spaces; missing and NaN are a dash, never 0."""
    assert words.number(1234567.891, 1) == "1\u202f234\u202f567.9"
    assert words.number(-3) == "\u22123"
    assert words.number(None) == words.number(float("nan")) == words.MISSING
    assert words.number(0) == "0"


def test_small_ratios_keep_two_figures():
    """Ratios near 0 keep their size, large ones lose no more than decimals."""
    said = {0.0025: "0.0025", 0.034: "0.034", 0.187: "0.19", 1.04: "1.0", 23.12: "23", 234.5: "234", 0.0: "0"}
    assert {value: words.significant(value) for value in said} == said
    assert words.significant(None) == words.significant(float("inf")) == words.MISSING


def test_times_are_local_and_name_their_offset():
    """An instant is shown on the clock of its zone with the offset then in force."""
    # Source: tz database, Atlantic/Azores is at UTC-01:00 in winter
    assert (
        words.clock(datetime.fromisoformat("2026-03-02T12:00:00"), "Atlantic/Azores")
        == "2 Mar 2026, 11:00:00 UTC-01:00"
    )
    assert words.clock(datetime.fromisoformat("2026-03-02T12:00:00"), "UTC") == "2 Mar 2026, 12:00:00 UTC"


@pytest.mark.parametrize(
    ("first", "last", "said"),
    [
        (date(2026, 3, 2), date(2026, 3, 24), "2\N{EN DASH}24 Mar 2026"),
        (date(2026, 3, 2), date(2026, 4, 1), "2 Mar \N{EN DASH} 1 Apr 2026"),
        (date(2025, 12, 30), date(2026, 1, 2), "30 Dec 2025 \N{EN DASH} 2 Jan 2026"),
        (date(2026, 3, 2), date(2026, 3, 2), "2 Mar 2026"),
        (None, None, words.MISSING),
    ],
)
def test_spans_say_a_shared_month_once(first, last, said):
    """A span of days names month and year once where they are the same."""
    assert words.days(first, last) == said


@given(st.lists(st.text(min_size=1, max_size=80), min_size=2, max_size=6, unique=True))
def test_page_names_are_safe_and_distinct(codes):
    """Any codes have file names of plain letters that differ also where case does not count."""
    stems = [addresses.stem(code) for code in codes]
    assert all(re.fullmatch(r"[A-Za-z0-9_-]{1,64}", stem) for stem in stems)
    assert len({stem.lower() for stem in stems}) == len(codes)


def luminance(colour: str) -> float:
    channels = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("scheme", [0, 1], ids=["light", "dark"])
@pytest.mark.parametrize("ground", ["paper", "sheet"])
def test_text_colours_have_contrast_aa(scheme, ground):
    """Every text colour reads against page and card in both schemes."""
    colours = {
        name: pair[scheme]
        for name, *pair in re.findall(r"--([\w-]+): light-dark\((#[0-9a-f]{6}), (#[0-9a-f]{6})\)", STYLE)
    }
    for name in ("ink", "soft", "link", "v", "s", "f", "q", "n", "fell", "rose", "even", "few", "therapy", "rate"):
        # Source: WCAG 2.2, success criterion 1.4.3 (level AA): at least 4.5 to 1
        assert contrast(colours[name], colours[ground]) >= 4.5, name


def test_every_finding_of_a_file_is_told_in_a_sentence():
    """The pages have a sentence for each code that a reader can attach to a recording, and no other."""
    assert set(words.FINDINGS) == set(FINDINGS)


def test_a_share_that_is_not_zero_is_not_shown_as_zero():
    """Shares below the last digit shown are told as such; none at all stays 0."""
    assert (words.share(0.003), words.share(0.01), words.share(0), words.share(None)) == ("< 0.01", "0.01", "0.00", "–")


def test_intervals_that_say_nothing_are_told_in_words():
    """From ten times less to ten times more is told so; what says more keeps its figures."""
    assert words.ratio_interval(0.0025, 23) == words.chance(98, 4253) == "over 10-fold either way"
    assert words.ratio_interval(0.05, None) == "over 10-fold either way"
    assert words.ratio_interval(0.41, 0.53) == "0.41 to 0.53"
    assert words.ratio_interval(None, None) == words.chance(None, 40) == "–"
    assert words.chance(61, 155) == "\N{MINUS SIGN}61 to +155\N{NO-BREAK SPACE}%"
    assert words.chance(80, 1400) == "\N{MINUS SIGN}80 to +15-fold"


def test_days_within_sentences_are_written_out():
    """A day of a reason is told as elsewhere on the pages; what only looks like one stays."""
    assert words.dated("since 2026-03-02; no day: 2026-13-40") == (
        "since 2\N{NO-BREAK SPACE}Mar\N{NO-BREAK SPACE}2026; no day: 2026-13-40"
    )


def test_ages_are_told_in_hours_then_days():
    """Up to two days in hours, from then on in days."""
    assert [words.age(hours) for hours in (0.04, 3.24, 26, 72, None)] == [
        "less than 1 h",
        "3.2 h",
        "26 h",
        "3 days",
        "–",
    ]
