"""How the numbers were made, and what every column means."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import polars as pl

from dashboards.tables import Tables

# Written by `python -m tests.benchmarks.development_figures`; holds for one detector version.
DEVELOPMENT_FIGURES = Path(__file__).parent / "development_figures.json"


def context(tables: Tables) -> dict[str, Any]:
    """Return what the methods page shows."""
    fingerprints = tables.whole("fingerprints").sort("is_published", "fingerprint", descending=[True, False])
    return {
        "fingerprints": [row | {"settings": _settings(row["settings_json"])} for row in fingerprints.rows(named=True)],
        "recordings": tables.whole("recordings").height,
        "accuracy": json.loads(DEVELOPMENT_FIGURES.read_text(encoding="utf-8")),
    }


def _settings(settings_json: str | None) -> list[tuple[str, str, Any]]:
    """Return section, name and value of each setting; a flat file has no sections."""
    found = json.loads(settings_json or "{}")
    flat = {name: value for name, value in found.items() if not isinstance(value, dict)}
    sections = {name: value for name, value in found.items() if isinstance(value, dict)} | ({"": flat} if flat else {})
    return [(section, name, value) for section, settings in sections.items() for name, value in settings.items()]


def dictionary_context(tables: Tables) -> dict[str, Any]:
    """Return what the dictionary page shows: the published tables in their order, with their columns."""
    rows = tables.whole("data_dictionary")
    names = rows["table_name"].unique(maintain_order=True)
    return {
        "queries": tables.queries,
        "tables": [(name, rows.filter(pl.col("table_name") == name).rows(named=True)) for name in names],
    }
