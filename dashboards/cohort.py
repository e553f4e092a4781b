"""All patients of the programme side by side: who changed beyond chance, and how many responded."""

from __future__ import annotations

from typing import Any

import polars as pl

from dashboards import addresses, cohort_charts, words
from dashboards.tables import Tables

PAGE = "cohort.html"
TABLES = ("changes", "therapies", "cohort", "visits", "responders")
MEASURE = "v_burden_pct"
FEWEST_DRAWN = 3  # evaluable patients of a kind of therapy: a share of fewer says next to nothing


def context(tables: Tables) -> dict[str, Any]:
    """Return what the cohort page shows."""
    cohort = tables.whole("cohort")
    kinds = cohort.filter(pl.col("measure") == MEASURE)
    drawn = kinds.filter(pl.col("evaluable_patients") >= FEWEST_DRAWN)
    return {
        "sections": [_section(tables, kind) for kind in _by_size(kinds)],
        "visits": _visits(tables),
        "arms": tables.whole("responders").filter(pl.col("measure") == MEASURE).rows(named=True),
        "responders": cohort_charts.responders(drawn) if drawn.height else None,
        "fewest_drawn": FEWEST_DRAWN,
        "cohort": [
            row | {"measure_name": words.MEASURES.get(row["measure"], (row["measure"], "", 0))[0]}
            for row in cohort.rows(named=True)
        ],
    }


def data_files(tables: Tables) -> dict[str, pl.DataFrame]:
    """Return the downloads of the page by name."""
    return {name: tables.whole(name) for name in ("changes", "cohort", "visits", "responders")}


def _visits(tables: Tables) -> list[dict[str, Any]]:
    visits = tables.whole("visits").sort("target_day", "visit", "patient_code")
    return [row | {"page": addresses.patient_page(row["patient_code"])} for row in visits.rows(named=True)]


def _by_size(kinds: pl.DataFrame) -> list[str]:
    """Return the kinds of therapy, the one with most evaluable patients first."""
    ordered = kinds.sort("evaluable_patients", "therapy_kind", descending=[True, False])
    return ordered["therapy_kind"].unique(maintain_order=True).to_list()


def _section(tables: Tables, kind: str) -> dict[str, Any]:
    """Return one kind of therapy: its figures, and the change of each patient."""
    of_kind = tables.whole("therapies").filter(pl.col("therapy_kind") == kind)
    dated = of_kind.select("therapy_id", "therapy_day", "therapy_detail")
    changes = tables.whole("changes").filter(pl.col("measure") == MEASURE).join(dated, on="therapy_id")
    ordered = changes.sort("change_pct", "patient_code", "therapy_id", nulls_last=True)
    cohort = tables.whole("cohort").filter((pl.col("therapy_kind") == kind) & (pl.col("measure") == MEASURE))
    return {
        "kind": kind,
        "figures": cohort.row(0, named=True),
        "chart": cohort_charts.changes_of_all(ordered),
        "height": cohort_charts.changes_height(ordered),
        "changes": [row | {"page": addresses.patient_page(row["patient_code"])} for row in ordered.rows(named=True)],
    }
