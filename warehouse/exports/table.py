"""Published tables as CSV or Parquet files, with their dictionary and where they come from."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import polars as pl

from warehouse import schema
from warehouse.exports.provenance import provenance
from warehouse.layers import READ_IN_PLACE
from warehouse.published import Published

TREND_TABLES = tuple(name for name in schema.PUBLISHED if name not in READ_IN_PLACE)


def export_csv(published: Published, folder: Path, tables: Sequence[str] = TREND_TABLES) -> list[Path]:
    """Write each table as comma-separated values in UTF-8; returns the files.

    Instants are ISO 8601 with Z, a missing value is an empty field, lists are their items separated by blanks.
    """
    return _export(published, folder, tables, "csv")


def export_parquet(published: Published, folder: Path, tables: Sequence[str] = TREND_TABLES) -> list[Path]:
    """Write each table as one Parquet file; returns the files."""
    return _export(published, folder, tables, "parquet")


def _export(published: Published, folder: Path, tables: Sequence[str], form: str) -> list[Path]:
    folder.mkdir(parents=True, exist_ok=True)
    files = []
    for name in tables:
        path, rows = folder / f"{name}.{form}", published.scan(name)
        if form == "csv":
            rows.with_columns(_as_text(name)).sink_csv(path)
        else:
            rows.sink_parquet(path, compression="zstd")
        files.append(path)
    dictionary = published.table("data_dictionary").filter(pl.col("table_name").is_in(list(tables)))
    dictionary.write_csv(folder / "dictionary.csv")
    (folder / "README.txt").write_text("\n".join([*provenance(published).lines(), ""]), encoding="utf-8")
    return [*files, folder / "dictionary.csv", folder / "README.txt"]


def _as_text(name: str) -> list[pl.Expr]:
    """Expressions for the columns that CSV cannot hold as they are."""
    columns = [schema.COLUMNS[column] for column in schema.PUBLISHED[name].columns]
    lists = [pl.col(c.name).cast(pl.List(pl.String)).list.join(" ") for c in columns if c.type.endswith("[]")]
    instants = [pl.col(c.name).dt.strftime("%Y-%m-%dT%H:%M:%S%.6fZ") for c in columns if c.type == "TIMESTAMP"]
    return lists + instants
