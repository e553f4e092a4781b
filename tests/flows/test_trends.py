"""The `changes` table from made-up hours, days and periods."""

from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dashboards import words
from detectors.change import VERDICTS
from flows.change import trends
from flows.change.extremes import EXTREMES
from flows.change.measures import MEASURES, V_BURDEN
from flows.settings import ChangeSettings, WearSettings
from warehouse.schema import PUBLISHED

EVENT = date(2026, 3, 20)
DAYS_ALONE = ChangeSettings(gap_drift_share=0.0, detector_error_share=0.0)
DAY_SHAPE = 1 + 0.8 * np.cos(2 * np.pi * (np.arange(24) - 14) / 24)


def hours_of(patient: str, day: date, level: float, *, clock_hours=range(24), rate_bpm: float = 70.0) -> pl.DataFrame:
    """Hours of one day whose ventricular beats follow the clock; `level` is V per hour round the clock."""
    hours = np.array(list(clock_hours))
    v_beats = np.rint(level * DAY_SHAPE[hours]).astype(int)
    return pl.DataFrame(
        {"patient_code": patient, "local_day": day, "clock_hour": hours, "analysable_s": 3600.0, "v_beats": v_beats,
         "s_beats": 3, "all_beats": round(60 * rate_bpm), "mean_rate_bpm": rate_bpm, "couplets": 0, "runs": 0,
         "longest_run_beats": 0, "fastest_run_bpm": None, "bigeminy_s": 0.0},
        schema_overrides={"fastest_run_bpm": pl.Float32},
    )  # fmt: skip


def programme(hours: list[pl.DataFrame], events: dict[str, str]) -> dict[str, pl.DataFrame]:
    """The four tables for therapy events (id to patient) at EVENT, all days within reach of the periods."""
    local_hours = pl.concat(hours)
    days = local_hours.group_by("patient_code", "local_day").agg(analysable_h=pl.col("analysable_s").sum() / 3600)
    wear_days = days.with_columns(is_valid_day=pl.col("analysable_h") >= 10)
    spans = [("baseline", -28, -1), ("settling", 0, 6), ("after", 7, 96)]
    periods = [
        {"patient_code": patient, "therapy_id": therapy, "period": name, "first_day": EVENT + timedelta(first),
         "last_day": EVENT + timedelta(last)}
        for therapy, patient in events.items() for name, first, last in spans
    ]  # fmt: skip
    therapies = pl.DataFrame(
        {
            "therapy_id": list(events),
            "patient_code": list(events.values()),
            "therapy_kind": "ablation",
            "therapy_day": EVENT,
        }
    )
    return {
        "local_hours": local_hours,
        "wear_days": wear_days,
        "periods": pl.DataFrame(periods),
        "therapies": therapies,
    }


def tables_of(inputs, change=DAYS_ALONE, wear=WearSettings()):
    return trends.tables(trends.Inputs(**inputs), change, wear).published


def changes(hours, events, change=DAYS_ALONE, wear=WearSettings()):
    return tables_of(programme(hours, events), change, wear)["changes"]


def wearing(patient: str, before: list[float], after: list[float], **of_after) -> list[pl.DataFrame]:
    earlier = [hours_of(patient, EVENT - timedelta(len(before) - i), level) for i, level in enumerate(before)]
    later = [hours_of(patient, EVENT + timedelta(7 + i), level, **of_after) for i, level in enumerate(after)]
    return earlier + later


def row(table: pl.DataFrame, measure: str = "v_burden_pct") -> dict:
    return table.filter(pl.col("measure") == measure).row(0, named=True)


STEADY = [400, 520, 450, 380, 480, 430, 500]
LOWER = [40, 55, 44, 36, 50, 41, 47]


def test_a_clear_fall_is_called_beyond_chance():
    """A tenfold fall over seven days each side is called a fall, with its interval and days."""
    found = row(changes(wearing("P1", STEADY, LOWER), {"T1": "P1"}))
    assert found["verdict"] == "fell_beyond_chance"
    assert found["ratio_low"] < 0.1 < found["ratio_high"]
    assert found["ratio"] == pytest.approx(found["after_value"] / found["baseline_value"])
    assert (found["baseline_days"], found["after_days"], found["baseline_analysable_h"]) == (7, 7, 168)
    assert "fell by" in found["reason"]


def test_every_event_and_measure_has_a_row_with_the_published_columns():
    """Patients without wear, without days on a side and without events on record all keep their rows."""
    hours = wearing("P1", STEADY, LOWER) + wearing("P2", STEADY, [])
    table = changes(hours, {"T1": "P1", "T2": "P2", "T3": "P3"})
    assert tuple(table.columns) == PUBLISHED["changes"].columns
    assert table.height == 3 * (len(MEASURES) + len(EXTREMES))
    assert table.filter(pl.col("patient_code") != "P1")["verdict"].unique().to_list() == ["too_little_wear"]
    assert table["reason"].null_count() == 0


def test_an_event_before_all_wear_or_in_the_future_has_no_verdict():
    """Therapy events with wear on one side only have rows of too_little_wear that count the days there are."""
    only_after = wearing("P1", [], STEADY)
    only_before = [hours_of("P2", EVENT - timedelta(3 + i), level) for i, level in enumerate(STEADY)]
    table = changes(only_after + only_before, {"T1": "P1", "T2": "P2"}).filter(pl.col("measure") == "v_burden_pct")
    assert table["verdict"].unique().to_list() == ["too_little_wear"]
    assert table.select("baseline_days", "after_days").rows() == [(0, 7), (7, 0)]
    assert table["ratio"].null_count() == 2


@settings(max_examples=12, deadline=None)
@given(st.data())
def test_any_wear_gives_one_row_per_event_and_measure(data):
    """Whatever days and hours were worn, every event and measure has one row with a verdict word and a reason."""
    some_hours = st.lists(st.integers(0, 23), min_size=1, max_size=24, unique=True)
    worn = data.draw(st.dictionaries(st.integers(-20, 40), st.tuples(some_hours, st.integers(0, 3000)), min_size=1))
    hours = [hours_of("P1", EVENT + timedelta(day), level, clock_hours=sorted(at)) for day, (at, level) in worn.items()]
    table = changes(hours, {"T1": "P1", "T2": "P9"}, change=ChangeSettings())
    assert table.select("therapy_id", "measure").n_unique() == table.height == 2 * (len(MEASURES) + len(EXTREMES))
    assert set(table["verdict"]) <= set(VERDICTS)
    assert (table["reason"].str.len_chars() > 20).all()


def test_no_therapy_gives_an_empty_table():
    """A programme without therapy events has an empty table with the published columns."""
    table = changes(wearing("P1", STEADY, LOWER), {"T1": "P1"}).clear()
    tables = programme(wearing("P1", STEADY, LOWER), {"T1": "P1"})
    tables |= {"therapies": tables["therapies"].clear(), "periods": tables["periods"].clear()}
    assert tables_of(tables)["changes"].equals(table)


def test_losing_the_nights_does_not_look_like_a_change():
    """Days worn only in the ectopic daytime have the same burden as whole days, and the reason says what is missing."""
    days_only = changes(wearing("P1", STEADY, STEADY, clock_hours=range(8, 20)), {"T1": "P1"})
    found = row(days_only)
    assert DAY_SHAPE[8:20].mean() > 1.4  # the change that a plain mean would show
    assert found["ratio"] == pytest.approx(1, abs=0.05)
    assert found["verdict"] == "within_chance"
    assert found["after_clock_coverage_pct"] == 50
    assert "Part of the day is missing" in found["reason"]


def test_a_burden_has_its_definition():
    """10,000 ventricular among 100,000 beats over 22.5 h are 10 % and 444.4 per hour."""
    table = pl.concat([hours_of("P1", EVENT + timedelta(day), 0) for day in (-2, -1, 8, 9)])
    exact = table.with_columns(
        v_beats=10_000 / 24, all_beats=100_000 / 24, analysable_s=22.5 * 3600 / 24
    )  # per hour, so that a day holds the worked numbers
    found = changes([exact], {"T1": "P1"})
    # Source: definition of burden (beats over all beats, beats over analysable time), by hand; days of n beats are
    # averaged by ln(n + 1/2), so within half a beat in 10,000
    assert row(found)["baseline_value"] == pytest.approx(10, rel=5e-5)
    assert row(found, "v_per_h")["baseline_value"] == pytest.approx(444.44, abs=0.05)


def test_none_after_is_bounded_and_never_only_minus_100_pct():
    """No beat after gives ratio 0 with a finite upper bound below 1."""
    found = row(changes(wearing("P1", STEADY, [0, 0, 0]), {"T1": "P1"}))
    assert found["ratio"] == found["ratio_low"] == 0
    assert 0 < found["ratio_high"] < 0.05
    assert found["verdict"] == "fell_beyond_chance"


def test_none_on_either_side_keeps_its_row():
    """A burden of 0 on both sides is within chance, without a ratio."""
    found = row(changes(wearing("P1", [0, 0, 0], [0, 0, 0]), {"T1": "P1"}))
    assert (found["verdict"], found["ratio"], found["baseline_value"]) == ("within_chance", None, 0)


def test_a_single_day_each_side_is_too_little_by_default():
    """One valid day each side gives numbers but no verdict; the reason names what is needed."""
    found = row(changes(wearing("P1", [400], [4]), {"T1": "P1"}))
    assert found["verdict"] == "too_little_wear"
    assert "at least 2" in found["reason"]


def test_verdict_follows_the_limit_that_is_shown():
    """For falls of any size, the verdict is a fall exactly when the fall exceeds the chance limit shown."""
    events = {f"T{i:02}": f"P{i:02}" for i in range(40)}
    hours = [
        day for i, patient in enumerate(events.values())
        for day in wearing(patient, STEADY[:4], [level * (1 - i / 39) for level in STEADY[2:6]])
    ]  # fmt: skip
    table = changes(hours, events, change=ChangeSettings()).filter(pl.col("measure") == "v_burden_pct")
    beyond = -table["change_pct"] > table["chance_fall_limit_pct"]
    assert beyond.to_list() == (table["verdict"] == "fell_beyond_chance").to_list()
    assert 0 < beyond.sum() < 40


def test_a_changed_heart_rate_is_seen_beside_the_burden():
    """Mean heart rate has its own row and stands beside every other measure."""
    hours = wearing("P1", STEADY, STEADY, rate_bpm=55.0)
    found = changes(hours, {"T1": "P1"})
    assert row(found, "mean_rate_bpm")["verdict"] == "fell_beyond_chance"
    assert row(found)["baseline_rate_bpm"] == pytest.approx(70, rel=1e-5)
    assert row(found)["after_rate_bpm"] == pytest.approx(55, rel=1e-5)


def test_time_between_the_periods_widens_the_chance_limit():
    """The published drift over weeks raises the smallest fall beyond chance."""
    hours = wearing("P1", STEADY, LOWER)
    near = row(changes(hours, {"T1": "P1"}))["chance_fall_limit_pct"]
    drifting = replace(DAYS_ALONE, gap_drift_share=1.0)
    far = row(changes(hours, {"T1": "P1"}, change=drifting))["chance_fall_limit_pct"]
    assert far > near + 10


def test_the_error_of_the_detector_widens_the_chance_limit():
    """However steady the days, a fall that the detector's own error explains is not beyond chance; its share is told."""
    steady = [400.0] * 20
    change = replace(DAYS_ALONE, detector_error_share=0.2 / V_BURDEN.error(1.0).sd_ln)
    found = row(changes(wearing("P1", steady, [0.7 * level for level in steady]), {"T1": "P1"}, change=change))
    # Source: normal theory, 1 - exp(-1.645 x 0.2 x sqrt(2)) = 37.2 %, by hand
    assert 37 < found["chance_fall_limit_pct"] < 45
    assert (found["verdict"], found["detection_share_pct"] > 50) == ("within_chance", True)


def test_a_fall_by_a_third_over_two_weeks_is_judged_by_how_the_days_vary():
    """From 20 % to 13 % over seven days each side is beyond chance where the days vary little, not where they swing."""
    for swing, verdict in ((0.02, "fell_beyond_chance"), (0.3, "within_chance")):
        days = 835 * np.exp(swing * np.array([-1.2, 0.7, -0.4, 1.1, 0.2, -0.9, 0.5]))
        hours = wearing("P1", list(days), list(0.65 * days[::-1]))
        found = row(changes(hours, {"T1": "P1"}, change=ChangeSettings()))
        assert found["after_value"] / found["baseline_value"] == pytest.approx(0.65, abs=0.01)
        assert found["verdict"] == verdict


def test_a_burden_that_false_beats_make_up_never_falls_beyond_chance():
    """A baseline below the false beats of the detector proves nothing by vanishing; its row says so."""
    few = [2 / 24] * 7  # two beats a day, one in 50,000
    hours = [
        day.with_columns(v_beats=(pl.int_range(pl.len()) < 2 * is_before).cast(pl.Int64))
        for is_before, side in ((1, wearing("P1", few, [])), (0, wearing("P1", [], few)))
        for day in side
    ]
    counted = row(changes(hours, {"T1": "P1"}))
    found = row(changes(hours, {"T1": "P1"}, change=replace(DAYS_ALONE, detector_error_share=1.0)))
    assert (counted["verdict"], found["verdict"]) == ("fell_beyond_chance", "within_chance")
    assert found["chance_fall_limit_pct"] == 100


def test_a_recurrence_has_its_first_day():
    """A burden that fell and came back within the after period is named with the day of its return."""
    rng = np.random.default_rng(7)
    before, low, back = (level * np.exp(0.2 * rng.standard_normal(6)) for level in (500, 20, 450))
    later = [hours_of("P1", EVENT + timedelta(40 + i), level) for i, level in enumerate(back)]
    found = row(changes(wearing("P1", list(before), list(low)) + later, {"T1": "P1"}, change=ChangeSettings()))
    assert found["recurrence_day"] == EVENT + timedelta(40)
    assert "back beyond chance since 2026-04-29" in found["reason"]


def test_a_lasting_fall_is_no_recurrence():
    """Days that stay low with their usual variation have no recurrence, in a programme of 60 patients."""
    rng = np.random.default_rng(9)
    events = {f"T{i:02}": f"P{i:02}" for i in range(60)}
    hours = [
        day for patient in events.values()
        for day in wearing(patient, list(500 * np.exp(0.5 * rng.standard_normal(7))),
                           list(30 * np.exp(0.5 * rng.standard_normal(14))))
    ]  # fmt: skip
    table = changes(hours, events).filter(pl.col("measure") == "v_burden_pct")
    assert (table["verdict"] == "fell_beyond_chance").all()
    assert table["recurrence_day"].is_not_null().sum() <= 3


def test_an_unsettled_fall_says_how_many_days_would_settle_it():
    """A fall within chance tells the wear days that are missing, and with them the same fall is beyond chance."""
    before, after = [400, 700, 300, 520, 610, 350, 480], [230, 410]
    found = row(changes(wearing("P1", before, after), {"T1": "P1"}))
    assert found["verdict"] == "within_chance"
    missing = found["days_to_settle"]
    assert 1 <= missing <= 30
    assert f"About {missing} more wear day" in found["reason"]
    level = found["after_value"] / found["baseline_value"]
    longer = after + [level * before[i % 7] for i in range(3 * missing)]
    assert row(changes(wearing("P1", before, longer), {"T1": "P1"}))["verdict"] == "fell_beyond_chance"


def test_success_is_a_matter_of_ectopy():
    """A heart rate has no probability of success."""
    table = changes(wearing("P1", STEADY, LOWER), {"T1": "P1"})
    assert row(table, "mean_rate_bpm")["success_probability_pct"] is None
    assert row(table)["success_probability_pct"] > 95


def test_a_baseline_above_the_programme_is_warned_of():
    """A high and uncertain baseline among lower ones carries the fall that regression to the mean would bring."""
    rng = np.random.default_rng(12)
    events = {f"T{i:02}": f"P{i:02}" for i in range(30)}
    base = np.exp(rng.normal(4, 0.4, 30))
    base[0] = np.exp(5.4)
    hours = [
        day for patient, level in zip(events.values(), base, strict=True)
        for day in wearing(patient, list(level * np.exp(0.8 * rng.standard_normal(2))), [level * 0.7, level * 0.5])
    ]  # fmt: skip
    table = changes(hours, events).filter(pl.col("measure") == "v_burden_pct")
    assert table["expected_regression_pct"][0] > 20
    assert "regression to the mean" in table["reason"][0]
    assert (
        table.filter(pl.col("baseline_value") < 0.9 * table["baseline_value"].median())["expected_regression_pct"].max()
        == 0
    )


def test_a_fall_through_the_heart_rate_alone_is_seen_as_such():
    """Ectopy that follows the rate and falls with it has a ratio near 1 at equal heart rate."""
    rng = np.random.default_rng(6)

    def day(offset: int, rate_bpm: float) -> pl.DataFrame:
        rate = rate_bpm + 9 * np.cos(2 * np.pi * (np.arange(24) - 14) / 24) + 2 * rng.standard_normal(24)
        v_beats = rng.poisson(np.exp(5 + 0.06 * (rate - 70) + 0.15 * rng.standard_normal()))
        hours = hours_of("P1", EVENT + timedelta(offset), 0)
        return hours.with_columns(v_beats=pl.Series(v_beats), mean_rate_bpm=pl.Series(rate))

    hours = [day(i, 75) for i in range(-7, 0)] + [day(i, 62) for i in range(7, 14)]
    tables = tables_of(programme(hours, {"T1": "P1"}))
    found = tables["rate_effects"].row(0, named=True)
    assert found["dependence"] == "follows_rate"
    assert found["ratio"] < 0.6
    assert found["equal_rate_ratio_low"] < 1 < found["equal_rate_ratio_high"]
    # Source: scilit.com/publications/950819913d02feebadb5994523a15e9b (5.9 x + 17.6 where counts follow the rate)
    assert found["expected_from_rate_pct"] == pytest.approx(5.9 * found["rate_change_pct"] + 17.6)
    assert "At equal heart rate" in found["reason"]


def test_an_event_without_wear_keeps_its_row_on_rate():
    """A therapy event without any wear has a row of unknown dependence."""
    tables = tables_of(programme(wearing("P1", STEADY, LOWER), {"T1": "P1", "T2": "P2"}))
    found = tables["rate_effects"].filter(pl.col("patient_code") == "P2").row(0, named=True)
    assert (found["dependence"], found["equal_rate_ratio"]) == ("unknown", None)
    assert tuple(tables["rate_effects"].columns) == PUBLISHED["rate_effects"].columns


def test_levels_shift_where_they_did():
    """The burden of a patient moves to another level on the first day after the gap, and nowhere else."""
    rng = np.random.default_rng(10)
    noisy = [level * np.exp(0.2 * rng.standard_normal()) for level in [400] * 8 + [60] * 8]
    tables = programme(wearing("P1", noisy[:8], noisy[8:]) + wearing("P2", STEADY, STEADY), {"T1": "P1", "T2": "P2"})
    found = tables_of(tables)["level_shifts"]
    assert found.select("patient_code", "local_day").rows() == [("P1", EVENT + timedelta(7))]
    assert found["level_before"][0] / found["level_after"][0] == pytest.approx(400 / 60, rel=0.25)


def test_a_cohort_counts_every_patient_and_imputes_none():
    """Responders are counted among evaluable patients at every limit; too little wear is shown, not imputed."""
    hours = [
        day
        for i, fall in enumerate((0.05, 0.15, 0.4, 1.0))
        for day in wearing(f"P{i}", STEADY, [fall * x for x in STEADY])
    ]
    hours += wearing("P4", STEADY, [])
    events = {f"T{i}": f"P{i}" for i in range(5)}
    table = tables_of(programme(hours, events))["cohort"]
    burden = table.filter(pl.col("measure") == "v_burden_pct").sort("limit_pct")
    assert burden["limit_pct"].to_list() == [50, 70, 80, 90]
    assert burden["responders"].to_list() == [3, 2, 2, 1]
    assert set(burden["patients"]) == {5} and set(burden["evaluable_patients"]) == {4}
    # Source: statsmodels.stats.proportion.proportion_confint, Wilson, 2 of 4
    assert burden.row(2, named=True)["responder_pct_low"] == pytest.approx(15.004, abs=0.01)
    assert burden["mean_ratio"][0] == pytest.approx((0.05 * 0.15 * 0.4) ** 0.25, rel=0.02)
    assert tuple(table.columns) == PUBLISHED["cohort"].columns


def test_step_and_slope_after_the_event():
    """A drop to a fifth that doubles back every week shows as a step of 0.2 and a slope of 2 per week."""
    rng = np.random.default_rng(14)
    before = 400 * np.exp(0.05 * rng.standard_normal(14))
    after = 80 * 2 ** (np.arange(14) / 7) * np.exp(0.05 * rng.standard_normal(14))
    tables = programme(wearing("P1", list(before), list(after)) + wearing("P2", [400], [40]), {"T1": "P1", "T2": "P2"})
    found = tables_of(tables)["series_fits"]
    fit, too_short = found.rows(named=True)
    assert fit["step_ratio_low"] < 0.2 < fit["step_ratio_high"] < 0.3
    assert fit["slope_ratio_per_week_low"] < 2 < fit["slope_ratio_per_week_high"] < 2.6
    assert too_short["step_ratio"] is None


def test_a_series_in_waves_has_a_wider_step_than_one_that_alternates():
    """Days that resemble the day before widen the interval of the step."""
    wave = np.tile([1.5, 1.6, 1.4, 0.6, 0.5, 0.55], 5)[:28]
    alternating = np.tile([1.5, 0.6, 1.6, 0.5, 1.4, 0.55], 5)[:28]
    widths = []
    for pattern in (wave, alternating):
        levels = 400 * pattern
        tables = programme(wearing("P1", list(levels[:14]), list(0.3 * levels[14:])), {"T1": "P1"})
        fit = tables_of(tables)["series_fits"].row(0, named=True)
        widths.append(np.log(fit["step_ratio_high"] / fit["step_ratio_low"]))
    assert widths[0] > 1.1 * widths[1]


def running(day: date, longest: int, fastest: float | None, *, clock_hours=range(24), run_at: int = 14) -> pl.DataFrame:
    """Hours of a day of P1 with one run in the hour `run_at`."""
    hours = hours_of("P1", day, 40, clock_hours=clock_hours)
    has_run = (pl.col("clock_hour") == run_at) & (longest > 0)
    return hours.with_columns(
        runs=has_run.cast(pl.Int64),
        longest_run_beats=pl.when(has_run).then(longest).otherwise(0).cast(pl.Int64),
        fastest_run_bpm=pl.when(has_run).then(fastest).cast(pl.Float32),
    )


BEFORE, AFTER = [EVENT - timedelta(7 - i) for i in range(7)], [EVENT + timedelta(7 + i) for i in range(7)]


def test_runs_that_get_shorter_and_slower_are_told_by_rank():
    """The longest and fastest run have the largest value of each side and a verdict by the ranks of the days."""
    hours = [running(day, 9 + i, 160.0 + i) for i, day in enumerate(BEFORE)]
    hours += [running(day, 3, 130.0 - i) if i < 4 else running(day, 0, None) for i, day in enumerate(AFTER)]
    table = changes(hours, {"T1": "P1"})
    longest, fastest = row(table, "longest_run_beats"), row(table, "fastest_run_bpm")
    assert (longest["baseline_value"], longest["after_value"]) == (15, 3)
    assert (fastest["baseline_value"], fastest["after_value"]) == (166, 130)
    assert longest["verdict"] == fastest["verdict"] == "fell_beyond_chance"
    assert longest["ratio"] is longest["change_pct"] is longest["chance_fall_limit_pct"] is None
    # Source: one of C(14, 7) = 3,432 arrangements, 0.029 %; of the days with runs one of C(11, 4) = 330, 0.30 %
    assert "7 days before and 7 after" in longest["reason"] and "in 0.029 % of cases" in longest["reason"]
    assert "7 days before and 4 after" in fastest["reason"] and "in 0.3 % of cases" in fastest["reason"]


def test_more_wear_makes_a_larger_largest_value_but_no_verdict():
    """A run that is longer only because more days were worn after is within chance."""
    lengths = [3, 0, 4, 0, 0, 5, 3]
    hours = [running(day, length, 140.0) for day, length in zip(BEFORE, lengths, strict=True)]
    days = [EVENT + timedelta(7 + i) for i in range(28)]
    hours += [running(day, length, 140.0) for day, length in zip(days, [*lengths * 3, *lengths[:6], 12], strict=True)]
    longest = row(changes(hours, {"T1": "P1"}), "longest_run_beats")
    assert (longest["baseline_value"], longest["after_value"], longest["verdict"]) == (5, 12, "within_chance")
    assert "12 beats after" in longest["reason"]


def test_runs_of_lost_nights_do_not_count_as_gone():
    """Runs at night are within chance when no night was worn after; without any common hour there is no verdict."""
    hours = [running(day, 8 + i, 150.0, run_at=3) for i, day in enumerate(BEFORE)]
    lost = [running(day, 0, None, clock_hours=range(8, 24)) for day in AFTER]
    assert row(changes(hours + lost, {"T1": "P1"}), "longest_run_beats")["verdict"] == "within_chance"
    night = [running(day, 8, 150.0, clock_hours=range(12), run_at=3) for day in BEFORE]
    daytime = [running(day, 0, None, clock_hours=range(12, 24)) for day in AFTER]
    found = row(changes(night + daytime, {"T1": "P1"}), "longest_run_beats")
    assert found["verdict"] == "too_little_wear"
    assert "over the same clock hours" in found["reason"]


def test_runs_that_stop_leave_no_speed_to_compare():
    """Without a run after, the longest run fell and the fastest has no value and no verdict beyond chance."""
    hours = [running(day, 8, 150.0 + i) for i, day in enumerate(BEFORE)] + [running(day, 0, None) for day in AFTER]
    table = changes(hours, {"T1": "P1"})
    longest, fastest = row(table, "longest_run_beats"), row(table, "fastest_run_bpm")
    assert (longest["verdict"], longest["after_value"]) == ("fell_beyond_chance", 0)
    assert (fastest["verdict"], fastest["after_value"]) == ("within_chance", None)
    assert "7 before and 0 after, so that they cannot be compared" in fastest["reason"]


def test_ranks_allow_for_the_time_between_the_periods():
    """A difference between all days of two weeks five weeks apart is within chance once levels drift as published."""
    later = [day + timedelta(28) for day in AFTER]
    hours = [running(day, 9 + i, 160.0) for i, day in enumerate(BEFORE)] + [running(day, 3, 130.0) for day in later]
    many = [table.with_columns(runs=pl.col("runs") * (20 + 7 * (i % 7))) for i, table in enumerate(hours)]
    assert row(changes(many, {"T1": "P1"}), "longest_run_beats")["verdict"] == "fell_beyond_chance"
    drifting = row(changes(many, {"T1": "P1"}, change=ChangeSettings()), "longest_run_beats")
    assert drifting["verdict"] == "within_chance"


def test_heart_rate_by_hour_of_the_day_before_and_after():
    """Every clock hour has its mean rate on both sides, days weighed by analysable time, NULL where none was worn."""
    half = hours_of("P1", EVENT - timedelta(2), 40, rate_bpm=60).with_columns(analysable_s=pl.lit(1800.0))
    before = [half, hours_of("P1", EVENT - timedelta(1), 40, rate_bpm=90)]
    after = [hours_of("P1", EVENT + timedelta(7 + i), 40, rate_bpm=50, clock_hours=range(6, 24)) for i in range(2)]
    tables = programme(before + after, {"T1": "P1"})
    tables["wear_days"] = tables["wear_days"].with_columns(is_valid_day=pl.lit(True))
    table = tables_of(tables)["rate_by_clock_hour"]
    assert tuple(table.columns) == PUBLISHED["rate_by_clock_hour"].columns
    by_hour = {found["clock_hour"]: found for found in table.rows(named=True)}
    assert sorted(by_hour) == list(range(24))
    # Source: (0.5 h x 60 + 1 h x 90) / 1.5 h, by hand
    assert (by_hour[3]["baseline_rate_bpm"], by_hour[3]["baseline_analysable_h"]) == (80, 1.5)
    assert (by_hour[3]["after_rate_bpm"], by_hour[3]["after_analysable_h"]) == (None, 0)
    assert (by_hour[12]["after_rate_bpm"], by_hour[12]["after_analysable_h"]) == (50, 2)


def test_every_measure_has_its_words_on_the_pages():
    """What `changes` compares is what the pages can name."""
    assert set(words.MEASURES) == {compared.name for compared in (*MEASURES, *EXTREMES)}
