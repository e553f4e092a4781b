"""How this room opens DuckDB: fetches nothing, counts days in no zone of this host, prints no progress."""

from __future__ import annotations

import duckdb

_OFFLINE: dict[str, str | bool | int | float | list[str]] = {
    "autoinstall_known_extensions": "false",
    "autoload_known_extensions": "false",
}


def open_database(path: str, *, read_only: bool = False) -> duckdb.DuckDBPyConnection:
    """Connection to a database file, or to ':memory:'."""
    connection = duckdb.connect(path, read_only=read_only, config=_OFFLINE)
    connection.execute("SET enable_progress_bar = false")
    connection.execute("SET TimeZone = 'UTC'")
    return connection
