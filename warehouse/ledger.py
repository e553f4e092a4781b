"""The ledger: which parts of the lake are in force. One Delta table, one transaction per commit, many committers.

Every commit appends rows for the loads it names; a load is the set of parts of one table, key and fingerprint, so that
the results of two detector versions can stand side by side. The rows of a load's latest commit are in force, older ones
are history. A row's `commit` is the Delta version that brought it: a commit is
only accepted as exactly the next version, so two committers can never overwrite each other; the slower one looks again.
Rows that are history are dropped when the table is written anew every COMPACT_FILES commits.
"""

from __future__ import annotations

import os
import time
from collections.abc import Collection, Mapping, Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path
from typing import NamedTuple

import polars as pl
from deltalake import CommitProperties, DeltaTable, write_deltalake
from deltalake.exceptions import DeltaError, TableNotFoundError

from warehouse import layout, schema
from warehouse.cache import refresh, store_of
from warehouse.layout import check_layout, found_layout, note_layout, refuse_missing_lake
from warehouse.owner import refuse_other
from warehouse.parts import Part, file_sha256
from warehouse.store import Store, StoreError

COMPACT_FILES = 40
_PATTERN_CHARACTERS = "*?[]{}%"

_ROW_SCHEMA: dict[str, pl.DataType] = {
    "commit": pl.Int64(),
    "table": pl.String(),
    "key": pl.String(),
    "path": pl.String(),  # NULL: the load was withdrawn
    "sha256": pl.String(),
    "rows": pl.Int64(),
    "bytes": pl.Int64(),
    "fingerprint": pl.String(),
    "segment": pl.Int16(),
    "block": pl.Int32(),
}


class LedgerError(RuntimeError):
    """The ledger cannot be opened or written; the message says what was found and what to do."""


class Damage(NamedTuple):
    """A part in force whose file is not what was landed."""

    path: str
    problem: str


class Ledger:
    """The parts in force of one lake. Opening a lake that has none yet makes an empty ledger."""

    def __init__(self, lake: Path) -> None:
        self._lake = lake
        self._store = store_of(lake)
        self._delta = _open_or_create(lake, self._store)
        self._rows: tuple[int, pl.DataFrame] = (-1, pl.DataFrame(schema=_ROW_SCHEMA))

    @property
    def version(self) -> int:
        """Number of the latest commit, whoever made it."""
        with _told_by(self._store):
            self._delta.update_incremental()
        return self._delta.version()

    def parts(self, table: str | None = None, key: str | None = None) -> list[Part]:
        """Parts in force, of one table and one key where given, ordered by table, key, segment, block and path."""
        rows = _in_force(self._read())
        if table is not None:
            rows = rows.filter(pl.col("table") == table)
        if key is not None:
            rows = rows.filter(pl.col("key") == key)
        return [Part(*row) for row in rows.select(Part._fields).iter_rows()]

    def commit(self, loads: Mapping[tuple[str, str], Sequence[Part]], *, note: str = "") -> int:
        """Make the named loads hold exactly the given parts, all at once; `loads` maps (table, key) to parts.

        Parts of the same table and key under another fingerprint stay; an empty sequence withdraws those of every
        fingerprint. Other loads stay as they are. Returns the number of the commit. When another committer was faster,
        it is tried again on top of theirs. Where the lake has a store its parts are put there first. Raises LedgerError for
        parts of another load and for parts without a file, StoreError for what the store does not take.
        """
        self._check(loads)
        if self._store:
            self._store.push(self._lake, [part.path for parts in loads.values() for part in parts])
        while True:
            version = self.version
            try:
                with _told_by(self._store):
                    self._append(version + 1, loads, note)
                return version + 1
            except DeltaError as problem:
                if self.version == version:
                    if self._store:
                        raise self._store.sentence(problem) from None
                    raise LedgerError(f"cannot write the ledger of {self._lake}: {problem}") from problem

    def fill_cache(self) -> None:
        """Get all parts in force but the samples from the lake's store, where it has one, for readers that know only files."""
        if not self._store:
            return
        wanted = {part.path: part.sha256 for part in self.parts() if part.table != "signal"}
        if lacking := self._store.fetch(self._lake, wanted):
            raise StoreError(
                f"{len(lacking)} parts are not in {self._store.url} as they were landed, {lacking[0]} for one; "
                "`burdenline verify` lists them, restore them from a copy"
            )

    def drop_history(self, grace_s: float) -> None:
        """Remove the ledger's own files that the latest commit does not need and that are older than `grace_s`."""
        with _told_by(self._store):
            self._delta.update_incremental()
            self._delta.vacuum(int(max(grace_s, 0) // 3600), dry_run=False, enforce_retention_duration=False)

    def _append(self, commit: int, loads: Mapping[tuple[str, str], Sequence[Part]], note: str) -> None:
        rows, files_before = _load_rows(commit, loads), self._delta.file_uris()
        compact = len(files_before) >= COMPACT_FILES
        if compact:
            rows = _in_force(pl.concat([self._read(), rows]))
        write_deltalake(
            self._delta,
            rows,
            mode="overwrite" if compact else "append",
            commit_properties=CommitProperties(custom_metadata={"note": note}, max_commit_retries=0),
        )
        if not self._store:
            self._flush(commit, set(self._delta.file_uris()) - set(files_before))

    def _flush(self, commit: int, new_files: Collection[str]) -> None:
        """Bring a commit to the disk, so that no power loss undoes it after a caller relied on it and moved a file."""
        folder = self._lake / "ledger"
        for path in (*(folder / Path(uri).name for uri in new_files), folder / "_delta_log" / f"{commit:020d}.json"):
            with path.open("rb") as file:
                os.fsync(file.fileno())

    def _check(self, loads: Mapping[tuple[str, str], Sequence[Part]]) -> None:
        for (table, key), parts in loads.items():
            if table not in schema.LAKE:
                raise LedgerError(f"unknown lake table {table!r}; known: {', '.join(schema.LAKE)}")
            for part in parts:
                if (part.table, part.key) != (table, key):
                    raise LedgerError(f"{part.path} belongs to load {part.table}/{part.key}, not to {table}/{key}")
                if not self._store and not (self._lake / part.path).is_file():
                    raise LedgerError(f"{part.path} is not in {self._lake}; write the part before it is committed")

    def _read(self) -> pl.DataFrame:
        version = self.version
        if self._rows[0] != version:
            # Only the names: the addresses are percent-encoded, and all files lie in the ledger's own folder.
            names = [f"ledger/{Path(uri).name}" for uri in self._delta.file_uris()]
            if self._store:
                self._store.fetch(self._lake, dict.fromkeys(names, ""))
            files = [self._lake / name for name in names]
            try:
                rows = pl.read_parquet(files, glob=False).select(list(_ROW_SCHEMA)) if files else self._rows[1].clear()
            except pl.exceptions.ComputeError as problem:
                raise _damaged(self._lake / "ledger", problem) from None
            self._rows = (version, rows)
        return self._rows[1]


def _load_rows(commit: int, loads: Mapping[tuple[str, str], Sequence[Part]]) -> pl.DataFrame:
    named = [part for parts in loads.values() for part in parts]
    withdrawn = [load for load, parts in loads.items() if not parts]
    rows = [(commit, *part) for part in named] + [(commit, *load, *[None] * 7) for load in withdrawn]
    return pl.DataFrame(rows, schema={"commit": pl.Int64(), **{n: _ROW_SCHEMA[n] for n in Part._fields}}, orient="row")


def _in_force(rows: pl.DataFrame) -> pl.DataFrame:
    commit, is_withdrawal = pl.col("commit"), pl.col("path").is_null()
    withdrawn = commit.filter(is_withdrawal).max().over("table", "key").fill_null(-1)
    latest = commit.max().over("table", "key", "fingerprint")
    in_force = rows.filter((commit == latest) & (commit > withdrawn))
    return in_force.sort("table", "key", "fingerprint", "segment", "block", "path")


def _damaged(where: Path | str, problem: Exception) -> LedgerError:
    said = str(problem).partition("\n")[0]
    return LedgerError(f"{where} cannot be read ({said}); restore the ledger folder from a copy")


def _told_by(store: Store | None) -> AbstractContextManager[None]:
    """Errors of a store become sentences; those of a folder speak for themselves."""
    return store.told() if store else nullcontext()


def _open_or_create(lake: Path, store: Store | None) -> DeltaTable:
    if store:
        refresh(lake, store)
    address, options = (f"{store.url}/ledger", store.delta_options) if store else (_address(lake / "ledger"), None)
    where = address if store else lake / "ledger"
    check_layout(lake)
    refuse_missing_lake(lake.parent)
    if found_layout(lake) is not None:
        try:
            with _told_by(store):
                return DeltaTable(address, storage_options=options)
        except TableNotFoundError:
            raise LedgerError(
                f"{where} is gone, but {lake} holds landed parts; restore the ledger folder from a copy, "
                f"or remove {lake} whole and run again over the inbox"
            ) from None
        except DeltaError as problem:
            raise _damaged(where, problem) from None
    (lake / "ledger").mkdir(parents=True, exist_ok=True)
    with _told_by(store):
        delta = DeltaTable.create(
            address,
            schema=pl.Schema(_ROW_SCHEMA),
            mode="ignore",
            name="ledger",
            description="which parts of the lake are in force",
            # The log is the audit trail of every load, so it is never shortened.
            configuration={"delta.enableExpiredLogCleanup": "false"},
            storage_options=options,
        )
    note_layout(lake, layout.LAYOUT)
    return delta


def _address(folder: Path) -> str:
    """The folder as an address, in which blanks and letters of all languages mean themselves."""
    found = sorted({character for character in str(folder.resolve()) if character in _PATTERN_CHARACTERS})
    if found:
        raise LedgerError(
            f"{folder.resolve()}: {' '.join(found)} in the path would be read as a search pattern; rename that folder"
        )
    return folder.resolve().as_uri()


def verify(lake: Path) -> list[Damage]:
    """Every part in force whose file is missing or whose bytes are not those that were landed.

    Where the lake has a store its objects are read too, and the folder may lack what the store holds.
    """
    parts, store = Ledger(lake).parts(), store_of(lake)
    damages = []
    for part in parts:
        path = lake / part.path
        if path.is_file():
            if file_sha256(path) != part.sha256:
                damages.append(Damage(part.path, "bytes changed after it landed"))
        elif not store:
            damages.append(Damage(part.path, "missing"))
    if store:
        damages += [Damage(*found) for found in store.changed({part.path: part.sha256 for part in parts})]
    return damages


def tidy(lake: Path, grace_s: float, *, keep: Collection[str] = ()) -> list[str]:
    """Remove part files that are neither in force nor in `keep` and older than `grace_s`; returns their paths.

    The ledger's own files that were written anew since go as well.

    `keep` holds paths relative to the lake that a publication or a data cut still reads. The grace time protects parts
    that a running load has written and not yet committed. Raises StoreError where the store is another folder's.
    """
    refuse_other(lake)
    # Files are listed before the ledger is read: a part committed in between is then in force, not missed.
    oldest_s, store = time.time() - grace_s, store_of(lake)
    files = [path for table in schema.LAKE for path in (lake / table).glob("*/*") if path.stat().st_mtime <= oldest_s]
    objects = [found for table in schema.LAKE for found in store.objects(table)] if store else []
    ledger = Ledger(lake)
    wanted = {part.path for part in ledger.parts()} | set(keep)
    here = {path.relative_to(lake).as_posix() for path in files} - wanted
    there = {found.path for found in objects if found.put_s <= oldest_s} - wanted
    for path in here:
        (lake / path).unlink(missing_ok=True)
    if store:
        store.remove(sorted(there))
    ledger.drop_history(grace_s)
    return sorted(here | there)
