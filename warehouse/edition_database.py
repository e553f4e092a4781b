"""The database file of an edition: the tables of its Parquet files, and views over parts that are too large to copy.

Written anew from the same files it is the same bytes. Over a standing edition it begins as a copy of that one's, in
which the tables and slices whose files differ are replaced: the rows are then the same, only their order within a
table is not.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterable
from pathlib import Path

import duckdb

from warehouse import schema
from warehouse.database import open_database
from warehouse.dictionary import column_definitions, parts_query
from warehouse.layers import READ_IN_PLACE
from warehouse.published import DATABASE, Published

_STORAGE_VERSION = "v1.2.0"
_SETTINGS = (
    "SET threads = 1",  # several would lay down blocks in the order in which they happen to end
    "SET disabled_compression_methods = 'fsst'",  # it chooses its symbols from a random sample
    "SET checkpoint_threshold = '1KB'",  # the commit writes the tables at once, and no log of them first
)


def write_database(edition: Published, path: Path, before: Published | None = None) -> None:
    """Write the database of an edition whose tables and manifest are there.

    `before` is an edition with the same dictionary and as many slices.
    """
    if before:
        shutil.copyfile(before.edition / DATABASE, path)
    connection = open_database(":memory:")
    for setting in _SETTINGS:
        connection.execute(setting)
    connection.execute(f"SET file_search_path = {_quoted(str(edition.folder))}")
    connection.execute(f"ATTACH {_quoted(str(path))} AS edition (STORAGE_VERSION '{_STORAGE_VERSION}')")
    connection.execute("USE edition")
    connection.execute("BEGIN")
    for name, table in schema.PUBLISHED.items():
        if name in READ_IN_PLACE:
            _make_view(connection, edition, table)
        elif before and name in schema.SLICED:
            _replace_slices(connection, table, before, edition)
        elif not before or _hashes(before, name) != _hashes(edition, name):
            _make_table(connection, table, list(edition.files(name)))
    connection.execute("COMMIT")
    connection.execute("USE memory")
    connection.execute("DETACH edition")
    connection.close()


def _make_view(connection: duckdb.DuckDBPyConnection, edition: Published, table: schema.Table) -> None:
    """View over the parts of a table; without parts a table without rows, because a view needs a file."""
    for kind in ("VIEW", "TABLE"):
        if connection.sql(f"FROM duckdb_{kind.lower()}s() WHERE {kind.lower()}_name = '{table.name}'"):
            connection.execute(f"DROP {kind} {table.name}")
    paths = [f"{edition.manifest['lake']}/{path}" for path in edition.part_paths(table.name)]
    if not paths:
        _make_table(connection, table, [])
        return
    connection.execute(f"CREATE VIEW {table.name} AS {parts_query(table, paths)}")
    connection.execute(_comments(table, "VIEW"))


def _make_table(connection: duckdb.DuckDBPyConnection, table: schema.Table, files: list[Path]) -> None:
    connection.execute(f"CREATE OR REPLACE TABLE {table.name} ({column_definitions(table)})")
    connection.execute(_comments(table, "TABLE"))
    if files:
        order = f" ORDER BY {', '.join(table.key)}" if len(files) > 1 else ""
        connection.execute(f"INSERT INTO {table.name} BY NAME FROM {_rows(files)}{order}")


def _replace_slices(
    connection: duckdb.DuckDBPyConnection, table: schema.Table, before: Published, edition: Published
) -> None:
    owner = "patient_code" if "patient_code" in table.columns else "recording_id"
    slices = zip(before.files(table.name).items(), edition.files(table.name).items(), strict=True)
    for (old, told_before), (new, told) in slices:
        if told_before != told:
            connection.execute(f"DELETE FROM {table.name} WHERE {owner} IN (SELECT {owner} FROM {_rows([old])})")
            connection.execute(f"INSERT INTO {table.name} BY NAME FROM {_rows([new])}")


def _hashes(edition: Published, name: str) -> list[str]:
    return [told["sha256"] for told in edition.files(name).values()]


def _rows(files: Iterable[Path]) -> str:
    return f"read_parquet([{', '.join(_quoted(str(file)) for file in files)}], hive_partitioning = false)"


def _comments(table: schema.Table, kind: str) -> str:
    """Statements that say what the table and each of its columns is; `kind` is TABLE or VIEW."""
    statements = [f"COMMENT ON {kind} {table.name} IS {_quoted(table.grain)}"]
    for column in (schema.COLUMNS[name] for name in table.columns):
        unit = f" [{column.unit}]" if column.unit else ""
        statements.append(f"COMMENT ON COLUMN {table.name}.{column.name} IS {_quoted(column.meaning + unit)}")
    return ";\n".join(statements)


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
