"""Claims about the published tables: the SQL files of `checks/`, each named as what it claims, and the unique keys."""

from __future__ import annotations

from collections.abc import Callable
from importlib import resources
from typing import NamedTuple

import polars as pl

from warehouse import schema
from warehouse.layers import READ_IN_PLACE


class Failure(NamedTuple):
    """A claim about the tables that does not hold, with the rows that contradict it."""

    claim: str
    rows: pl.DataFrame


def claims(made: Callable[[str], str]) -> dict[str, str]:
    """Queries by the name of their claim; a returned row contradicts it.

    `made` gives the name under which the rows of a table stand that are asked for their key.
    """
    files = sorted(resources.files("warehouse").joinpath("checks").iterdir(), key=lambda file: file.name)
    queries = {file.name.removesuffix(".sql"): file.read_text(encoding="utf-8") for file in files}
    for name, table in schema.PUBLISHED.items():
        if name not in READ_IN_PLACE:
            key = ", ".join(table.key)
            query = f"SELECT {key} FROM {made(name)} GROUP BY {key} HAVING count(*) > 1"
            queries[f"{name}_has_one_row_per_key"] = query
    return queries
