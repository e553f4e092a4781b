"""The attention list: who needs a look and why, from reference lines and therapy events, in a fixed order."""

from datetime import date, datetime
from typing import Any

import polars as pl


def _list(lake: Any, **settings: Any) -> list[tuple[str, str, str]]:
    changes = settings.pop("changes", None)
    with lake.built(changes=changes, **settings) as build:
        rows = build.frame("attention").sort("attention_rank")
        assert rows["attention_rank"].to_list() == list(range(1, rows.height + 1))
        return [(r["patient_code"], r["attention_code"], str(r["since_day"])) for r in rows.iter_rows(named=True)]


def test_a_burden_over_the_line_counts_from_the_first_day_of_the_stretch(lake: Any) -> None:
    """The latest valid day decides; the reason holds since the first valid day after the last one under the line."""
    lake.patient("P1")
    for day, v_beats in enumerate((200, 10, 200, 210), start=1):
        lake.recording(f"R{day}", "P1", f"2026-05-0{day}T00:00", f"2026-05-0{day + 1}T00:00", v_beats=v_beats)
    assert _list(lake) == [("P1", "burden_over_line", "2026-05-03")]
    lake.recording("R6", "P1", "2026-05-06T00:00", "2026-05-07T00:00", v_beats=0)
    assert _list(lake) == []


def test_a_day_with_too_little_wear_does_not_decide(lake: Any) -> None:
    """A latest day below the minimum of analysable hours neither raises nor clears the reason."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", v_beats=300)
    lake.recording("R2", "P1", "2026-05-03T00:00", "2026-05-03T05:00", v_beats=0)
    assert _list(lake) == [("P1", "burden_over_line", "2026-05-01")]


def test_runs_and_pauses_count_since_they_were_first_seen(lake: Any) -> None:
    """Each line that was reached is a reason of its own, faster runs first."""
    lake.patient("P1")
    lake.patient("P2")
    quiet, seen = {"v_beats": 0}, pl.int_range(pl.len()) == 50
    lake.recording("R0", "P1", "2026-04-30T00:00", "2026-05-01T00:00", **quiet)
    lake.recording(
        "R1",
        "P1",
        "2026-05-01T00:00",
        "2026-05-02T00:00",
        longest_run_beats=pl.when(seen).then(5).otherwise(0),
        fastest_run_bpm=pl.when(seen).then(140.0),
        longest_pause_ms=pl.when(seen).then(3100.0),
        **quiet,
    )
    lake.recording("R2", "P2", "2026-05-02T00:00", "2026-05-03T00:00", longest_run_beats=2, **quiet)
    assert _list(lake) == [
        ("P1", "fast_run", "2026-05-01"),
        ("P1", "long_pause", "2026-05-01"),
        ("P1", "ventricular_run", "2026-05-01"),
    ]
    assert _list(lake, attention_run_beats=6, attention_fast_run_bpm=150.0, attention_pause_ms=4000) == []


def test_a_run_of_thirty_seconds_comes_first(lake: Any) -> None:
    """A sustained ventricular run is a reason of its own since its local day; shorter and other episodes are not."""
    lake.patient("P1", "Atlantic/Azores")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-04T00:00", v_beats=0)
    row = {"recording_id": "R1", "fingerprint": "f1", "segment": 0, "rate_bpm": 150.0}
    # Source: 2022 ESC guideline on ventricular arrhythmias: sustained from 30 s on
    told = [("run", 29.9, "2026-05-01T12:00"), ("run", 30.0, "2026-05-03T00:30"), ("pause", 40.0, "2026-05-02T12:00")]
    episodes = [
        row
        | {"episode_kind": kind, "first_sample": place, "duration_s": length_s, "start_utc": datetime.fromisoformat(at)}
        for place, (kind, length_s, at) in enumerate(told)
    ]
    lake.land("episodes", "R1", episodes, "f1")
    # Source: tz database: the Azores keep UTC in summer
    assert _list(lake) == [("P1", "sustained_run", "2026-05-03")]
    with lake.built() as build:
        assert build.frame("attention")["attention_reason"].item() == (
            "ventricular run of 30 s at 150/min, the longest of 1 that reach 30 s, on 2026-05-03"
        )
    assert _list(lake, attention_sustained_run_s=31.0) == []


def test_a_family_that_couples_early_is_listed(lake: Any) -> None:
    """The mean coupling of a ventricular family under the line is a reason, of ten beats or more."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-04T00:00", v_beats=0)
    row = {"recording_id": "R1", "fingerprint": "f1"}
    told = [("V", 10, 290.0), ("V", 9, 250.0), ("S", 50, 280.0), ("V", 900, 480.0)]
    families = [
        row | {"family": place, "family_class": kind, "beat_count": beats, "mean_coupling_ms": coupling_ms}
        for place, (kind, beats, coupling_ms) in enumerate(told)
    ]
    lake.land("families", "R1", families, "f1")
    assert _list(lake) == [("P1", "short_coupling", "2026-05-01")]
    with lake.built() as build:
        assert (
            "come 290 ms after the beat before in a family of 10 beats"
            in build.frame("attention")["attention_reason"][0]
        )
    assert _list(lake, attention_short_coupling_ms=290.0) == []


def test_an_open_wear_near_its_end_is_listed(lake: Any) -> None:
    """A wear that the register ends within two days is a reason, unless its recording reaches that end already."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-05T00:00", v_beats=0)
    assert _list(lake) == []
    lake.wears[0]["to_utc"] = datetime.fromisoformat("2026-05-06T09:00")
    assert _list(lake) == [("P1", "patch_about_to_end", "2026-05-04")]
    lake.wears[0]["to_utc"] = datetime.fromisoformat("2026-05-07T09:00")
    assert _list(lake) == []


def test_a_missing_follow_up_shows_once_the_programme_has_gone_on(lake: Any) -> None:
    """No wear after the settling time is a reason when the latest day of the programme lies beyond it."""
    lake.patient("P1")
    lake.patient("P2")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-03T00:00", v_beats=0)
    lake.therapy("P1", "2026-05-03", settling_days=7)
    assert _list(lake) == []
    lake.recording("R2", "P2", "2026-05-12T00:00", "2026-05-13T00:00", v_beats=0)
    assert _list(lake) == [("P1", "follow_up_missing", "2026-05-10")]


def test_verdicts_on_the_latest_therapy_event_are_listed(lake: Any) -> None:
    """A rise beyond chance and a verdict for want of wear are reasons, with their figures in the sentence."""
    for code in ("P1", "P2"):
        lake.patient(code)
        lake.recording(f"R{code}", code, "2026-05-01T00:00", "2026-05-20T00:00", v_beats=0)
        lake.therapy(code, "2026-05-10")
    change = {"measure": "v_burden_pct", "baseline_days": 9, "after_days": 10}
    rose = {"verdict": "rose_beyond_chance", "change_pct": 400.0, "chance_rise_limit_pct": 210.0}
    changes = [
        change | rose | {"patient_code": "P1", "therapy_id": "T1"},
        change | {"patient_code": "P2", "therapy_id": "T2", "verdict": "too_little_wear", "reason": "one day"},
    ]
    assert _list(lake, changes=changes) == [
        ("P1", "rose_beyond_chance", "2026-05-10"),
        ("P2", "too_little_wear", "2026-05-10"),
    ]
    with lake.built(changes=changes) as build:
        reasons = build.frame("attention").sort("attention_rank")["attention_reason"].to_list()
    assert "rose by 400 %" in reasons[0]
    assert "up to 210 %" in reasons[0]
    assert reasons[1] == "too little wear to judge the therapy event of 2026-05-10: one day"


def test_a_recurrence_is_listed_since_its_day(lake: Any) -> None:
    """A burden that is back after it had fallen is a reason since the day it came back, whatever the verdict is."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-20T00:00", v_beats=0)
    lake.therapy("P1", "2026-05-10")
    change = {"patient_code": "P1", "therapy_id": "T1", "measure": "v_burden_pct", "verdict": "within_chance"}
    assert _list(lake, changes=[change | {"recurrence_day": date(2026, 5, 17)}]) == [("P1", "recurrence", "2026-05-17")]
    assert _list(lake, changes=[change]) == []


def test_figures_stand_in_the_sentence(lake: Any) -> None:
    """The burden is never named without its analysable hours and the day it belongs to."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00", n_beats=800, s_beats=0, v_beats=200)
    with lake.built() as build:
        row = build.frame("attention").row(0, named=True)
    assert row["attention_reason"] == (
        "20.0 % ventricular beats over 24.0 analysable hours on 2026-05-01, the latest valid day; the line is 10 %"
    )
    assert row["since_day"] == date(2026, 5, 1)
