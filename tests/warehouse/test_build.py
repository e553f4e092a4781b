"""Trend tables: local days and their length, burdens with denominators, periods around therapy events."""

import itertools
from dataclasses import replace
from datetime import date, datetime, timedelta
from typing import Any

import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from warehouse import schema
from warehouse.build import BuildError, TrendBuild


def _days(build: TrendBuild, code: str = "P1") -> dict[date, dict[str, Any]]:
    days = build.frame("wear_days").filter(pl.col("patient_code") == code)
    return {day["local_day"]: day for day in days.iter_rows(named=True)}


# Source: tz database, as FACTS case T21 of this project's published facts
@pytest.mark.parametrize(
    ("zone", "day", "day_h"),
    [
        ("Europe/Berlin", date(2026, 3, 29), 23),
        ("Europe/Berlin", date(2026, 10, 25), 25),
        ("America/New_York", date(2026, 3, 8), 23),
        ("Europe/Berlin", date(2026, 3, 28), 24),
    ],
)
def test_a_local_day_has_the_hours_of_its_zone(lake: Any, zone: str, day: date, day_h: int) -> None:
    """A day on which clocks change has 23 or 25 hours, and continuous wear fills exactly those."""
    lake.patient("P1", zone)
    start = f"{day.replace(day=day.day - 2)}T00:00"
    end = f"{day.replace(day=day.day + 2)}T12:00"
    lake.recording("R1", "P1", start, end)
    with lake.built() as build:
        found = _days(build)[day]
        hours = build.frame("local_hours").filter(pl.col("local_day") == day)
        assert build.check() == []
    assert (found["day_h"], found["worn_h"], found["analysable_h"]) == (day_h, day_h, day_h)
    assert hours["worn_s"].sum() == day_h * 3600
    assert hours.height == min(day_h, 24)


@pytest.mark.parametrize("zone", ["Asia/Kathmandu", "America/St_Johns", "Pacific/Chatham", "Australia/Eucla"])
def test_a_zone_off_the_full_hour_has_whole_days(lake: Any, zone: str) -> None:
    """Zones a half or a quarter hour off UTC split days at their own midnight."""
    lake.patient("P1", zone)
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-04T00:00")
    with lake.built() as build:
        worn_h = [day["worn_h"] for day in _days(build).values()]
    assert len(worn_h) == 4
    assert worn_h[1:3] == [24, 24]
    assert worn_h[0] + worn_h[3] == 24


def test_burden_is_shown_over_its_denominators(lake: Any) -> None:
    """10,000 of 100,000 beats in 22.5 analysable hours are 10 %, and 444.4 an hour."""
    lake.patient("P1")
    v_beats = pl.when(pl.int_range(pl.len()) < 10).then(112).otherwise(111)  # 90 quarter hours, 10,000 beats
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-01T22:30", n_beats=1000, s_beats=0, v_beats=v_beats)
    with lake.built() as build:
        day = _days(build)[date(2026, 5, 1)]
        recording = build.frame("recordings").row(0, named=True)
    # Source: definition of burden, FACTS 3.1 and case T23: 10 %, 444.4 an hour, 10 666.7 in 24 hours
    assert (day["v_burden_pct"], recording["v_burden_pct"]) == (10, 10)
    assert day["v_per_h"] == pytest.approx(444.4, abs=0.05)
    assert 24 * day["v_per_h"] == pytest.approx(10666.7, abs=0.05)
    assert (day["v_beats"], day["all_beats"], day["analysable_h"]) == (10_000, 100_000, 22.5)


def test_a_day_without_analysable_time_is_a_day_without_burden(lake: Any) -> None:
    """A worn day of pure noise is counted, and its burdens and rate are NULL, not 0."""
    lake.patient("P1")
    nothing = dict.fromkeys(("n_beats", "s_beats", "v_beats", "rr_count"), 0) | {"rr_sum_s": 0.0, "analysable_s": 0.0}
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", **nothing)
    lake.therapy("P1", "2026-05-01")
    with lake.built() as build:
        day = _days(build)[date(2026, 5, 1)]
        after = build.frame("periods").filter(pl.col("period") == "after").row(0, named=True)
        assert build.check() == []
    assert (day["worn_h"], day["analysable_h"], day["is_valid_day"], day["clock_hours_covered"]) == (24, 0, False, 0)
    assert day["v_burden_pct"] is day["s_burden_pct"] is day["v_per_h"] is day["mean_rate_bpm"] is None
    assert (after["wear_days"], after["valid_days"], after["v_burden_pct"]) == (1, 0, None)


def test_a_patch_in_a_drawer_makes_no_wear_day(lake: Any) -> None:
    """Recorded time without skin contact is no wear day, but stays in the hours of the recording."""
    lake.patient("P1")
    nothing = dict.fromkeys(("n_beats", "s_beats", "v_beats"), 0) | {"worn_s": 0.0, "analysable_s": 0.0}
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", **nothing)
    with lake.built() as build:
        assert build.frame("wear_days").is_empty()
        assert build.frame("hours")["recorded_s"].sum() == 24 * 3600
        assert build.check() == []


def test_mean_rate_is_sixty_over_the_mean_interval(lake: Any) -> None:
    """The rate of a day weighs every interval alike: quarters with more beats count more."""
    lake.patient("P1")
    first_half = pl.int_range(pl.len()) < 48
    rr_count = pl.when(first_half).then(900).otherwise(1800)
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", rr_count=rr_count, rr_sum_s=900.0)
    with lake.built() as build:
        # Source: 60 over the arithmetic mean of the intervals: 48 x 2,700 intervals in 96 x 900 s are 90 a minute
        assert _days(build)[date(2026, 5, 1)]["mean_rate_bpm"] == 90


def test_two_patches_at_once_count_once(lake: Any) -> None:
    """Of two recordings of one patient at the same time the one with more analysable time counts."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", analysable_s=400.0, v_beats=1)
    lake.recording("R2", "P1", "2026-05-01T12:00", "2026-05-02T00:00", v_beats=2)
    with lake.built() as build:
        day = _days(build)[date(2026, 5, 1)]
        assert build.frame("hours").height == 24 + 12
        assert build.check() == []
    assert (day["worn_h"], day["v_beats"]) == (24, 48 + 2 * 48)


def test_a_change_of_patch_within_a_quarter_hour_keeps_both(lake: Any) -> None:
    """Seven minutes of the old patch and six of the new one in the same quarter hour all count."""
    lake.patient("P1")
    seven_min = dict.fromkeys(("recorded_s", "worn_s", "analysable_s"), 420.0)
    six_min = dict.fromkeys(("recorded_s", "worn_s", "analysable_s"), 360.0)
    lake.recording("R1", "P1", "2026-05-01T10:00", "2026-05-01T10:15", **seven_min)
    lake.recording("R2", "P1", "2026-05-01T10:00", "2026-05-01T10:15", **six_min)
    with lake.built() as build:
        assert _days(build)[date(2026, 5, 1)]["worn_h"] == pytest.approx(13 / 60)


def test_a_recording_without_a_wear_is_not_published(lake: Any) -> None:
    """Taking a wear out of the register takes its recording out of every table."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    lake.recording("R2", "P1", "2026-05-03T00:00", "2026-05-04T00:00")
    lake.wears = lake.wears[:1]
    with lake.built() as build:
        assert build.frame("recordings")["recording_id"].to_list() == ["R1"]
        assert build.frame("hours")["recording_id"].unique().to_list() == ["R1"]
        assert list(_days(build)) == [date(2026, 5, 1)]


def test_only_the_published_fingerprint_counts(lake: Any) -> None:
    """Results of another fingerprint stand beside in the lake and move no number."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", v_beats=1)
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", fingerprint="f2", v_beats=7)
    lake.wears = lake.wears[:1]
    for fingerprint, v_beats in (("f1", 96), ("f2", 7 * 96)):
        with lake.built(fingerprint) as build:
            assert build.frame("recordings").select("fingerprint", "v_beats").row(0) == (fingerprint, v_beats)


def test_a_recording_that_waits_for_analysis_has_no_numbers(lake: Any) -> None:
    """A landed recording without results is published with NULL for what analysis gives."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", fingerprint="f2")
    with lake.built("f1") as build:
        row = build.frame("recordings").row(0, named=True)
        assert build.check() == []
    assert row["patient_code"] == "P1"
    assert row["v_burden_pct"] is row["analysable_h"] is row["all_beats"] is row["fingerprint"] is None


def _spans(build: TrendBuild) -> dict[tuple[str, str], tuple[str | None, str | None]]:
    return {
        (row["therapy_id"], row["period"]): (str(row["first_day"] or ""), str(row["last_day"] or ""))
        for row in build.frame("periods").iter_rows(named=True)
    }


def test_periods_lie_around_their_therapy_event(lake: Any) -> None:
    """Baseline ends the day before, settling begins on the day, after follows it; each for its number of days."""
    lake.patient("P1")
    lake.therapy("P1", "2026-06-10", settling_days=7)
    with lake.built(baseline_days=28, after_days=90) as build:
        assert _spans(build) == {
            ("T1", "baseline"): ("2026-05-13", "2026-06-09"),
            ("T1", "settling"): ("2026-06-10", "2026-06-16"),
            ("T1", "after"): ("2026-06-17", "2026-09-14"),
        }
        assert build.check() == []


def test_periods_stop_at_the_neighbouring_therapy_events(lake: Any) -> None:
    """A baseline begins after the earlier event has settled; an after period ends the day before the next event."""
    lake.patient("P1")
    lake.therapy("P1", "2026-06-01", settling_days=7)
    lake.therapy("P1", "2026-06-20", settling_days=14)
    lake.therapy("P1", "2026-06-25", settling_days=0)
    with lake.built() as build:
        spans = _spans(build)
        assert build.check() == []
    assert spans["T1", "after"] == ("2026-06-08", "2026-06-19")
    assert spans["T2", "baseline"] == ("2026-06-08", "2026-06-19")
    assert spans["T2", "settling"] == ("2026-06-20", "2026-06-24")
    assert spans["T2", "after"] == ("", "")
    assert spans["T3", "settling"] == ("", "")
    assert spans["T3", "after"] == ("2026-06-25", "2026-09-22")


def test_therapy_events_of_one_day_share_their_periods(lake: Any) -> None:
    """Two events on the same day do not cut each other off; the longer settling time holds for both."""
    lake.patient("P1")
    lake.therapy("P1", "2026-06-10", settling_days=7)
    lake.therapy("P1", "2026-06-10", settling_days=14, kind="ablation")
    with lake.built() as build:
        spans = _spans(build)
    assert spans["T1", "after"] == spans["T2", "after"] == ("2026-06-24", "2026-09-21")
    assert spans["T1", "baseline"] == spans["T2", "baseline"] == ("2026-05-13", "2026-06-09")


def test_periods_sum_their_wear_days(lake: Any) -> None:
    """A period holds the hours, beats and clock coverage of its days; one without wear holds zeros and NULL burdens."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-06-07T00:00", "2026-06-08T06:00")
    lake.therapy("P1", "2026-06-10", settling_days=7)
    with lake.built() as build:
        periods = {row["period"]: row for row in build.frame("periods").iter_rows(named=True)}
    baseline, after = periods["baseline"], periods["after"]
    assert (baseline["wear_days"], baseline["valid_days"], baseline["worn_h"]) == (2, 1, 30)
    assert (baseline["v_beats"], baseline["all_beats"], baseline["v_burden_pct"]) == (120 * 90, 120_000, 9)
    assert (baseline["clock_coverage_pct"], baseline["mean_rate_bpm"]) == (100, pytest.approx(60 * 1000 / 900))
    assert (after["wear_days"], after["worn_h"], after["clock_coverage_pct"]) == (0, 0, 0)
    assert after["v_burden_pct"] is after["mean_rate_bpm"] is None


def test_a_mark_in_two_deliveries_is_one_mark(lake: Any) -> None:
    """Patient marks are published once per recording, instant and text, with the patient they belong to."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    mark = {"recording_id": "R1", "mark_utc": datetime.fromisoformat("2026-05-01T03:00"), "mark_text": "button"}
    lake.land("marks", "R1", [mark | {"delivery_id": name} for name in ("D1", "D2")])
    with lake.built() as build:
        assert build.frame("marks").select("patient_code", "mark_text").rows() == [("P1", "button")]
        assert build.check() == []


def test_parts_of_an_older_dictionary_still_build(lake: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """A column that came after a part had landed is NULL in it; one that was dropped since is left out."""
    now = schema.LAKE["recordings"]
    older = replace(now, columns=(*(name for name in now.columns if name != "lead"), "reader_code"))
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    with monkeypatch.context() as before:
        before.setitem(schema.LAKE, "recordings", older)
        lake.recording("R2", "P1", "2026-05-03T00:00", "2026-05-04T00:00")
    with lake.built() as build:
        recordings = build.frame("recordings")
        assert build.check() == []
    assert recordings["recording_id"].to_list() == ["R1", "R2"]
    assert recordings["lead"].to_list() == [None, None]


def test_a_missing_setting_is_named(lake: Any) -> None:
    """A build without a threshold that a model needs says which."""
    broken = TrendBuild(
        lake.folder / "lake", [], register=lake.register(), settings={}, fingerprint="f", workdir=lake.folder
    )
    with pytest.raises(BuildError, match="min_analysable_h_per_day"), broken:
        pass


def test_the_scratch_database_is_removed(lake: Any) -> None:
    """Nothing of the build stays behind."""
    with lake.built():
        assert (lake.folder / "work" / "build.duckdb").exists()
    assert list((lake.folder / "work").iterdir()) == []


@given(cuts=st.sets(st.integers(1, 3 * 96 - 1), max_size=6), zone=st.sampled_from(["Europe/Berlin", "Asia/Kathmandu"]))
@settings(max_examples=4, deadline=None)
def test_wear_days_do_not_depend_on_how_the_wear_was_cut(
    tmp_path_factory: pytest.TempPathFactory, make_lake: Any, cuts: set[int], zone: str
) -> None:
    """The same quarter hours in one recording or in several give the same wear days and local hours."""
    begin = datetime.fromisoformat("2026-03-28T05:00")
    edges = [begin + timedelta(minutes=15 * n) for n in (0, *sorted(cuts), 3 * 96)]
    tables = []
    for spans in ([(edges[0], edges[-1])], list(itertools.pairwise(edges))):
        lake = make_lake(tmp_path_factory.mktemp("lake"))
        lake.patient("P1", zone)
        for number, (start, end) in enumerate(spans):
            minutes = pl.col("quarter_utc").dt.hour().cast(pl.Int64) * 60 + pl.col("quarter_utc").dt.minute()
            lake.recording(f"R{number}", "P1", start.isoformat(), end.isoformat(), v_beats=minutes % 97)
        with lake.built() as build:
            tables.append((build.frame("wear_days"), build.frame("local_hours")))
    assert tables[0][0].equals(tables[1][0])
    assert tables[0][1].equals(tables[1][1])
