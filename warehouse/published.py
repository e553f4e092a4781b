"""The published tables, read only: the one door for pages, exports and queries.

Nothing here writes and nothing here knows how the tables were made. An object of `Published` stays with the edition
that stood when it was opened, whatever is published meanwhile.
"""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Mapping
from functools import cached_property
from importlib import resources
from pathlib import Path
from typing import Any, NamedTuple

import duckdb
import polars as pl

from warehouse import schema
from warehouse.database import open_database
from warehouse.parts import scan_parts
from warehouse.slices import slice_of

DATABASE = "burdenline.duckdb"
MANIFEST = "manifest.json"

_WORD = re.compile(r"\w+")
_UNKNOWN_TABLE = re.compile(r'Table with name "?(?:\w+\.)?(\w+)"? does not exist')
_READING = {duckdb.StatementType.SELECT, duckdb.StatementType.EXPLAIN, duckdb.StatementType.PRAGMA}


class PublishedError(RuntimeError):
    """Nothing is published, or a table is unknown or damaged; the message says what to do."""


class QueryError(ValueError):
    """A query cannot be answered; the message is DuckDB's, with the nearest names."""


class WorkedQuery(NamedTuple):
    """A question that the published tables answer, and the SQL that answers it."""

    name: str
    question: str
    sql: str


class Published:
    """Tables of one edition; `folder` is the programme's published folder, `edition` by default the standing one."""

    def __init__(self, folder: Path, *, edition: Path | None = None) -> None:
        self._folder = folder.resolve()
        self._edition = edition or self._folder / "current"
        if not self._edition.exists():
            raise PublishedError(f"nothing is published in {folder} yet; `burdenline run` makes the first publication")
        self._edition = self._edition.resolve()
        self._connection: duckdb.DuckDBPyConnection | None = None

    @cached_property
    def manifest(self) -> dict[str, Any]:
        """What the edition was made from: fingerprint, stamp, and rows and hash of each table."""
        return json.loads((self._edition / MANIFEST).read_text(encoding="utf-8"))

    @property
    def folder(self) -> Path:
        """The programme's published folder, from where a view finds its parts."""
        return self._folder

    @property
    def edition(self) -> Path:
        """Folder of the edition."""
        return self._edition

    @cached_property
    def lake(self) -> Path:
        """Folder of the parts that the edition reads in place."""
        return (self._folder / self.manifest["lake"]).resolve()

    def has(self, name: str) -> bool:
        """Whether the edition has a table of this name."""
        return name in self.manifest["tables"] or name in self._read_in_place()

    def files(self, name: str) -> dict[Path, dict[str, Any]]:
        """Parquet files of a table that is not read in place: one, or one per slice in their order.

        With each its rows and its SHA-256, as they were written.
        """
        return {self._edition / path: told for path, told in self.manifest["tables"][name]["files"].items()}

    def part_paths(self, name: str, key: str | None = None) -> list[str]:
        """Paths within the lake of the parts of a lake table behind the edition, of one load where given."""
        where = {"table_name": name} if key is None else {"table_name": name, "part_key": key}
        return self.table("parts", where)["part_path"].to_list()

    @property
    def name(self) -> str:
        """Name of the edition: the hash of its manifest, or the name of a data cut."""
        return self._edition.name

    def table(self, name: str, where: Mapping[str, object] | None = None) -> pl.DataFrame:
        """Rows of a published table in the order of its key; `where` keeps the rows whose columns equal its values."""
        return self.scan(name, where).collect()

    def scan(self, name: str, where: Mapping[str, object] | None = None) -> pl.LazyFrame:
        """The same as `table`, not read yet: for tables that are larger than memory."""
        where = where or {}
        if name in self.manifest["tables"]:
            rows = self._scan_files(name, where)
        elif name in self._read_in_place():
            rows = self._scan_parts(name, where)
        else:
            raise PublishedError(f"no published table {name!r}; {_nearest(name, schema.PUBLISHED)}")
        conditions = [pl.col(column) == value for column, value in where.items()]
        return rows.filter(conditions) if conditions else rows

    def _scan_files(self, name: str, where: Mapping[str, object]) -> pl.LazyFrame:
        files = list(self.files(name))
        if len(files) > 1 and (code := self._patient_of(where)):
            files = [files[slice_of(code, len(files))]]
        rows = pl.scan_parquet(files, glob=False, hive_partitioning=False)
        return rows if len(files) == 1 else rows.sort(schema.PUBLISHED[name].key)

    def _patient_of(self, where: Mapping[str, object]) -> str | None:
        recording_id = where.get("recording_id")
        return str(where["patient_code"]) if "patient_code" in where else self._patients.get(str(recording_id))

    @cached_property
    def _patients(self) -> dict[str, str]:
        return dict(self.table("recordings").select("recording_id", "patient_code").iter_rows())

    def _read_in_place(self) -> set[str]:
        return {name for name in schema.PUBLISHED if name not in self.manifest["tables"]}

    def _scan_parts(self, name: str, where: Mapping[str, object]) -> pl.LazyFrame:
        recording_id = where.get("recording_id")
        paths = self.part_paths(name, None if recording_id is None else str(recording_id))
        return scan_parts(self.lake, schema.PUBLISHED[name], paths)

    def frame(self, sql: str) -> pl.DataFrame:
        """Answer one query as a frame. Raises QueryError for anything but reading, and for names that are unknown."""
        connection = self._connect()
        try:
            statements = connection.extract_statements(sql)
            if len(statements) != 1 or statements[0].type not in _READING:
                raise QueryError("expected one query that reads (SELECT, FROM, WITH, DESCRIBE, SUMMARIZE, EXPLAIN)")
            reads_parts = not self._read_in_place().isdisjoint(_WORD.findall(sql))
            # Run to the end here, so that an error in the last row is still a QueryError.
            return _held(connection, sql) if reads_parts else pl.DataFrame(connection.sql(sql).materialize())
        except duckdb.IOException as problem:
            raise QueryError(
                f"parts of the lake that the publication reads are not where they were: {problem}; "
                f"put the lake back at {self.lake}, or run again to publish anew"
            ) from None
        except duckdb.Error as problem:
            raise QueryError(_told(problem)) from None

    def _connect(self) -> duckdb.DuckDBPyConnection:
        if self._connection is None:
            self._connection = _open_read_only(self._edition / DATABASE, self._folder, self.manifest["lake"])
        return self._connection

    def queries(self) -> list[WorkedQuery]:
        """Worked queries over the published tables, by name."""
        return worked_queries()


def worked_queries() -> list[WorkedQuery]:
    """The files of `warehouse/queries`: the first comment line is the question, the rest the SQL."""
    files = sorted(resources.files("warehouse").joinpath("queries").iterdir(), key=lambda file: file.name)
    worked = []
    for file in files:
        question, _, sql = file.read_text(encoding="utf-8").partition("\n")
        worked.append(WorkedQuery(file.name.removesuffix(".sql"), question.removeprefix("-- "), sql.strip()))
    return worked


def _open_read_only(database: Path, folder: Path, lake: str) -> duckdb.DuckDBPyConnection:
    try:
        connection = open_database(str(database), read_only=True)
    except duckdb.IOException as problem:
        raise PublishedError(f"{database} cannot be opened: {problem}; `burdenline run` publishes it anew") from None
    connection.execute("SET file_search_path = ?", [str(folder)])
    # A path is looked at twice, as written in the view and as found: both must be allowed.
    connection.execute("SET allowed_directories = ?", [[lake, str((folder / lake).resolve())]])
    connection.execute("SET enable_external_access = false")
    connection.execute("SET lock_configuration = true")
    return connection


def _held(connection: duckdb.DuckDBPyConnection, sql: str) -> pl.DataFrame:
    """Rows of a query over views of parts, held as a table on the way.

    A relation is bound once to be made and once to be run, and binding a view looks at every part. What no table can be
    made of, an explanation or a mistake, is asked as it was written.
    """
    try:
        connection.execute(f"CREATE TEMP TABLE answer AS {sql}")
    except duckdb.Error:
        return pl.DataFrame(connection.sql(sql).materialize())
    rows = pl.DataFrame(connection.sql("FROM answer"))
    connection.execute("DROP TABLE answer")
    return rows


def _told(problem: duckdb.Error) -> str:
    """What DuckDB says of a query; for a table that is not published our names, because it would offer its own, too."""
    unknown = _UNKNOWN_TABLE.search(str(problem))
    if unknown:
        return f"no published table {unknown[1]!r}; {_nearest(unknown[1], schema.PUBLISHED)}"
    if isinstance(problem, duckdb.BinderException):
        return f"{str(problem).strip()}\n`FROM data_dictionary` lists every table and column"
    return str(problem).strip()


def _nearest(name: str, known: Mapping[str, object]) -> str:
    near = difflib.get_close_matches(name, known, n=3)
    return f"did you mean {', '.join(near)}?" if near else f"published are: {', '.join(known)}"
