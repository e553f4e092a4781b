"""Visits of a trial: windows, protocol, masking, and a worked model of the arms on the published table."""

from datetime import date, timedelta

import numpy as np
import polars as pl
import pytest
import statsmodels.api as sm

from flows.change.visits import responders, unchanged, visit_changes, visits
from flows.register import RegisterError, load
from flows.settings import ChangeSettings, TrialSettings
from warehouse.parts import empty_frame
from warehouse.schema import PUBLISHED

START = date(2026, 4, 1)


def planned(*rows: tuple[str, str, str | None, int, int]) -> pl.DataFrame:
    """Planned visits from patient, name, arm, target (days from START) and days of the window to both sides."""
    names = ["patient_code", "visit", "arm", "target_day", "days_before"]
    columns = [list(column) for column in zip(*rows, strict=True)]
    columns[3] = [START + timedelta(day) for day in columns[3]]
    frame = pl.DataFrame(dict(zip(names, columns, strict=True)), schema_overrides={"arm": pl.String})
    return frame.with_columns(days_after="days_before")


def worn(patient: str, days: list[int], *, analysable_h: float = 22.0, v_beats: int = 2200) -> pl.DataFrame:
    return pl.DataFrame(
        {"patient_code": patient, "local_day": [START + timedelta(day) for day in days], "analysable_h": analysable_h,
         "v_beats": v_beats, "s_beats": 10, "all_beats": 88_000}
    )  # fmt: skip


def test_a_day_belongs_to_the_nearest_visit_and_at_equal_distance_to_the_later():
    """Windows that touch are split in the middle, the middle day goes to the later visit."""
    plan = planned(("P1", "V1", None, 0, 7), ("P1", "V2", None, 10, 7))
    table = visits(plan, worn("P1", list(range(-9, 20))), TrialSettings())
    first, second = table.rows(named=True)
    # common practice, no source
    assert (first["first_day"], first["last_day"]) == (START - timedelta(7), START + timedelta(4))
    assert (second["first_day"], second["last_day"]) == (START + timedelta(5), START + timedelta(17))
    assert (first["wear_days"], second["wear_days"]) == (12, 13)
    assert tuple(table.columns) == PUBLISHED["visits"].columns


def test_a_visit_that_fails_the_protocol_says_why():
    """Days with too few analysable hours do not count, in days as in beats; a visit without wear keeps its row."""
    days = pl.concat([worn("P1", [0, 1]), worn("P1", [2, 3], analysable_h=9.0, v_beats=9000)])
    table = visits(planned(("P1", "V1", None, 0, 5), ("P1", "V2", None, 30, 5)), days, TrialSettings())
    first, missing = table.rows(named=True)
    assert (first["valid_days"], first["meets_protocol"], first["v_beats"]) == (2, False, 4400)
    assert first["v_burden_pct"] == pytest.approx(2.5)
    assert "2 of 4 wear days count" in first["reason"] and "fails" in first["reason"]
    assert (missing["wear_days"], missing["v_burden_pct"], missing["v_beats"]) == (0, None, None)


def test_arms_stay_masked_until_they_are_unmasked():
    """The arm is published only when the settings give a reason."""
    plan = planned(("P1", "V1", "active", 0, 5), ("P2", "V1", None, 0, 5))
    assert visits(plan, worn("P1", [0]), TrialSettings())["arm"].to_list() == ["masked", None]
    assert visits(plan, worn("P1", [0]), TrialSettings(unmask_reason="database locked"))["arm"].to_list() == [
        "active",
        None,
    ]


def test_no_trial_gives_an_empty_table():
    """A programme without planned visits has an empty table with the published columns."""
    table = visits(planned(("P1", "V1", None, 0, 5)).clear(), worn("P1", [0]), TrialSettings())
    assert (table.height, tuple(table.columns)) == (0, PUBLISHED["visits"].columns)
    hours = empty_frame(PUBLISHED["local_hours"])
    compared, _ = visit_changes(table, hours, worn("P1", [0]), ChangeSettings(), TrialSettings())
    assert (compared.height, responders(compared, 80.0).height) == (0, 0)


def test_visits_are_compared_with_the_first_and_responders_counted():
    """A visit's fall against the first visit has ratio, verdict and reason; responders are counted by visit and arm."""
    plan = planned(
        *[(f"P{i}", name, "B", day, 4) for i in range(3) for name, day in (("V1", 0), ("V2", 20), ("V3", 40))]
    )
    rng = np.random.default_rng(3)
    level = {0: 300.0, 20: 20.0, 40: 280.0}
    hours = pl.concat([
        pl.DataFrame({
            "patient_code": f"P{i}", "local_day": START + timedelta(target + day), "clock_hour": list(range(24)),
            "analysable_s": 3600.0, "v_beats": rng.poisson(per_h * np.exp(0.2 * rng.standard_normal()), 24),
            "s_beats": 0, "all_beats": 4200, "mean_rate_bpm": 70.0, "couplets": 0, "runs": 0, "bigeminy_s": 0.0,
            "longest_run_beats": 0, "fastest_run_bpm": None,
        }, schema_overrides={"fastest_run_bpm": pl.Float32})
        for i in range(3) for target, per_h in level.items() for day in range(4)
    ])  # fmt: skip
    days = hours.group_by("patient_code", "local_day").agg(
        pl.lit(24.0).alias("analysable_h"), pl.col("v_beats", "s_beats", "all_beats").sum()
    )
    trial = TrialSettings()
    table, _ = visit_changes(visits(plan, days, trial), hours, days, ChangeSettings(), trial)
    burden = table.filter(pl.col("measure") == "v_burden_pct").sort("patient_code", "visit")
    assert burden["visit"].to_list() == ["V2", "V3"] * 3
    assert burden["verdict"].to_list() == ["fell_beyond_chance", "within_chance"] * 3
    assert tuple(table.columns) == PUBLISHED["visit_changes"].columns
    counted = responders(table, 80.0).filter((pl.col("measure") == "v_burden_pct") & (pl.col("limit_pct") == 80))
    assert counted.select("visit", "arm", "patients", "responders").rows() == [
        ("V2", "masked", 3, 3),
        ("V3", "masked", 3, 0),
    ]


def registered(folder, visits_csv: str, arms_csv: str | None = None):
    register = folder / "register"
    register.mkdir()
    (register / "patients.csv").write_text("patient_code\nP-1\nP-2\n")
    (register / "wears.csv").write_text("device_serial,patient_code,from_local\n")
    (register / "visits.csv").write_text(visits_csv)
    if arms_csv:
        (register / "arms.csv").write_text(arms_csv)
    return load(folder, "UTC").visits


def test_visits_and_arms_are_read_from_the_register(tmp_path):
    """Planned visits carry the patient's arm where the register has one."""
    table = registered(
        tmp_path,
        "patient_code,visit,target_local,days_before,days_after\nP-1,week4,2026-04-29,7,9\nP-2,week4,2026-05-02,7,9\n",
        "patient_code,arm\nP-1,B\n",
    )
    assert table.rows() == [
        ("P-1", "week4", "B", date(2026, 4, 29), 7, 9),
        ("P-2", "week4", None, date(2026, 5, 2), 7, 9),
    ]


@pytest.mark.parametrize(
    ("rows", "said"),
    [
        ("P-9,week4,2026-04-29,7,7", "patient_code: found 'P-9'"),
        ("P-1,week4,2026-04-29,-7,7", "a whole number from 0 to 180"),
        ("P-1,week4,soon,7,7", "target_local"),
        ("P-1,week4,2026-04-29,7,7\nP-1,week4,2026-05-29,7,7", "not in row 2 already"),
        ("P-1,week4,2026-04-29,7,7\nP-1,week5,2026-04-29,7,7", "not in row 2 already"),
    ],
)
def test_a_wrong_visit_leads_to_its_cell(tmp_path, rows, said):
    """A visit that cannot be used is refused with row, column and what is expected."""
    with pytest.raises(RegisterError, match=said):
        registered(tmp_path, f"patient_code,visit,target_local,days_before,days_after\n{rows}\n")


@pytest.fixture(scope="module")
def trial() -> pl.DataFrame:
    """A trial of 80 patients: active halves the ectopy beyond what placebo does (0.9), patients differ widely."""
    rng = np.random.default_rng(17)
    plans, days = [], []
    for i in range(80):
        arm = "active" if i % 2 else "placebo"
        usual = rng.normal(7.5, 0.9)
        for visit, target in (("baseline", 0), ("week8", 56)):
            plans.append((f"P{i:02}", visit, arm, target, 6))
            effect = 0.0 if visit == "baseline" else np.log(0.45 if arm == "active" else 0.9)
            for day in range(target, target + 4):
                level = np.exp(usual + effect + 0.4 * rng.standard_normal())
                days.append(worn(f"P{i:02}", [day], v_beats=int(rng.poisson(level))))
    return visits(planned(*plans), pl.concat(days), TrialSettings(unmask_reason="database locked"))


def design_of(trial: pl.DataFrame) -> np.ndarray:
    """Constant, visit, arm and their interaction, which is the effect of the arm."""
    late = (trial["visit"] == "week8").to_numpy().astype(float)
    active = (trial["arm"] == "active").to_numpy().astype(float)
    return np.column_stack([np.ones(len(late)), late, active, late * active])


def test_a_mixed_model_takes_up_the_table(trial):
    """Random patients, fixed arm and visit on ln rates: the interval of the interaction holds the true effect."""
    groups = trial["patient_code"].to_list()
    # Source: statsmodels MixedLM (REML), the worked model for the trial's statistician; the truth is ln(0.45 / 0.9)
    fit = sm.MixedLM(trial["v_per_h"].log().to_numpy(), design_of(trial), groups=groups).fit(reml=True)
    low, high = fit.conf_int()[3]
    assert low < np.log(0.5) < high < 0


def test_a_rate_model_takes_up_the_table(trial):
    """Counts over analysable hours feed a Poisson model clustered by patient directly."""
    # Source: statsmodels GEE, Poisson with exchangeable correlation; the truth is ln(0.45 / 0.9)
    fit = sm.GEE(
        trial["v_beats"].to_numpy(),
        design_of(trial),
        groups=trial["patient_code"].to_list(),
        family=sm.families.Poisson(),
        offset=np.log(trial["analysable_h"].to_numpy()),
        cov_struct=sm.cov_struct.Exchangeable(),
    ).fit()
    low, high = fit.conf_int()[3]
    assert low < np.log(0.5) < high < 0


def test_visits_planned_as_before_are_unchanged():
    """A patient with a moved, added or removed visit, or other days worn, is not among the unchanged."""
    planned = pl.DataFrame(
        {
            "patient_code": ["P1", "P1", "P2", "P3"],
            "visit": ["a", "b", "a", "a"],
            "arm": None,
            "wear_days": [3, 4, 2, 1],
        }
    )
    assert unchanged(planned, planned) == ["P1", "P2", "P3"]
    assert unchanged(planned.with_columns(wear_days=pl.col("wear_days").replace({2: 9})), planned) == ["P1", "P3"]
    assert unchanged(planned.slice(1), planned) == unchanged(planned, planned.slice(1)) == ["P2", "P3"]
