"""Figures over all patients of a programme; see charts.py for what a figure is."""

from __future__ import annotations

import math
from typing import Any

import polars as pl

from dashboards import words
from dashboards.charts import GREY, Figure, as_text, axis, layout, values

SMALLEST, LARGEST = 0.01, 100.0  # of the ratios that are drawn; what lies beyond stands at the edge
RATIO_TICKS = {
    0.01: "1/100",
    0.03: "1/30",
    0.1: "1/10",
    0.3: "1/3",
    1: "same",
    3: "3 ×",
    10: "10 ×",
    30: "30 ×",
    100: "100 ×",
}


MOST_NAMED = 40
"""Up to so many patients have a row with their code each; more stand side by side without."""


def changes_height(changes: pl.DataFrame) -> int:
    """Height of the figure of all changes."""
    return 96 + 32 * changes.height if changes.height <= MOST_NAMED else 380


def changes_of_all(changes: pl.DataFrame) -> Figure:
    """Each patient's ratio of after to before, sorted, before the band that chance explains for that patient."""
    is_named = changes.height <= MOST_NAMED
    ratio_axis, place_axis = ("x", "y") if is_named else ("y", "x")
    place = list(range(1, changes.height + 1))
    limits = changes.select(
        low=(1 - pl.col("chance_fall_limit_pct") / 100).clip(SMALLEST, LARGEST),
        high=(1 + pl.col("chance_rise_limit_pct") / 100).clip(SMALLEST, LARGEST),
    )
    band = {
        "type": "bar",
        "name": "explained by chance",
        "orientation": "h" if is_named else "v",
        place_axis: place,
        ratio_axis: values(limits["high"] - limits["low"], 4),
        "base": values(limits["low"], 4),
        "marker": {"color": "--worn"},
        "hoverinfo": "skip",
    }
    points = [_verdict_points(changes, place, verdict, ratio_axis, place_axis) for verdict in words.VERDICTS]
    ratios = axis("", (0, 1), type="log", rangemode="normal", tickvals=list(RATIO_TICKS),
                  ticktext=list(RATIO_TICKS.values()), range=_ratio_range(limits, changes["ratio"]))  # fmt: skip
    places = {**GREY, "showgrid": False, "fixedrange": True, "range": [0.4, changes.height + 0.6]}
    if is_named:
        codes = [as_text(code, longest=16) for code in changes["patient_code"]]
        places |= {"range": [changes.height + 0.6, 0.4], "tickvals": place, "ticktext": codes}
    else:
        places |= {"title": {"text": "patients, from the largest fall"}, "showticklabels": False}
    same = {f"{ratio_axis}0": 1, f"{ratio_axis}1": 1, f"{place_axis}0": 0, f"{place_axis}1": 1}
    drawn_on = layout(
        changes_height(changes),
        **{f"{ratio_axis}axis": ratios, f"{place_axis}axis": places},
        bargap=0.35,
        hovermode="closest",
        shapes=[{"type": "line", f"{place_axis}ref": "paper", **same, "line": {"color": "--ink", "width": 1}}],
    )
    if is_named:
        drawn_on["margin"] = {**drawn_on["margin"], "l": 130}
    return Figure(data=[band, *(trace for trace in points if trace["x"])], layout=drawn_on)


def _ratio_range(limits: pl.DataFrame, ratios: pl.Series) -> list[float]:
    """Ends of the logarithmic axis: all that is drawn, and never less than from a fourth to four times."""
    drawn = pl.concat([limits["low"], limits["high"], ratios.clip(SMALLEST, LARGEST)]).drop_nulls().to_list()
    return [math.log10(min([0.25, *drawn])) - 0.06, math.log10(max([4.0, *drawn])) + 0.06]


VERDICT_MARKS = {
    "fell_beyond_chance": ("--fell", "triangle-down"),
    "rose_beyond_chance": ("--rose", "triangle-up"),
    "within_chance": ("--even", "circle"),
    "too_little_wear": ("--few", "circle-open"),
}


def _verdict_points(
    changes: pl.DataFrame, place: list[int], verdict: str, ratio_axis: str, place_axis: str
) -> dict[str, Any]:
    colour, symbol = VERDICT_MARKS[verdict]
    known = pl.col("ratio").is_not_null()
    rows = changes.with_columns(place=pl.Series(place, dtype=pl.Int64)).filter((pl.col("verdict") == verdict) & known)
    return {
        "type": "scatter",
        "mode": "markers",
        "name": words.VERDICTS[verdict][1],
        place_axis: rows["place"].to_list(),
        ratio_axis: values(rows["ratio"].clip(SMALLEST, LARGEST), 4),
        "customdata": [
            [as_text(code), round(change, 1)] for code, change in rows.select("patient_code", "change_pct").rows()
        ],
        "hovertemplate": "%{customdata[0]}: %{customdata[1]:+} %<extra></extra>",
        "marker": {"color": colour, "symbol": symbol, "size": 11},
    }


KIND_COLOURS = ("--link", "--v", "--therapy", "--few", "--s")


def responders(cohort: pl.DataFrame) -> Figure:
    """Share of responders by the fall that counts as response, with its interval, for each kind of therapy."""
    kinds = zip(cohort["therapy_kind"].unique().sort(), KIND_COLOURS, strict=False)
    data = [
        _response(cohort.filter(pl.col("therapy_kind") == kind).sort("limit_pct"), kind, colour, 0.6 * order)
        for order, (kind, colour) in enumerate(kinds)
    ]
    drawn_on = layout(
        380,
        xaxis={**GREY, "title": {"text": "fall that counts as response, %"}, "fixedrange": True},
        yaxis=axis("responders, %", (0, 1), range=[0, 103]),
        hovermode="closest",
    )
    return Figure(data=data, layout=drawn_on)


def _response(rows: pl.DataFrame, kind: str, colour: str, shift: float) -> dict[str, Any]:
    """One kind of therapy, drawn `shift` to the right so that intervals do not lie upon each other."""
    return {
        "type": "scatter",
        "mode": "markers+lines",
        "name": words.plain(kind),
        "x": [limit + shift for limit in rows["limit_pct"]],
        "y": values(rows["responder_pct"], 2),
        "error_y": {
            "type": "data",
            "symmetric": False,
            "color": colour,
            "array": values(rows["responder_pct_high"] - rows["responder_pct"], 2),
            "arrayminus": values(rows["responder_pct"] - rows["responder_pct_low"], 2),
        },
        "line": {"color": colour, "dash": "dot"},
        "marker": {"color": colour, "size": 9},
        "customdata": rows.select("responders", "evaluable_patients", "limit_pct").rows(),
        "hovertemplate": "fall of at least %{customdata[2]} %: %{customdata[0]} of %{customdata[1]} patients"
        "<extra></extra>",
    }
