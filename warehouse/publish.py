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

from warehouse.build import TrendBuild
from warehouse.edition_database import write_database
from warehouse.edition_tables import write_tables
from warehouse.kept import is_whole, write_kept
from warehouse.parts import write_whole
from warehouse.published import DATABASE, MANIFEST, Published

DATABASE_FOR_OLDER_READERS = "burdenline_duckdb1.duckdb"
"""Another name of the database, whose storage version DuckDB 1.2 and later read."""

_PIECES = (DATABASE, DATABASE_FOR_OLDER_READERS, "tables", "site", MANIFEST)


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
        staging.mkdir(parents=True)
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
    """Write an edition into `staging` and give it its name; one that is there and whole is not written again."""
    content = _manifest(build, published, stamp, write_tables(build, staging))
    edition = staging.with_name(hashlib.sha256(content).hexdigest()[:16])
    if edition.exists() and is_whole(Published(published, edition=edition)):
        write_kept(edition, build.grounds, build.handed_on)
        return edition
    write_whole(staging / MANIFEST, content)
    tables = Published(published, edition=staging)
    write_database(tables, staging / DATABASE, build.standing)
    (staging / DATABASE_FOR_OLDER_READERS).symlink_to(DATABASE)
    write_kept(staging, build.grounds, build.handed_on)
    site(tables, staging / "site")
    _settle(staging)
    if edition.exists():
        edition.rename(staging.with_name(".damaged"))
    staging.rename(edition)
    return edition


def _manifest(build: TrendBuild, published: Path, stamp: Mapping[str, Any], tables: dict[str, dict[str, Any]]) -> bytes:
    described = {
        "lake": _lake_from(published, build.lake),
        "fingerprint": build.fingerprint,
        "stamp": dict(stamp),
        "tables": tables,
    }
    return json.dumps(described, indent=1, sort_keys=True).encode()


def _lake_from(published: Path, lake: Path) -> str:
    """Path of the lake as seen from the published folder: a programme folder can be moved as a whole."""
    return Path(os.path.relpath(lake, published)).as_posix()


def _settle(folder: Path) -> None:
    """Bring every new file and folder to the disk, so that a link never leads to what a power cut takes away."""
    for place, folders, files in os.walk(folder, topdown=False):
        paths = [Path(place, name) for name in (*files, *folders)]
        # A file of several names is one of the standing edition, and lies on the disk already.
        for path in (
            path for path in paths if not path.is_symlink() and not (path.is_file() and path.stat().st_nlink > 1)
        ):
            _sync(path)
    _sync(folder)


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _standing(published: Path) -> Path | None:
    link = published / "current"
    return published / link.readlink() if link.is_symlink() else None


def _switch(published: Path, edition: Path) -> None:
    _sync(edition.parent)
    for piece in _PIECES:
        _link(published / piece, Path("current") / piece)
    _link(published / "current", edition.relative_to(published))
    _sync(published)


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
