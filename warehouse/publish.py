"""Publication: a complete edition is written beside the standing one, then one link is switched.

    published/
      burdenline.duckdb, burdenline_duckdb1.duckdb, tables/, site/, manifest.json   links into current/
      current                                                                       link to the edition that stands
      .editions/<id>/                                                               the edition itself, never changed

Replacing the link `current` switches database, tables and pages in one step, so a reader never meets half of each, and
a killed run leaves either the old or the new edition standing. The edition's id is the hash of its manifest: the same
tables with the same stamp are the same edition, and nothing is switched then. The edition before stays for readers
that are still in it.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import duckdb
import polars as pl

from warehouse import schema
from warehouse.build import READ_IN_PLACE, TrendBuild, column_definitions, parts_query
from warehouse.database import open_database
from warehouse.kept import GROUNDS
from warehouse.parts import file_sha256, write_whole
from warehouse.published import DATABASE, MANIFEST, Published

DATABASE_FOR_OLDER_READERS = "burdenline_duckdb1.duckdb"
"""Another name of the database, whose storage version DuckDB 1.2 and later read."""

_STORAGE_VERSION = "v1.2.0"
_PIECES = (DATABASE, DATABASE_FOR_OLDER_READERS, "tables", "site", MANIFEST)
_ROW_GROUP_ROWS = 8192  # small, so that one recording's rows are read without the others'


class PublishError(RuntimeError):
    """The publication cannot be switched; the message says why and what to do. The old one stays."""


def publish(
    build: TrendBuild,
    published: Path,
    *,
    site: Callable[[Published, Path], None],
    stamp: Mapping[str, Any],
) -> bool:
    """Write a new edition of database, tables and pages and make it the standing one.

    `site(tables, folder)` writes the pages of the new edition into `folder`. `stamp` holds everything that the pages
    depend on beside the tables (programme name, version, settings), as plain values. Returns False, and switches
    nothing, when the standing edition has the same tables and stamp.
    """
    staging = published / ".editions" / ".staging"
    before = _standing(published)
    try:
        shutil.rmtree(staging, ignore_errors=True)
        (staging / "tables").mkdir(parents=True)
        edition = _write_edition(build, published, staging, site, stamp)
        if before != edition:
            _switch(published, edition)
    except (OSError, duckdb.Error, pl.exceptions.ComputeError) as problem:
        shutil.rmtree(staging, ignore_errors=True)
        raise PublishError(
            f"the publication could not be written to {published}: {' '.join(str(problem).split())}; "
            "the one before stays. Free space or restore write access, then run again"
        ) from problem
    _remove_editions(staging.parent, keep={edition, before})
    return before != edition


def _write_edition(
    build: TrendBuild,
    published: Path,
    staging: Path,
    site: Callable[[Published, Path], None],
    stamp: Mapping[str, Any],
) -> Path:
    """Write an edition into `staging` and give it its name; one that is there already is not written again."""
    manifest = _manifest(build, published, stamp, write_tables(build, staging / "tables"))
    content = json.dumps(manifest, indent=1, sort_keys=True).encode()
    edition = staging.with_name(hashlib.sha256(content).hexdigest()[:16])
    if not edition.exists():
        _write_database(build, published, staging / DATABASE)
        (staging / DATABASE_FOR_OLDER_READERS).symlink_to(DATABASE)
        write_whole(staging / MANIFEST, content)
        site(Published(published, edition=staging), staging / "site")
        staging.rename(edition)
    write_whole(edition / GROUNDS, json.dumps(build.grounds, indent=1, sort_keys=True).encode())
    return edition


def _manifest(
    build: TrendBuild, published: Path, stamp: Mapping[str, Any], tables: dict[str, dict[str, Any]]
) -> dict[str, Any]:
    return {
        "lake": _lake_from(published, build.lake),
        "fingerprint": build.fingerprint,
        "stamp": dict(stamp),
        "tables": tables,
    }


def _lake_from(published: Path, lake: Path) -> str:
    """Path of the lake as seen from the published folder: a programme folder can be moved as a whole."""
    return Path(os.path.relpath(lake, published)).as_posix()


def write_tables(build: TrendBuild, folder: Path) -> dict[str, dict[str, Any]]:
    """Write the tables of a build that are copied as Parquet files; returns rows and SHA-256 of each."""
    described = {}
    for name in schema.PUBLISHED:
        if name not in READ_IN_PLACE:
            frame = build.frame(name)
            path = folder / f"{name}.parquet"
            frame.rechunk().write_parquet(path, compression="zstd", row_group_size=_ROW_GROUP_ROWS)
            described[name] = {"rows": frame.height, "sha256": file_sha256(path)}
    return described


def _write_database(build: TrendBuild, published: Path, path: Path) -> None:
    connection = open_database(":memory:")
    connection.execute(f"SET file_search_path = {_quoted(str(published.resolve()))}")
    connection.execute(f"ATTACH {_quoted(str(path))} AS edition (STORAGE_VERSION '{_STORAGE_VERSION}')")
    connection.execute("USE edition")
    connection.execute("BEGIN")
    for name, table in schema.PUBLISHED.items():
        paths = _paths_in_place(build, published, name)
        if paths:
            connection.execute(f"CREATE VIEW {name} AS {parts_query(table, paths)}")
        else:
            connection.execute(f"CREATE TABLE {name} ({column_definitions(table)})")
            if name not in READ_IN_PLACE:
                rows = _quoted(str(path.parent / "tables" / f"{name}.parquet"))
                connection.execute(f"INSERT INTO {name} BY NAME FROM read_parquet({rows}, hive_partitioning = false)")
        connection.execute(_comments(table, "VIEW" if paths else "TABLE"))
    connection.execute("COMMIT")
    connection.execute("USE memory")
    connection.execute("DETACH edition")
    connection.close()


def _paths_in_place(build: TrendBuild, published: Path, name: str) -> list[str]:
    """Paths, as seen from the published folder, of the parts of a table that is read in place; [] for all others."""
    lake = _lake_from(published, build.lake)
    return [f"{lake}/{part.path}" for part in build.parts if part.table == name and name in READ_IN_PLACE]


def _comments(table: schema.Table, kind: str) -> str:
    """Statements that say what the table and each of its columns is; `kind` is TABLE or VIEW."""
    statements = [f"COMMENT ON {kind} {table.name} IS {_quoted(table.grain)}"]
    for column in (schema.COLUMNS[name] for name in table.columns):
        unit = f" [{column.unit}]" if column.unit else ""
        statements.append(f"COMMENT ON COLUMN {table.name}.{column.name} IS {_quoted(column.meaning + unit)}")
    return ";\n".join(statements)


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"


def _standing(published: Path) -> Path | None:
    link = published / "current"
    return published / link.readlink() if link.is_symlink() else None


def _switch(published: Path, edition: Path) -> None:
    for piece in _PIECES:
        _link(published / piece, Path("current") / piece)
    _link(published / "current", edition.relative_to(published))


def _link(link: Path, target: Path) -> None:
    if link.is_symlink() and link.readlink() == target:
        return
    if link.exists() and not link.is_symlink():
        raise PublishError(f"{link} is not a link that a publication made; move it away and run again")
    fresh = link.with_name(f".link-{link.name}")
    fresh.unlink(missing_ok=True)
    try:
        fresh.symlink_to(target)
    except OSError as problem:
        raise PublishError(f"{link.parent} cannot hold links ({problem.strerror}); use a folder that can") from problem
    fresh.replace(link)


def _remove_editions(editions: Path, *, keep: set[Path | None]) -> None:
    for edition in editions.iterdir():
        if edition not in keep:
            shutil.rmtree(edition)
