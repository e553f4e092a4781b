"""How this room opens DuckDB (it fetches nothing, follows no zone of this host, prints no progress) and gives it frames."""

from __future__ import annotations

import duckdb
import polars as pl

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


class ArrowStream:
    """Hands a polars frame to DuckDB through the Arrow C interface, which needs no pyarrow."""

    def __init__(self, frame: pl.DataFrame) -> None:
        self._frame = frame

    def __arrow_c_stream__(self, requested_schema: object = None) -> object:
        """Arrow stream of the frame."""
        return self._frame.__arrow_c_stream__(requested_schema)
