"""What people decided and changed: over-readers' agreement and conflicts, and every edit that can move a number."""

from __future__ import annotations

from typing import Any

import polars as pl

from dashboards import addresses
from dashboards.tables import Tables

PAGE = "trail.html"
TABLES = (
    "audit",
    "reader_agreement",
    "reader_conflicts",
    "reviewed",
    "undecided_families",
    "unmet_decisions",
    "recordings",
)
EDITS_SHOWN = 100
UNMET_SHOWN = 100


def context(tables: Tables) -> dict[str, Any]:
    """Return what the page shows."""
    audit = tables.whole("audit").filter(pl.col("change_kind") != "delivery")
    conflicts = tables.whole("reader_conflicts")
    unmet = tables.whole("unmet_decisions").sort("recording_id", "start_utc", "reader_code")
    return {
        "agreement": tables.whole("reader_agreement").rows(named=True),
        "conflicts": [row | {"page": addresses.review_page(row["recording_id"])} for row in conflicts.rows(named=True)],
        "undecided": [
            row | {"page": addresses.review_page(row["recording_id"])}
            for row in tables.whole("undecided_families").rows(named=True)
        ],
        "unmet": [
            row | {"page": addresses.review_page(row["recording_id"])}
            for row in unmet.head(UNMET_SHOWN).rows(named=True)
        ],
        "unmet_count": unmet.height,
        "reviewed": [
            row | {"page": addresses.recording_page(row["recording_id"])}
            for row in tables.whole("reviewed").rows(named=True)
        ],
        "recordings": tables.whole("recordings").height,
        "edits": audit.sort("happened_utc", "change_id", descending=True).head(EDITS_SHOWN).rows(named=True),
        "edits_count": audit.height,
    }


def data_files(tables: Tables) -> dict[str, pl.DataFrame]:
    """Return the downloads of the page by name."""
    return {name: tables.whole(name) for name in TABLES if name != "recordings"}
