"""What the detector adds to a change within one patient, derived from its scoring against expert labels.

Source of all figures: expert labels of the MIT-BIH Arrhythmia Database (Moody and Mark 2001). A change compares one
patient with himself: what the detector misses in every period cancels, what it does differently from one period to the
next stays. That was measured on the two halves of each record, which share patch and day, and on leads turned by up to
30 degrees towards the second lead of the record, as if the next patch lay on another spot of skin.
"""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.stats import chi2

import dashboards
from flows.change.measures import (
    FALSE_COUPLETS_PER_H,
    FALSE_RUNS_PER_H,
    FALSE_S_PER_BEAT,
    FALSE_V_PER_BEAT,
    PLACEMENT_SD_LN,
    REPEATABILITY_SD_LN,
)

LITTLE_ECTOPY = 0.01  # share of beats
COUNTS = ("beats", "expert", "found", "both")


def figures() -> dict[str, Any]:
    path = Path(dashboards.__file__).with_name("development_figures.json")
    return json.loads(path.read_text(encoding="utf-8"))


def counted(ectopy: str, *, with_af: bool) -> list[np.ndarray]:
    """Per record the counts of both halves, shape (2, 4): beats, expert, found, both."""
    return [
        np.array([[half[name] for name in COUNTS] for half in record["halves"]], float)
        for record in figures()["halves"][ectopy]
        if with_af or not record["has_af"]
    ]


def differences(pairs: list[np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Difference of ln(found / expert) within pairs of shape (2, 4) with enough ectopy, and its variance by counting."""
    found, by_counting = [], []
    for pair in pairs:
        beats, expert, detected, both = pair.T
        if expert.sum() < LITTLE_ECTOPY * beats.sum() or min(expert.min(), detected.min()) == 0:
            continue
        share_found, share_false = both.sum() / expert.sum(), 1 - both.sum() / detected.sum()
        found.append(float(np.diff(np.log(detected / expert))[0]))
        # Source: variance of ln of a binomial share of the expert's beats, and of Poisson false ones among those found
        by_counting.append(float(((1 - share_found) / (share_found * expert) + share_false / detected).sum()))
    return np.array(found), np.array(by_counting)


def spread_of_sides(difference: np.ndarray, by_counting: np.ndarray) -> float:
    """SD of one side of the differences, counting taken off."""
    # Source: moment estimate of a variance between units, each weighted by its precision (DerSimonian and Laird, Control
    # Clin Trials 1986;7:177, from memory); without weights the seven beats in a half of record 108 decide
    excess, sd_ln = np.square(difference) - by_counting, 0.05
    for _ in range(50):
        sd_ln = np.sqrt(max(np.average(excess, weights=1 / (2 * sd_ln**2 + by_counting)), 0) / 2)
    return float(sd_ln)


def test_what_differs_between_periods_of_one_patient_is_as_measured():
    """The repeatability is the upper 95 % bound of the spread of ln(found / expert) between halves, counting taken off.

    The bound, as most of what a few records show is the counting of their missed and false beats.
    """
    difference, by_counting = differences(counted("V", with_af=True))
    assert len(difference) >= 10
    sd_ln = spread_of_sides(difference, by_counting)
    # Source: upper bound of a variance from so many normal differences around zero, chi-square
    bound = sd_ln * np.sqrt(len(difference) / chi2.ppf(0.05, len(difference)))
    assert pytest.approx(bound, rel=0.35) == REPEATABILITY_SD_LN


def test_what_another_place_of_the_patch_changes_is_as_measured():
    """The spread by placement is that of ln(found / expert) between the lead of a record and the leads turned from it."""
    leads = [np.array([[lead[name] for name in COUNTS] for lead in row["leads"]], float) for row in figures()["turned"]]
    pairs = [table[[0, turn]] for table in leads for turn in range(1, len(table))]
    difference, by_counting = differences(pairs)
    assert len(difference) >= 60
    assert spread_of_sides(difference, by_counting) == pytest.approx(PLACEMENT_SD_LN, rel=0.35)


@pytest.mark.parametrize(("form", "stated"), [("couplets", FALSE_COUPLETS_PER_H), ("runs", FALSE_RUNS_PER_H)])
def test_false_couplets_and_runs_are_as_measured(form, stated):
    """False couplets and runs per hour are the root mean square over records with little ventricular ectopy."""
    halves = {row["record"]: row["halves"] for row in figures()["halves"]["V"] if not row["has_af"]}
    little = {
        record
        for record, pair in halves.items()
        if sum(half["expert"] for half in pair) < LITTLE_ECTOPY * sum(half["beats"] for half in pair)
    }
    quiet = [row[form]["false"] for row in figures()["forms"] if row["record"] in little]
    scored_h = (1805.6 - figures()["options"]["learning_s"]) / 3600  # of each record
    assert len(quiet) >= 8
    of_records = np.sqrt(np.mean(np.square(quiet))) / scored_h
    # Source: root mean square of the Poisson rate that a count of none leaves open, gamma of shape 1/2 (Jeffreys's prior)
    of_none = np.sqrt(0.5**2 + 0.5) / (len(quiet) * scored_h)
    assert stated == pytest.approx(max(of_records, of_none), rel=0.35)


@pytest.mark.parametrize(("ectopy", "stated"), [("V", FALSE_V_PER_BEAT), ("S", FALSE_S_PER_BEAT)])
def test_false_beats_are_as_measured(ectopy, stated):
    """False beats per beat are the root mean square over records in which the expert sees little of that ectopy.

    Where they hold none, the upper 95 % bound of a count of none.
    """
    totals = [halves.sum(axis=0) for halves in counted(ectopy, with_af=False)]
    false_rates = [(found - both) / beats for beats, expert, found, both in totals if expert < LITTLE_ECTOPY * beats]
    assert len(false_rates) >= 8
    # Source: Poisson probability of none, 5 % at a mean of 3.0
    of_none = 3.0 / sum(beats for beats, expert, _, _ in totals if expert < LITTLE_ECTOPY * beats)
    assert stated == pytest.approx(max(np.sqrt(np.mean(np.square(false_rates))), of_none), rel=0.35)
