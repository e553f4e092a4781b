"""Figures that plotly accepts and that show what the tables hold."""

from __future__ import annotations

import json
from datetime import date, datetime

import plotly.graph_objects
import polars as pl
import pytest

from dashboards import charts, cohort_charts
from dashboards.marks import by_day
from dashboards.patient import _coupled
from dashboards.tables import Tables

CODE = "SKERRY-0001"


@pytest.fixture
def tables(rows, publish) -> Tables:
    return Tables(publish(rows))


@pytest.fixture
def timeline(tables):
    return charts.timeline({name: tables.of_patient(name, CODE) for name in Tables.BY_PATIENT})


def coloured(figure) -> dict:
    """Put a colour where a figure names a style sheet variable, as the page does."""
    return json.loads(json.dumps(figure).replace('"--', '"#'), object_hook=_hex_only)


def _hex_only(found: dict) -> dict:
    return {k: "#123456" if isinstance(v, str) and v.startswith("#") else v for k, v in found.items()}


def test_plotly_accepts_the_figures(tables, timeline):
    """Every property of the figures is one that plotly knows, with a value it allows."""
    hours = tables.of_recording("hours", "CN0000-20260302")
    changes = tables.whole("changes").filter(pl.col("measure") == "v_burden_pct").sort("change_pct", nulls_last=True)
    figures = [
        timeline,
        charts.wearing(hours, tables.of_recording("marks", "CN0000-20260302"), "Atlantic/Azores"),
        cohort_charts.changes_of_all(changes),
    ]
    for figure in (*figures, cohort_charts.responders(tables.whole("cohort"))):
        # Source: plotly's own schema, checked by its graph objects
        plotly.graph_objects.Figure(coloured(figure))
    clock_map = coloured(charts.clock_map(tables.of_patient("local_hours", CODE)))
    del clock_map["data"][0]["colorscale"]
    plotly.graph_objects.Figure(clock_map)


def test_days_with_too_few_hours_are_drawn_apart(timeline, tables):
    """Valid and short days are two traces, together every day with a burden."""
    valid, short = (trace for trace in timeline["data"] if trace["name"] in ("valid day", "too few hours"))
    days = tables.of_patient("wear_days", CODE)
    assert valid["x"] == [str(day) for day in days.filter("is_valid_day")["local_day"]]
    assert len(valid["x"]) + len(short["x"]) == days.height


def test_a_thin_bar_spans_the_interval_of_each_day(timeline, tables):
    """Each day with an interval has one bar from its lower to its upper end; a day without one has none."""
    days = tables.of_patient("wear_days", CODE)
    (bars,) = [trace for trace in timeline["data"] if trace["name"] == "95 % interval"]
    drawn = list(zip(bars["x"][::3], bars["y"][::3], bars["y"][1::3], strict=True))
    assert drawn[0] == ("2026-03-02", *days.select(pl.col("v_burden_low_pct", "v_burden_high_pct").round(3)).row(0))
    assert len(drawn) == days.height
    unknown = days.with_columns(v_burden_low_pct=None, v_burden_high_pct=None).cast(days.schema)
    assert charts._day_intervals(unknown)["x"] == []


def test_days_without_wear_between_wears_are_shaded(timeline):
    """The thirteen days between the two wears are one shaded stretch."""
    (gap,) = [shape for shape in timeline["layout"]["shapes"] if shape.get("fillcolor") == "--gap"]
    assert (gap["x0"], gap["x1"]) == ("2026-03-06 12:00:00", "2026-03-19 12:00:00")


def test_a_change_of_level_is_marked_on_its_day(timeline):
    """A day on which the burden moved, found from the days alone, is a dashed line in the burden panel."""
    (mark,) = [shape for shape in timeline["layout"]["shapes"] if shape.get("yref") == "y domain"]
    assert (mark["x0"], mark["line"]["dash"]) == ("2026-03-20", "dash")


def test_coupling_is_drawn_where_it_is_known(tables):
    """Each ectopic family with a coupling interval is one mark in its recording's row, with its spread as a bar."""
    coupled = _coupled(tables, tables.of_patient("recordings", CODE))
    figure = charts.coupling(coupled)
    (of_v,) = figure["data"]
    assert figure["layout"]["yaxis"]["ticktext"] == ["2 Mar 2026", "20 Mar 2026"]
    assert [round(place) for place in of_v["y"]] == [0, 0, 1, 1] and len(set(of_v["y"])) == 4
    # Source: the invented families: 470 ms with a spread of 38 ms
    assert (set(of_v["x"]), set(of_v["error_x"]["array"])) == ({470.0}, {19.0})
    plotly.graph_objects.Figure(coloured(figure))


def test_marks_of_the_patient_stand_on_their_local_day(timeline):
    """Each local day with marks is one place on the day axis, with clock times and texts as published."""
    (marked,) = [trace for trace in timeline["data"] if trace["name"] == "patient's marks"]
    # Source: tz database, the Azores are an hour behind UTC in winter: 00:30 UTC on 4 March is 23:30 on the 3rd
    assert dict(zip(marked["x"], marked["text"], strict=True)) == {
        "2026-03-02": "11:00 fluttering; 17:00",
        "2026-03-03": "23:30 dizzy on the stairs",
    }


def test_a_day_of_many_marks_names_the_first_three():
    """However often a button is pressed, the text of a day stays short and says how much it leaves out."""
    pressed = pl.DataFrame(
        {"mark_utc": [datetime.fromisoformat(f"2026-03-02T09:0{at}") for at in range(5)], "mark_text": [""] * 5}
    )
    assert list(by_day(pressed, "UTC").values()) == ["09:00; 09:01; 09:02; 2 more"]


def test_every_patient_stands_before_the_band_that_chance_explains(tables):
    """The cohort figure has one bar from the smallest to the largest ratio of chance and one mark by verdict for each change."""
    changes = tables.whole("changes").filter(pl.col("measure") == "v_burden_pct").sort("change_pct", nulls_last=True)
    band, *marks = cohort_charts.changes_of_all(changes)["data"]
    # Source: the invented changes: chance explains falls to 61 % and rises to 155 %
    assert set(zip(band["base"], band["x"], strict=True)) == {(0.39, 2.16), (None, None)}
    assert sorted(place for trace in marks for place in trace["y"]) == [1, 2, 3]
    assert {trace["name"] for trace in marks} == {"fell beyond chance", "within chance", "rose beyond chance"}


def test_many_patients_stand_side_by_side(tables):
    """More patients than have room for their codes stand in one row of bars, from the largest fall."""
    changes = tables.whole("changes").filter(pl.col("measure") == "v_burden_pct").sort("change_pct", nulls_last=True)
    many = pl.concat([changes] * 20)
    figure = cohort_charts.changes_of_all(many)
    assert figure["data"][0]["orientation"] == "v" and len(figure["data"][0]["x"]) == many.height
    assert cohort_charts.changes_height(many) == figure["layout"]["height"] == 380
    plotly.graph_objects.Figure(coloured(figure))


def test_therapy_text_cannot_carry_markup(tables):
    """Plotly's small markup in a register field stays text."""
    therapies = pl.DataFrame(
        {"therapy_day": [date(2026, 3, 1)], "therapy_kind": ["other"], "therapy_detail": ["<a href='x'>y</a>"]}
    )
    (note,) = charts._therapy_notes(therapies)
    assert "<" not in note["text"]


def test_the_clock_map_has_every_day_and_hour(tables):
    """Days without wear and hours without beats are empty cells, so that all cells are equally wide."""
    (trace,) = charts.clock_map(tables.of_patient("local_hours", CODE))["data"]
    assert len(trace["x"]) == (date(2026, 3, 24) - date(2026, 3, 2)).days + 1
    assert len(trace["z"]) == 24 and trace["z"][3][10] is None


def test_hours_run_on_across_a_clock_change():
    """On the night when clocks go back the hours of a recording stay an hour apart."""
    hours = pl.datetime_range(
        pl.datetime(2026, 10, 24, 22), pl.datetime(2026, 10, 25, 4), "1h", time_unit="us", eager=True
    )
    # Source: tz database, Europe/Berlin leaves summer time on 25 October 2026 at 01:00 UTC
    shown = charts._on_the_clock(hours, "Europe/Berlin", hours[0])
    assert shown[0] == "2026-10-25 00:00:00" and len(set(shown)) == len(shown) == 7
