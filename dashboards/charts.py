"""Figures as plain plotly.js values (data and layout), drawn in the browser as SVG.

Colours are names of the style sheet's variables ('--v', '--wear'); the page puts in the colour of the scheme in force
when it draws, so one figure serves light, dark and print. No number is computed here that a table does not hold.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import date, datetime, time, timedelta
from itertools import pairwise
from typing import Any, TypedDict
from zoneinfo import ZoneInfo

import polars as pl

from dashboards import marks, words


class Figure(TypedDict):
    """What plotly.js needs to draw one chart."""

    data: list[dict[str, Any]]
    layout: dict[str, Any]


FONT = {"family": "system-ui, sans-serif", "size": 13, "color": "--ink"}
GREY = {"gridcolor": "--line", "linecolor": "--line", "zeroline": False, "tickcolor": "--line"}
CLASS_COLOURS = {"V": "--v", "S": "--s"}


def layout(height: int, **more: Any) -> dict[str, Any]:
    return {
        "height": height,
        "margin": {"l": 58, "r": 14, "t": 34, "b": 46},
        "font": FONT,
        "paper_bgcolor": "rgba(0,0,0,0)",
        "plot_bgcolor": "rgba(0,0,0,0)",
        "hoverlabel": {"bgcolor": "--sheet", "bordercolor": "--line", "font": FONT},
        "legend": {"orientation": "h", "x": 0, "y": 1.0, "yanchor": "bottom", "font": FONT},
        **more,
    }


def axis(title: str, domain: tuple[float, float], **more: Any) -> dict[str, Any]:
    text = {"text": title, "font": FONT, "standoff": 6}
    return {**GREY, "title": text, "domain": list(domain), "rangemode": "tozero", "fixedrange": True, **more}


def timeline(rows: Mapping[str, pl.DataFrame]) -> Figure:
    """One day axis for a patient: burden, hours that carry it, heart rate; therapy marks and gaps run through all.

    `rows` holds the patient's rows of patients, wear_days, therapies, periods, changes, level_shifts and marks by table.
    """
    wear_days, therapies = rows["wear_days"].sort("local_day"), rows["therapies"]
    burden = [_burden_days(wear_days, valid=True), _burden_days(wear_days, valid=False)]
    data = [trace for trace in (_day_intervals(wear_days), *burden) if trace["x"]] + [
        *_wear_bars(wear_days),
        _rate_days(wear_days),
    ]
    data += _mark_days(rows["marks"], rows["patients"]["zone"][0])
    first, last = _span(wear_days, therapies)
    drawn_on = layout(
        520,
        xaxis={**GREY, "type": "date", "range": [str(first), str(last)], "anchor": "y3", "showgrid": True,
               "hoverformat": "%a %-d %b %Y", "tickformat": "%-d %b\n%Y"},
        yaxis=axis("V burden, %", (0.50, 1.0)),
        yaxis2=axis("hours", (0.25, 0.44), **_hours_scale(wear_days)),
        yaxis3=axis("rate, /min", (0.0, 0.19), rangemode="normal", nticks=4),
        yaxis4=_marks_axis((0.45, 0.48)),
        barmode="overlay",
        bargap=0.15,
        hovermode="x unified",
        shapes=[*_gap_shapes(wear_days), *_period_shapes(rows["periods"], rows["changes"]),
                *_shift_shapes(rows["level_shifts"]), *_therapy_shapes(therapies)],
        annotations=_therapy_notes(therapies),
    )  # fmt: skip
    return Figure(data=data, layout=drawn_on)


def _burden_days(wear_days: pl.DataFrame, *, valid: bool) -> dict[str, Any]:
    rows = wear_days.filter((pl.col("is_valid_day") == valid) & pl.col("v_burden_pct").is_not_null())
    marker = {"color": "--v" if valid else "--sheet", "size": 8, "line": {"color": "--v", "width": 1.5}}
    return {
        "type": "scatter",
        "mode": "markers",
        "name": "valid day" if valid else "too few hours",
        "x": _days(rows["local_day"]),
        "y": values(rows["v_burden_pct"], 3),
        "customdata": rows.select("v_beats", "all_beats", pl.col("analysable_h").round(1), _told_interval()).rows(),
        "hovertemplate": "%{y:.2f} %%{customdata[3]}: %{customdata[0]:,} V of %{customdata[1]:,} beats in %{customdata[2]} h"
        "<extra></extra>",
        "marker": marker | {"symbol": "circle"},
        "cliponaxis": False,
    }


def _told_interval() -> pl.Expr:
    """The day's interval as hovering tells it; nothing where there is none."""
    ends = (pl.col(f"v_burden_{end}_pct").round(2).cast(pl.String) for end in ("low", "high"))
    return pl.format(" ({} to {})", *ends).fill_null("").alias("interval")


def _day_intervals(wear_days: pl.DataFrame) -> dict[str, Any]:
    """One thin bar per day: a line from the low to the high end, with a break after each."""
    known = wear_days.drop_nulls("v_burden_low_pct")
    ends = zip(values(known["v_burden_low_pct"], 3), values(known["v_burden_high_pct"], 3), strict=True)
    return {
        "type": "scatter",
        "mode": "lines",
        "name": "95 % interval",
        "x": [place for day in _days(known["local_day"]) for place in (day, day, None)],
        "y": [place for low, high in ends for place in (low, high, None)],
        "line": {"color": "--v", "width": 1.2},
        "hoverinfo": "skip",
        "cliponaxis": False,
    }


def _wear_bars(wear_days: pl.DataFrame) -> list[dict[str, Any]]:
    x = _days(wear_days["local_day"])
    bars = [("worn_h", "worn", "--worn"), ("analysable_h", "analysable", "--wear")]
    return [
        {"type": "bar", "name": name, "x": x, "y": values(wear_days[column], 2), "yaxis": "y2",
         "marker": {"color": colour}, "hovertemplate": f"%{{y:.1f}} h {name}<extra></extra>"}
        for column, name, colour in bars
    ]  # fmt: skip


def _hours_scale(wear_days: pl.DataFrame) -> dict[str, Any]:
    """Show the whole day as soon as a patch was worn for half of one."""
    if wear_days.filter(pl.col("worn_h") > 12).is_empty():
        return {"nticks": 4}
    return {"range": [0, 25], "tickvals": [0, 8, 16, 24]}


def _rate_days(wear_days: pl.DataFrame) -> dict[str, Any]:
    rows = wear_days.filter(pl.col("mean_rate_bpm").is_not_null())
    return {
        "type": "scatter",
        "mode": "markers",
        "name": "heart rate",
        "x": _days(rows["local_day"]),
        "y": values(rows["mean_rate_bpm"], 1),
        "yaxis": "y3",
        "marker": {"color": "--rate", "size": 7, "symbol": "diamond"},
        "cliponaxis": False,
        "hovertemplate": "%{y:.0f} /min<extra></extra>",
    }


def _mark_days(of_patient: pl.DataFrame, zone: str) -> Iterable[dict[str, Any]]:
    """Yield the trace of the days with marks of the patient, if any; hovering tells when and what."""
    days = marks.by_day(of_patient, zone)
    if days:
        told = [as_text(said, longest=120) for said in days.values()]
        yield _marks_trace([str(day) for day in days], told)


def _marks_trace(x: list[str], told: list[str]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "markers",
        "name": "patient's marks",
        "x": x,
        "y": [0] * len(x),
        "yaxis": "y4",
        "text": told,
        "marker": {"color": "--ink", "size": 9, "symbol": "triangle-down"},
        "cliponaxis": False,
        "hovertemplate": "%{text}<extra>marked</extra>",
    }


def _marks_axis(domain: tuple[float, float]) -> dict[str, Any]:
    """A band without a scale, in which only the place along the days tells something."""
    return {"domain": list(domain), "range": [-1, 1], "visible": False, "fixedrange": True}


def _span(wear_days: pl.DataFrame, therapies: pl.DataFrame) -> tuple[datetime, datetime]:
    known = [*wear_days["local_day"], *therapies["therapy_day"].drop_nulls()]
    half_day = timedelta(hours=18)
    return _midnight(min(known)) - half_day, _midnight(max(known)) + half_day


def _midnight(day: date) -> datetime:
    return datetime.combine(day, time())  # a local day: the axes of plotly have no zone


def _gap_shapes(wear_days: pl.DataFrame) -> Iterable[dict[str, Any]]:
    """Shade the days between two wear days on which nothing was worn."""
    half_day = timedelta(hours=12)
    for before, after in pairwise(wear_days["local_day"].sort().to_list()):
        if (after - before).days > 1:
            yield {"type": "rect", "layer": "below", "xref": "x", "yref": "paper", "y0": 0, "y1": 1,
                   "x0": str(_midnight(before) + half_day), "x1": str(_midnight(after) - half_day),
                   "line": {"width": 0}, "fillcolor": "--gap"}  # fmt: skip


def _period_shapes(periods: pl.DataFrame, changes: pl.DataFrame) -> Iterable[dict[str, Any]]:
    """Draw the values that the verdict compares as level lines over the days that they stand for."""
    values = changes.filter(pl.col("measure") == "v_burden_pct")
    spans = periods.join(values.select("therapy_id", "baseline_value", "after_value"), on="therapy_id")
    for row in spans.filter(pl.col("period") != "settling").iter_rows(named=True):
        value = row[f"{row['period']}_value"]
        if value is not None and row["first_day"] is not None:
            yield {"type": "line", "xref": "x", "yref": "y", "x0": str(row["first_day"]), "x1": str(row["last_day"]),
                   "y0": value, "y1": value, "line": {"color": "--v", "width": 2, "dash": "dot"}}  # fmt: skip


def _shift_shapes(level_shifts: pl.DataFrame) -> Iterable[dict[str, Any]]:
    """Mark the days on which the burden moved to another level, found without knowing the therapy day."""
    for moment in level_shifts["local_day"]:
        yield {"type": "line", "xref": "x", "yref": "y domain", "x0": str(moment), "x1": str(moment), "y0": 0, "y1": 1,
               "line": {"color": "--even", "width": 1.2, "dash": "dash"}}  # fmt: skip


def _therapy_shapes(therapies: pl.DataFrame) -> Iterable[dict[str, Any]]:
    for moment in therapies["therapy_day"].drop_nulls():
        yield {"type": "line", "xref": "x", "yref": "paper", "x0": str(moment), "x1": str(moment), "y0": 0, "y1": 1,
               "line": {"color": "--therapy", "width": 1.5}}  # fmt: skip


def _therapy_notes(therapies: pl.DataFrame) -> list[dict[str, Any]]:
    rows = therapies.drop_nulls("therapy_day").sort("therapy_day").iter_rows(named=True)
    font = {**FONT, "color": "--therapy"}
    return [
        {"x": str(row["therapy_day"]), "y": 0.995 - 0.055 * (order % 3), "xref": "x", "yref": "paper",
         "xanchor": "left", "yanchor": "top", "xshift": 4, "showarrow": False, "font": font,
         "text": as_text(words.therapy(row["therapy_kind"], row["therapy_detail"]))}
        for order, row in enumerate(rows)
    ]  # fmt: skip


def as_text(words_of_others: str, longest: int = 40) -> str:
    """Plotly reads a small markup in its texts; text from a register or a device must stay text, and short."""
    short = words_of_others if len(words_of_others) <= longest else words_of_others[: longest - 1] + "…"
    return short.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def clock_map(local_hours: pl.DataFrame) -> Figure:
    """Day across, clock hour down, colour for burden; an hour without an analysable beat stays empty."""
    span = local_hours.select(pl.date_range(pl.col("local_day").min(), pl.col("local_day").max()))
    day_list = span.to_series().to_list()  # unworn days too, so that every column is one day wide
    cells = {(row[0], row[1]): row[2:] for row in local_hours.select(
        "local_day", "clock_hour", pl.col("v_burden_pct").round(3), "v_beats", "all_beats",
        (pl.col("analysable_s") / 60).round(0).cast(pl.Int32)).iter_rows()}  # fmt: skip
    grid = [[cells.get((day, hour), (None, None, None, None)) for day in day_list] for hour in range(24)]
    trace = {
        "type": "heatmap",
        "x": [str(day) for day in day_list],
        "y": list(range(24)),
        "z": [[cell[0] for cell in row] for row in grid],
        "customdata": [[cell[1:] for cell in row] for row in grid],
        "colorscale": [[0, "--heat-0"], [0.25, "--heat-1"], [0.5, "--heat-2"], [0.75, "--heat-3"], [1, "--heat-4"]],
        "zmin": 0,
        "xgap": 1,
        "ygap": 1,
        "hoverongaps": False,
        "hovertemplate": "%{x|%a %-d %b %Y}, %{y}:00–%{y}:59: %{z:.2f} %<br>"
        "%{customdata[0]:,} V of %{customdata[1]:,} beats in %{customdata[2]} analysable min<extra></extra>",
        "colorbar": {"title": {"text": "%", "side": "top"}, "thickness": 10, "outlinewidth": 0, "len": 1},
    }
    drawn_on = layout(
        380,
        xaxis={**GREY, "type": "date", "tickformat": "%-d %b\n%Y", "showgrid": False, "fixedrange": True},
        yaxis=axis("clock hour", (0, 1), autorange="reversed", tickvals=list(range(0, 24, 3)), rangemode="normal",
                    showgrid=False),
    )  # fmt: skip
    drawn_on["margin"] = {**drawn_on["margin"], "t": 12}
    return Figure(data=[trace], layout=drawn_on)


def coupling(coupled: pl.DataFrame) -> Figure:
    """Coupling intervals, a row for each recording: a mark per family at its mean, a bar as long as its spread."""
    ordered = coupled.with_columns(
        row=pl.col("recording_id").rle_id().cast(pl.Float64),
        place=pl.int_range(pl.len()).over("recording_id"),
    )
    ordered = ordered.with_columns(row=pl.col("row") + 0.16 * (pl.col("place") - 2).clip(-2, 2))
    groups = ordered.partition_by("family_class", as_dict=True, maintain_order=True)
    starts = coupled.unique("recording_id", keep="first", maintain_order=True)["start_day"]
    drawn_on = layout(
        coupling_height(coupled),
        xaxis=axis("from the beat before, ms", (0, 1), rangemode="normal"),
        yaxis={**GREY, "range": [len(starts) - 0.5, -0.5], "tickvals": list(range(len(starts))),
               "ticktext": [words.day(day) for day in starts], "showgrid": False, "fixedrange": True},
        hovermode="closest",
        shapes=[{"type": "line", "xref": "paper", "x0": 0, "x1": 1, "y0": row - 0.5, "y1": row - 0.5,
                 "line": {"color": "--line", "width": 1}} for row in range(1, len(starts))],
    )  # fmt: skip
    drawn_on["margin"] = {**drawn_on["margin"], "l": 96}
    return Figure(data=[_coupling_marks(str(key[0]), rows) for key, rows in groups.items()], layout=drawn_on)


def coupling_height(coupled: pl.DataFrame) -> int:
    """Height of the coupling figure: a row for each recording, lower rows where there are many."""
    rows = coupled["recording_id"].n_unique()
    return 96 + rows * (84 if rows <= 8 else 44)


def _coupling_marks(beat_class: str, rows: pl.DataFrame) -> dict[str, Any]:
    """One mark per family, its area by the number of beats, and its spread as a bar around it."""
    largest = 24
    most = max(rows["beat_count"].to_list(), default=1)
    colour = CLASS_COLOURS.get(beat_class, "--f")
    return {
        "type": "scatter",
        "mode": "markers",
        "name": f"families of {beat_class} beats",
        "x": values(rows["mean_coupling_ms"], 0),
        "y": values(rows["row"], 2),
        "customdata": rows.select("family", "beat_count", pl.col("coupling_spread_ms").round(0)).rows(),
        "hovertemplate": "family %{customdata[0]}: %{x} ms, spread %{customdata[2]} ms, %{customdata[1]:,} beats"
        "<extra></extra>",
        "error_x": {"type": "data", "array": values(rows["coupling_spread_ms"] / 2, 1), "color": colour, "width": 0,
                    "thickness": 1.5},
        "marker": {"color": colour, "opacity": 0.8, "size": rows["beat_count"].to_list(), "sizemode": "area",
                   "sizeref": 2 * max(most, 1) / largest**2, "sizemin": 4},
        "cliponaxis": False,
    }  # fmt: skip


def wearing(hours: pl.DataFrame, of_patient: pl.DataFrame, zone: str) -> Figure:
    """Hour by hour through one recording: minutes that could be analysed, ectopic beats, heart rate, patient's marks."""
    hours = hours.upsample("hour_utc", every="1h")  # an hour without samples is a gap, not a step
    x = _on_the_clock(hours["hour_utc"], zone, hours["hour_utc"][0])
    middle = 30 * 60 * 1000
    minutes = [
        ("recorded_s", "recorded", "--gap"),
        ("worn_s", "worn", "--worn"),
        ("analysable_s", "analysable", "--wear"),
    ]
    data: list[dict[str, Any]] = [
        {"type": "bar", "name": name, "x": x, "y": values(hours[column] / 60, 1), "yaxis": "y2", "offset": 0,
         "width": 2 * middle, "marker": {"color": colour}, "hovertemplate": f"%{{y:.0f}} min {name}<extra></extra>"}
        for column, name, colour in minutes
    ]  # fmt: skip
    data += [_hourly_beats(hours, x, beat_class, middle * place, middle) for place, beat_class in enumerate(("V", "S"))]
    data.append(
        {"type": "scatter", "mode": "lines+markers", "name": "mean heart rate", "x": x,
         "y": values(hours["mean_rate_bpm"], 1), "yaxis": "y3", "marker": {"color": "--rate", "size": 6, "symbol": "diamond"},
         "line": {"color": "--rate", "width": 1.5, "shape": "hv"}, "connectgaps": False,
         "hovertemplate": "%{y:.0f} /min<extra></extra>"}
    )  # fmt: skip
    if of_patient.height:
        told = [as_text(text) for text in of_patient["mark_text"]]
        data.append(_marks_trace(_on_the_clock(of_patient["mark_utc"], zone, hours["hour_utc"][0]), told))
    drawn_on = layout(
        480,
        xaxis={**GREY, "type": "date", "anchor": "y3", "hoverformat": "%a %-d %b, %H h", "tickformat": "%H h\n%-d %b"},
        yaxis=axis("beats in the hour", (0.54, 1.0)),
        yaxis2=axis("minutes", (0.27, 0.47), range=[0, 61], tickvals=[0, 30, 60]),
        yaxis3=axis("rate, /min", (0.0, 0.20), rangemode="normal", nticks=4),
        yaxis4=_marks_axis((0.485, 0.515)),
        barmode="overlay",
        hovermode="x unified",
    )
    return Figure(data=data, layout=drawn_on)


def _hourly_beats(hours: pl.DataFrame, x: list[str], beat_class: str, offset: int, width: int) -> dict[str, Any]:
    return {
        "type": "bar",
        "name": f"{beat_class} beats",
        "x": x,
        "y": hours[f"{beat_class.lower()}_beats"].to_list(),
        "offset": offset,
        "width": width,
        "marker": {"color": CLASS_COLOURS[beat_class]},
        "customdata": hours["all_beats"].to_list(),
        "hovertemplate": f"%{{y:,}} {beat_class} of %{{customdata:,}} beats<extra></extra>",
    }


def _on_the_clock(instants_utc: pl.Series, zone: str, first_utc: datetime) -> list[str]:
    """Return instants on the local clock of the first hour; the clock is not turned when daylight saving changes."""
    first = words.local_time(first_utc, zone)
    offset = first.utcoffset() or ZoneInfo(zone).utcoffset(None) or timedelta(0)
    return [str(instant + offset) for instant in instants_utc]


def _days(series: pl.Series) -> list[str]:
    return [str(day) for day in series]


def values(series: pl.Series, digits: int) -> list[float | None]:
    return series.cast(pl.Float64).fill_nan(None).round(digits).to_list()
