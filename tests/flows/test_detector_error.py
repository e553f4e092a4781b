"""What the detector adds to a change within one patient, derived from its scoring against expert labels.

Source of all figures: expert labels of the MIT-BIH Arrhythmia Database (Moody and Mark 2001), the two halves of each
record scored apart. A change compares one patient with himself: what the detector misses in every period cancels, what
it does differently from one period to the next stays. Halves of one record share the patch and the day, so that a patch
on another spot of skin may differ more; settings can multiply the error.
"""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.stats import chi2

import dashboards
from flows.change.measures import FALSE_S_PER_BEAT, FALSE_V_PER_BEAT, REPEATABILITY_SD_LN

LITTLE_ECTOPY = 0.01  # share of beats


def counted(ectopy: str, *, with_af: bool) -> list[np.ndarray]:
    """Per record the counts of both halves, shape (2, 4): beats, expert, found, both."""
    path = Path(dashboards.__file__).with_name("development_figures.json")
    records: list[dict[str, Any]] = json.loads(path.read_text(encoding="utf-8"))["halves"][ectopy]
    return [
        np.array([[half[name] for name in ("beats", "expert", "found", "both")] for half in record["halves"]], float)
        for record in records
        if with_af or not record["has_af"]
    ]


def test_what_differs_between_periods_of_one_patient_is_as_measured():
    """The repeatability is the upper 95 % bound of the spread of ln(found / expert) between halves, counting taken off.

    The bound, as most of what a few records show is the counting of their missed and false beats.
    """
    differences, by_counting = [], []
    for halves in counted("V", with_af=True):
        beats, expert, found, both = halves.T
        if expert.sum() < LITTLE_ECTOPY * beats.sum() or min(expert.min(), found.min()) == 0:
            continue
        share_found, share_false = both.sum() / expert.sum(), 1 - both.sum() / found.sum()
        differences.append(float(np.diff(np.log(found / expert))[0]))
        # Source: variance of ln of a binomial share of the expert's beats, and of Poisson false ones among those found
        by_counting.append(float(((1 - share_found) / (share_found * expert) + share_false / found).sum()))
    assert len(differences) >= 10
    # Source: moment estimate of a variance between units, each weighted by its precision (DerSimonian and Laird, Control
    # Clin Trials 1986;7:177, from memory); without weights the seven beats in a half of record 108 decide
    excess, sd_ln = np.square(differences) - by_counting, REPEATABILITY_SD_LN
    for _ in range(50):
        sd_ln = np.sqrt(max(np.average(excess, weights=1 / (2 * sd_ln**2 + np.array(by_counting))), 0) / 2)
    # Source: upper bound of a variance from so many normal differences around zero, chi-square
    bound = sd_ln * np.sqrt(len(differences) / chi2.ppf(0.05, len(differences)))
    assert pytest.approx(bound, rel=0.35) == REPEATABILITY_SD_LN


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
