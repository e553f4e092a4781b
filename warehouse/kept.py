"""Patients whose rows a build takes over from the edition that stands, because all that the rows follow from is the same.

A patient's rows of `schema.OF_PATIENT` follow from the landed parts of the patient's recordings, what over-readers
decided on them, the therapies, the rules of the zone, and from what is common to all: settings, models, program. The
grounds hash these; an edition keeps
the hashes beside its tables. A build reads the parts of patients with another hash only, and its tables are those of a
build over all: sums of fractions are made in decimals, which do not depend on the order of the rows.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections import defaultdict
from collections.abc import Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, NamedTuple

import duckdb
import polars as pl

from warehouse import schema
from warehouse.parts import Part, file_sha256, write_whole
from warehouse.published import DATABASE, Published

KEPT = "kept"
"""Folder of an edition with what only the build after it reads: it is not published and no cut has it."""

_GROUNDS = "grounds.json"

OF_RECORDING = (
    "recordings", "segments", "families", "episodes", "findings", "marks", "quarter_hours", "family_quarters",
)  # fmt: skip
"""Lake tables with a load per recording, of which a build reads the parts of changed patients only."""

_FOUND_IN_RECORDING = frozenset((*OF_RECORDING, "beats", "quality_windows"))
_DECIDED_IN_DELIVERY = frozenset(("decisions", "reviews"))


class Grounds(NamedTuple):
    """SHA-256 of all that rows follow from: what is common to all patients, and what is a patient's own, by code."""

    common: str
    patients: dict[str, str]


def common_grounds(lines: Iterable[str]) -> str:
    """SHA-256 of what counts for every patient."""
    return hashlib.sha256("\n".join(lines).encode()).hexdigest()


def patient_grounds(
    parts: Iterable[Part],
    register: Mapping[str, pl.DataFrame],
    *,
    decisions: Iterable[tuple[str, str]],
    zone_rules: Mapping[str, str],
) -> dict[str, str]:
    """SHA-256 of what is a patient's own, by patient code.

    `decisions` names recordings that were over-read, each with a delivery that says something of it; `zone_rules` says
    the rules of each zone.
    """
    landed, found, decided = set(), defaultdict(list), defaultdict(list)
    for part in parts:
        if part.table in _FOUND_IN_RECORDING:
            found[part.key].append(f"{part.table} {part.sha256}")
        elif part.table in _DECIDED_IN_DELIVERY:
            decided[part.key].append(f"{part.table} {part.sha256}")
        if part.table == "recordings":
            landed.add(part.key)
    for recording_id, delivery_id in decisions:
        found[recording_id] += decided[delivery_id]
    said = {code: [zone_rules[zone]] for code, zone in register["patients"].select("patient_code", "zone").iter_rows()}
    wears = register["wears"].select("patient_code", "recording_id").sort(pl.all())
    for code, recording_id in wears.iter_rows():
        if recording_id in landed and code in said:
            said[code] += [recording_id, *sorted(found[recording_id])]
    for row in register["therapies"].sort("therapy_id").iter_rows(named=True):
        if row["patient_code"] in said:
            said[row["patient_code"]].append(repr(sorted(row.items())))
    return {code: common_grounds(lines) for code, lines in said.items()}


def write_kept(edition: Path, grounds: Grounds, handed_on: Mapping[str, pl.DataFrame]) -> None:
    """Keep beside the tables and the database of an edition what the build after it needs."""
    for name, frame in handed_on.items():
        content = io.BytesIO()
        frame.write_parquet(content)
        write_whole(edition / KEPT / f"{name}.parquet", content.getbuffer())
    told = {**grounds._asdict(), "database": file_sha256(edition / DATABASE)}
    write_whole(edition / KEPT / _GROUNDS, json.dumps(told, sort_keys=True).encode())


def read_handed(edition: Published, name: str) -> pl.DataFrame | None:
    """Rows that the build of an edition handed on, None when it did not."""
    path = edition.edition / KEPT / f"{name}.parquet"
    return pl.read_parquet(path, glob=False, hive_partitioning=False) if path.is_file() else None


def grounds_of(standing: Published | None, common: str) -> Grounds:
    """Grounds of the standing edition; those of no patient when nothing may be taken over from it.

    That is so after a change of what is common to all, and when a byte of its tables or its database was changed.
    """
    before = _read(standing) if standing else {}
    same = standing and before.get("common") == common and is_whole(standing)
    return Grounds(common, before["patients"]) if same else Grounds(common, {})


def _read(edition: Published) -> dict[str, Any]:
    path = edition.edition / KEPT / _GROUNDS
    return json.loads(path.read_text(encoding="utf-8")) if path.is_file() else {}


def is_whole(edition: Published) -> bool:
    """Tell whether the tables and the database of an edition are the bytes that were written."""
    hashes = {edition.edition / DATABASE: _read(edition).get("database")}
    for name in edition.manifest["tables"]:
        hashes |= {path: told["sha256"] for path, told in edition.files(name).items()}
    with ThreadPoolExecutor(2) as pool:  # hashing leaves the interpreter to the other one
        return all(path.is_file() for path in hashes) and [*pool.map(file_sha256, hashes)] == [*hashes.values()]


def offer(connection: duckdb.DuckDBPyConnection, patients: Iterable[str]) -> None:
    """Make `kept.patients`, `kept.wears` (recording and patient) and a view `kept.<table>` of the rows to take over.

    The database of the standing edition is attached as `standing`; without patients there is none.
    """
    connection.execute("CREATE TABLE kept.patients (patient_code VARCHAR)")
    connection.execute("CREATE TABLE kept.wears (recording_id VARCHAR, patient_code VARCHAR)")
    codes = list(patients)
    if not codes:
        return
    connection.execute("INSERT INTO kept.patients SELECT unnest(?)", [codes])
    connection.execute(
        "INSERT INTO kept.wears SELECT recording_id, patient_code FROM standing.recordings SEMI JOIN kept.patients"
        " USING (patient_code)"
    )
    for name in schema.OF_PATIENT:
        columns = ", ".join(schema.PUBLISHED[name].columns)
        query = f"SELECT {columns} FROM standing.{name} SEMI JOIN {kept_owners(name)}"
        connection.execute(f"CREATE VIEW kept.{name} AS {query}")


def kept_owners(table: str) -> str:
    """Table of those whose rows are taken over, and the column that a table of OF_PATIENT knows them by."""
    if "patient_code" in schema.PUBLISHED[table].columns:
        return "kept.patients USING (patient_code)"
    return "kept.wears USING (recording_id)"
