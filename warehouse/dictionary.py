"""The column dictionary in the words of SQL, and as the published table that describes all others."""

from __future__ import annotations

from collections.abc import Iterable

import polars as pl

from warehouse import schema


def column_definitions(table: schema.Table) -> str:
    """Columns of a table as in CREATE TABLE."""
    return ", ".join(f"{name} {schema.COLUMNS[name].type}" for name in table.columns)


def typed_query(table: schema.Table, query: str) -> str:
    """A query whose columns are the table's, in order and type, with rows in the order of its key."""
    columns = ", ".join(f"{name}::{schema.COLUMNS[name].type} AS {name}" for name in table.columns)
    return f"SELECT {columns} FROM (\n{query}\n) ORDER BY {', '.join(table.key)}"


def parts_query(table: schema.Table, paths: Iterable[str]) -> str:
    """Query over an explicit list of part files; one recording's rows open only that recording's files."""
    files = ", ".join(f"'{path.replace(chr(39), chr(39) * 2)}'" for path in paths)
    pruned = "true" if table.key[:1] == ("recording_id",) else "false"
    source = f"read_parquet([{files}], hive_partitioning = {pruned}, hive_types_autocast = false)"
    columns = ", ".join(f"{name}::{schema.COLUMNS[name].type} AS {name}" for name in table.columns)
    return f"SELECT {columns} FROM {source}"


def dictionary_frame() -> pl.DataFrame:
    """Rows of the published table `data_dictionary`."""
    rows = [
        (table.name, table.grain, column.name, column.type, column.unit, column.meaning)
        for table in schema.PUBLISHED.values()
        for column in (schema.COLUMNS[name] for name in table.columns)
    ]
    return pl.DataFrame(rows, schema=list(schema.PUBLISHED["data_dictionary"].columns), orient="row")
