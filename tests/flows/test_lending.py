"""Rows of changes taken over from the standing edition: the same as made anew, and what makes them be made anew."""

from datetime import date, timedelta

import numpy as np
import polars as pl
import pytest

from detectors.spread import UsualSpread
from flows.change import trends
from flows.change.lending import Kept, is_same, lent
from flows.change.visits import visit_changes, visits
from flows.settings import ChangeSettings, TrialSettings, WearSettings

EVENT = date(2026, 3, 20)
PERIODS = {"baseline": (-28, -1), "settling": (0, 6), "after": (7, 96)}


def hours_of(patient: int, seed: int) -> pl.DataFrame:
    """Some days of a patient before and after EVENT; patients differ in level, ectopy of all kinds, days and hours."""
    rng = np.random.default_rng([patient, seed])
    days = [-1 - i for i in range(1 + patient % 6)] + [7 + i for i in range(2 + patient % 5)]
    shape = (len(days), 20)
    v_beats = rng.poisson(np.exp(rng.normal(patient % 9 - 1, 0.4, (len(days), 1)) * np.ones(shape)))
    runs = rng.poisson(v_beats / 50)
    day, hour = np.indices(shape)
    frame = pl.DataFrame({
        "patient_code": f"P{patient:02}", "local_day": [EVENT + timedelta(days[d]) for d in day.ravel()],
        "clock_hour": hour.ravel(), "analysable_s": rng.uniform(2000, 3600, shape).ravel(), "v_beats": v_beats.ravel(),
        "s_beats": rng.poisson(3, day.size), "all_beats": 4200, "mean_rate_bpm": rng.normal(70, 5, day.size),
        "couplets": rng.poisson(v_beats / 20).ravel(), "runs": runs.ravel(),
        "longest_run_beats": np.where(runs, 3 + runs, 0).ravel(), "bigeminy_s": rng.exponential(v_beats).ravel(),
        "fastest_run_bpm": rng.normal(140, 15, day.size),
    })  # fmt: skip
    return frame.with_columns(fastest_run_bpm=pl.when(pl.col("runs") > 0).then("fastest_run_bpm"))


def programme(seeds: dict[int, int]) -> trends.Inputs:
    """Patients by number with the seed of their hours, one ablation each."""
    hours = pl.concat([hours_of(patient, seed) for patient, seed in seeds.items()])
    by_day = hours.group_by("patient_code", "local_day")
    days = by_day.agg(
        pl.col("v_beats", "s_beats", "all_beats").sum(),
        analysable_h=pl.col("analysable_s").sum() / 3600,
        is_valid_day=pl.lit(True),
    )
    events = hours.select("patient_code").unique().sort("patient_code").with_columns(
        therapy_id="patient_code", therapy_kind=pl.lit("ablation"), therapy_day=pl.lit(EVENT)
    )  # fmt: skip
    keys = events.select("patient_code", "therapy_id")
    periods = [
        keys.with_columns(
            period=pl.lit(name), first_day=pl.lit(EVENT + timedelta(a)), last_day=pl.lit(EVENT + timedelta(b))
        )
        for name, (a, b) in PERIODS.items()
    ]
    return trends.Inputs(hours, days, pl.concat(periods), events)


def made(inputs: trends.Inputs, kept: Kept | None = None) -> trends.Tables:
    settings = ChangeSettings(), WearSettings()
    return trends.tables(inputs, *settings, kept) if kept else trends.tables(inputs, *settings)


def keep(standing: trends.Tables, patients: list[str]) -> Kept:
    rows = {
        name: standing.published[name].filter(pl.col("patient_code").is_in(patients)) for name in trends.PER_PATIENT
    }
    return Kept(patients, standing.evidence, rows)


BEFORE = dict.fromkeys(range(24), 1)


@pytest.mark.parametrize("seed", range(4))
def test_rows_taken_over_are_those_made_anew(seed):
    """With new days of one patient, every table is the same to the last bit whether or not others' rows are taken over."""
    now = BEFORE | {3: 10 + seed}
    kept = keep(made(programme(BEFORE)), [f"P{i:02}" for i in BEFORE if i != 3])
    anew, over = made(programme(now)), made(programme(now), kept)
    for name, table in anew.published.items():
        assert over.published[name].equals(table), name
    assert over.evidence.sort(pl.exclude("fit")).equals(anew.evidence.sort(pl.exclude("fit")))


def test_a_patient_who_left_is_in_no_table():
    """Rows of a patient who is in the programme no more are not taken over, and what he lent is gone."""
    now = {patient: 1 for patient in BEFORE if patient != 5}
    kept = keep(made(programme(BEFORE)), [f"P{i:02}" for i in now])
    over, anew = made(programme(now), kept), made(programme(now))
    assert over.published["changes"].equals(anew.published["changes"])


def test_only_new_patients_are_looked_at_while_the_programme_lends_the_same(monkeypatch):
    """One patient's new days leave the hours of the others unread, unless what is lent moves."""
    looked_at: list[int] = []
    look = trends._look
    monkeypatch.setattr(
        trends, "_look", lambda inputs, *rest: looked_at.append(inputs.therapies.height) or look(inputs, *rest)
    )
    standing = made(programme(BEFORE))
    everyone = [f"P{i:02}" for i in BEFORE]
    made(programme(BEFORE), keep(standing, everyone[1:]))
    other = standing._replace(evidence=standing.evidence.with_columns(log_level=pl.col("log_level") + 1))
    made(programme(BEFORE), keep(other, everyone[1:]))
    assert looked_at == [24, 1, 1, 24]


def test_what_is_lent_is_rounded():
    """What the programme lends is a multiple of 0.05, so that it stays while a few of many patients have new days."""
    standing = made(programme(BEFORE)).evidence
    now = made(programme(BEFORE | {3: 11})).evidence
    of_both = lent(standing), lent(now)
    assert not standing.equals(now)
    assert is_same(of_both[0], of_both[0])
    spread = of_both[0]["v_burden_pct"].spread
    assert isinstance(spread, UsualSpread)
    assert [value / 0.05 for value in (spread.log_median - np.log(0.6), spread.sd)] == pytest.approx(
        [round(value / 0.05) for value in (spread.log_median - np.log(0.6), spread.sd)]
    )


def test_visits_taken_over_are_those_made_anew():
    """With new days of one patient, comparisons of visits are the same whether or not the others' are taken over."""
    trial, before, now = TrialSettings(5.0, 1), programme(BEFORE), programme(BEFORE | {3: 12})
    codes = before.therapies["patient_code"].to_list()
    days = [EVENT - timedelta(3), EVENT + timedelta(9)]
    planned = pl.DataFrame(
        {"patient_code": codes * 2, "visit": ["first"] * 24 + ["second"] * 24, "target_day": [day for day in days for _ in codes],
         "days_before": 5, "days_after": 5, "arm": "A"}
    )  # fmt: skip

    def compared(inputs, *kept):
        table = visits(planned, inputs.wear_days, trial)
        return visit_changes(table, inputs.local_hours, inputs.wear_days, ChangeSettings(), trial, *kept)

    _, standing = compared(before)
    others = [code for code in codes if code != "P03"]
    rows = {"changes": standing.published["changes"].filter(pl.col("patient_code").is_in(others))}
    anew, over = compared(now), compared(now, Kept(others, standing.evidence, rows))
    assert over[0].sort("patient_code", "measure").equals(anew[0].sort("patient_code", "measure"))
    assert anew[0]["ratio"].is_not_null().sum() > 20
