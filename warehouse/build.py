"""One build of the trend tables: lake parts and register in, SQL models run in layers, checks asked.

The build happens in a scratch database that is thrown away; `warehouse.publish` copies the result. Models are SQL files
named after the table they make; the order in which they run is `layers.MODELS`, and a model sees the tables before it, plus

- `lake.*`: the parts in force of the published fingerprint, with the columns of `schema.LAKE`,
- `register.*`: patients, wears, therapies,
- `programme.settings`: one row, a column per threshold, and the published fingerprint,
- `reviewed.*`: quarter hours and episodes of over-read recordings, which the caller adds after the layer `decided`,
- `programme.zone_offsets` and `programme.local_days`: the rules of the patients' time zones (see `warehouse.zones`).

With a standing edition only the parts of patients with changes are read (see `warehouse.kept`). A table of
`schema.OF_PATIENT` is then two: `anew.<table>` of these patients, `kept.<table>` of all others. Models that follow
patient by patient read `anew`, models about the whole programme read the table itself, which is both.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Iterator, Mapping
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import Self

import duckdb
import polars as pl

from warehouse import schema
from warehouse.build_inputs import REGISTER, REVIEWED, SETTINGS
from warehouse.claims import Failure, claims
from warehouse.database import ArrowStream, open_database
from warehouse.dictionary import column_definitions, dictionary_frame, parts_query, typed_query
from warehouse.kept import (
    OF_RECORDING,
    Grounds,
    common_grounds,
    grounds_of,
    offer,
    patient_grounds,
    read_handed,
)
from warehouse.layers import MODELS, READ_IN_PLACE, model_sql
from warehouse.parts import Part, checked_frame, parts_frame, polars_type, scan_parts
from warehouse.published import DATABASE, Published
from warehouse.slices import slice_count, slice_of
from warehouse.zones import DAYS, OFFSETS, local_days, zone_offsets, zone_rules

_NOT_FOR_MODELS = ("signal", "pieces", "delivered_marks", "inputs")


class BuildError(RuntimeError):
    """A model or a frame does not fit; the message names the table and what DuckDB or the dictionary objects to."""


class TrendBuild:
    """Scratch database in which the trend tables are built; use it as a context manager.

    `register` has the frames of `build_inputs.REGISTER`, `settings` the values of SETTINGS there (further ones are ignored).
    Of `parts` those without a fingerprint and those of `fingerprint` are used. Rows of patients without changes are
    taken over from `standing`, an edition whose checks were asked; the tables are the same without it. `program` says
    what else rows of `schema.OF_PATIENT` follow from that the caller adds: another text builds every patient anew.
    """

    def __init__(
        self,
        lake: Path,
        parts: Iterable[Part],
        *,
        register: Mapping[str, pl.DataFrame],
        settings: Mapping[str, float | int | str],
        fingerprint: str,
        workdir: Path,
        standing: Published | None = None,
        program: str = "",
    ) -> None:
        self.lake = lake
        self.parts = [p for p in parts if p.table == "fingerprints" or p.fingerprint in ("", fingerprint)]
        self._parts_of: defaultdict[str, list[Part]] = defaultdict(list)
        for part in self.parts:
            self._parts_of[part.table].append(part)
        self.fingerprint = fingerprint
        self._register = register
        self._settings = settings
        self._program = program
        self.standing = standing
        self.kept: frozenset[str] = frozenset()
        self.handed_on: dict[str, pl.DataFrame] = {}
        self.slices = slice_count(register["patients"].height)
        self._database = workdir / "build.duckdb"

    def __enter__(self) -> Self:
        self._database.parent.mkdir(parents=True, exist_ok=True)
        self._remove_database()
        self.connection = open_database(str(self._database))
        # One thread: sums of fractions come out the same to the last bit, and thousands of small files load faster.
        self.connection.execute("SET threads = 1")
        for layer in ("lake", "reviewed", "register", "programme", "anew", "kept"):
            self.connection.execute(f"CREATE SCHEMA {layer}")
        for name, types in REVIEWED.items():
            self._create(f"reviewed.{name}", types)
        self._load_register()
        self._load_settings()
        self._open_standing()
        self._load_lake()
        self._keep_patients()
        self._load_recordings()
        self._load_calendar()
        self.add("parts", parts_frame(self.parts))
        self.add("data_dictionary", dictionary_frame())
        return self

    def __exit__(self, *_: object) -> None:
        self.connection.close()
        self._remove_database()

    def _remove_database(self) -> None:
        for path in self._database.parent.glob("build.duckdb*"):
            path.unlink()

    def _load_register(self) -> None:
        for table, types in REGISTER.items():
            frame = self._register[table].select([pl.col(name).cast(polars_type(types[name])) for name in types])
            self._insert(f"register.{table}", types, frame)

    def _load_settings(self) -> None:
        missing = [name for name in SETTINGS if name not in self._settings]
        if missing:
            raise BuildError(f"settings missing for the models: {', '.join(missing)}")
        values = {name: self._settings[name] for name in SETTINGS} | {"fingerprint": self.fingerprint}
        self._insert("programme.settings", {**SETTINGS, "fingerprint": "VARCHAR"}, pl.DataFrame([values]))

    def _open_standing(self) -> None:
        """Attach the database of the standing edition as `standing` where rows may be taken over from it."""
        before = grounds_of(self.standing, common_grounds(self._common_lines()))
        self._before = before
        if self.standing is None or not before.patients:
            self.standing = None
            return
        path = str(self.standing.edition / DATABASE).replace("'", "''")
        self.connection.execute(f"ATTACH '{path}' AS standing (READ_ONLY)")

    def _common_lines(self) -> Iterator[str]:
        yield from (duckdb.__version__, self._program, self.fingerprint, f"{self.slices} slices")
        yield from (f"{name} {self._settings[name]!r}" for name in SETTINGS)
        yield from (f"{table.name} {column_definitions(table)}" for table in schema.PUBLISHED.values())
        yield from (model_sql(layer, name) for layer in MODELS for name in MODELS[layer])

    def _load_lake(self) -> None:
        for name, table in schema.LAKE.items():
            if name not in (*_NOT_FOR_MODELS, *OF_RECORDING, *READ_IN_PLACE):
                self._insert_parts(table, self._parts_of[name])

    def _keep_patients(self) -> None:
        own = patient_grounds(
            self.parts,
            self._register,
            decisions=self._decisions(),
            zone_rules=zone_rules(self._register["patients"]["zone"], *self._recorded_span),
        )
        self.grounds = Grounds(self._before.common, own)
        self.kept = frozenset(code for code, digest in own.items() if self._before.patients.get(code) == digest)
        offer(self.connection, sorted(self.kept))

    @cached_property
    def _recorded_span(self) -> tuple[datetime, datetime]:
        """First and last instant of all recordings, of withdrawn ones too where the standing edition had them."""
        read_before = set(self.standing.part_paths("recordings")) if self.standing else set()
        fresh = [part.path for part in self._parts_of["recordings"] if part.path not in read_before]
        spans = scan_parts(self.lake, schema.LAKE["recordings"], fresh).select("start_utc", "end_utc").collect()
        if self.standing:
            spans = pl.concat([spans, self.standing.table("recordings").select("start_utc", "end_utc")])
        # Without any recording a calendar around some day does: nothing is joined to it.
        some_day = pl.lit(datetime.fromisoformat("2000-01-01"))
        first, last = pl.col("start_utc").min(), pl.col("end_utc").max()
        return spans.select(first.fill_null(some_day), last.fill_null(some_day)).row(0)

    def _decisions(self) -> list[tuple[str, str]]:
        return self.connection.sql(
            "SELECT recording_id, delivery_id FROM lake.reviews UNION SELECT recording_id, delivery_id FROM lake.decisions"
        ).fetchall()

    @property
    def over_read(self) -> list[str]:
        """Recordings of patients built anew on which an over-reader decided anything, in order."""
        return sorted({recording_id for recording_id, _ in self._decisions()} - self._kept_recordings)

    @cached_property
    def _kept_recordings(self) -> frozenset[str]:
        wears = self.connection.sql("SELECT recording_id FROM kept.wears").fetchall()
        return frozenset(recording_id for (recording_id,) in wears)

    def _load_recordings(self) -> None:
        for name in (*OF_RECORDING, *READ_IN_PLACE):
            parts = [part for part in self._parts_of[name] if part.key not in self._kept_recordings]
            if name in READ_IN_PLACE and parts:
                query = parts_query(schema.LAKE[name], [f"{self.lake}/{part.path}" for part in parts])
                self.connection.execute(f"CREATE VIEW lake.{name} AS {query}")
            else:
                self._insert_parts(schema.LAKE[name], parts)

    def _insert_parts(self, table: schema.Table, parts: Iterable[Part]) -> None:
        types = {column: schema.COLUMNS[column].type for column in table.columns}
        rows = scan_parts(self.lake, table, [part.path for part in parts]).collect()
        self._insert(f"lake.{table.name}", types, rows)

    def _load_calendar(self) -> None:
        first_utc, last_utc = self._recorded_span
        zones = sorted(set(self._register["patients"]["zone"]))
        self._insert("programme.zone_offsets", OFFSETS, zone_offsets(zones, first_utc, last_utc))
        self._insert("programme.local_days", DAYS, local_days(zones, first_utc, last_utc))

    def _create(self, name: str, types: Mapping[str, str]) -> None:
        columns = ", ".join(f"{column} {kind}" for column, kind in types.items())
        self.connection.execute(f"CREATE TABLE {name} ({columns})")

    def _insert(self, name: str, types: Mapping[str, str], frame: pl.DataFrame) -> None:
        self._create(name, types)
        self._append(name, frame)

    def _append(self, name: str, frame: pl.DataFrame) -> None:
        self.connection.register("arriving", ArrowStream(frame))
        self.connection.execute(f"INSERT INTO {name} BY NAME FROM arriving")
        self.connection.unregister("arriving")

    @cached_property
    def slices_anew(self) -> frozenset[int]:
        """Slices that hold, or held in the standing edition, a patient whose rows are not taken over."""
        codes = set(self._register["patients"]["patient_code"])
        if self.standing:
            codes |= set(self.standing.table("patients")["patient_code"])
        return frozenset(slice_of(code, self.slices) for code in codes - self.kept)

    def run_models(self, layer: str) -> None:
        """Make the tables of one layer, in order; published tables get the dictionary's columns and types."""
        for name in MODELS[layer]:
            query = model_sql(layer, name)
            if name in schema.PUBLISHED:
                query = typed_query(schema.PUBLISHED[name], query)
            try:
                self.connection.execute(f"CREATE TABLE {self._made(name)} AS {query}")
            except duckdb.Error as problem:
                raise BuildError(f"model {layer}/{name}.sql: {problem}") from problem
            self._join_kept(name)

    def add(self, table: str, frame: pl.DataFrame) -> None:
        """Add a published table that was computed outside SQL; its columns, types and key are checked.

        Of a table of `schema.OF_PATIENT` these are the rows of the patients built anew.
        """
        described = schema.PUBLISHED[table]
        types = {name: schema.COLUMNS[name].type for name in described.columns}
        self._insert(self._made(table), types, checked_frame(described, frame))
        self._join_kept(table)

    @staticmethod
    def _made(table: str) -> str:
        return f"anew.{table}" if table in schema.OF_PATIENT else table

    def _join_kept(self, table: str) -> None:
        if table in schema.OF_PATIENT:
            kept = f" UNION ALL FROM kept.{table}" if self.kept else ""
            self.connection.execute(f"CREATE VIEW {table} AS FROM anew.{table}{kept}")

    def hand_on(self, name: str, frame: pl.DataFrame) -> None:
        """Keep rows beside the edition that are not published and that the next build needs."""
        self.handed_on[name] = frame

    def handed(self, name: str) -> pl.DataFrame | None:
        """Rows that the build of the standing edition handed on; None where nothing may be taken over from it."""
        return read_handed(self.standing, name) if self.standing else None

    def add_reviewed(self, quarter_hours: pl.DataFrame, episodes: pl.DataFrame) -> None:
        """Add what an over-read recording holds by the classes decided; columns as in `build_inputs.REVIEWED`."""
        self._append("reviewed.quarter_hours", quarter_hours)
        self._append("reviewed.episodes", episodes)

    def of_recording(self, model: str, recording_id: str) -> pl.DataFrame:
        """Rows of one recording of a table that a model made."""
        rows = self.connection.sql(f"FROM {model}").filter(duckdb.ColumnExpression("recording_id") == recording_id)
        return pl.DataFrame(rows)

    def frame(self, table: str) -> pl.DataFrame:
        """Rows of a table of the build, ordered by key where it is a published one."""
        order = f" ORDER BY {', '.join(schema.PUBLISHED[table].key)}" if table in schema.PUBLISHED else ""
        return pl.DataFrame(self.connection.sql(f"FROM {table}{order}"))

    def check(self) -> list[Failure]:
        """Ask every claim; returns those that do not hold.

        Rows taken over were asked when they were made.
        """
        asked = claims(self._made).items()
        failures = (Failure(claim, pl.DataFrame(self.connection.sql(query))) for claim, query in asked)
        return [failure for failure in failures if failure.rows.height]
