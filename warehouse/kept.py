"""Patients whose rows a build takes over from the edition that stands, because all that the rows follow from is the same.

A patient's rows of `TAKEN` follow from the quarter hours of the patient's recordings, the therapies, the rules of the
zone, the settings and the models. `grounds` hashes these per patient; an edition keeps the hashes beside its tables.
A build reads the quarter hours of patients with another hash only, and its tables are those of a build over all: sums
of fractions are made in decimals, which do not depend on the order of the rows.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from pathlib import Path

import duckdb
import polars as pl

from warehouse import schema
from warehouse.parts import Part, file_sha256
from warehouse.published import Published

GROUNDS = "grounds.json"

TALLIES = ("quarter_hours", "family_quarters")
"""Lake tables of which a build reads the parts of changed patients only."""

TAKEN = {
    "hours": "hours",
    "recording_tallies": "recordings",
    "local_hours": "local_hours",
    "wear_days": "wear_days",
    "periods": "periods",
    "family_days": "family_days",
}
"""Models whose rows are taken over, with the published table that has them; every one has a patient_code."""


def grounds(
    parts: Iterable[Part],
    register: Mapping[str, pl.DataFrame],
    *,
    over_read: Iterable[str],
    zone_rules: Mapping[str, str],
    common: Iterable[str],
) -> dict[str, str]:
    """SHA-256 of all that the rows of a patient follow from, by patient code.

    `over_read` names recordings with decisions of over-readers: their patients are built anew every time. `zone_rules`
    says the rules of each zone, and `common` what counts for every patient.
    """
    landed: set[str] = set()
    quarters: dict[str, list[str]] = {}
    for part in parts:
        if part.table == "recordings":
            landed.add(part.key)
        elif part.table in TALLIES:
            quarters.setdefault(part.key, []).append(part.sha256)
    said = {code: [zone_rules[zone]] for code, zone in register["patients"].select("patient_code", "zone").iter_rows()}
    wears = register["wears"].select("patient_code", "recording_id").sort(pl.all())
    anew = set(wears.filter(pl.col("recording_id").is_in(list(over_read)))["patient_code"])
    for code, recording_id in wears.iter_rows():
        if recording_id in landed and code in said:
            said[code] += [recording_id, *sorted(quarters.get(recording_id, []))]
    for row in register["therapies"].sort("therapy_id").iter_rows(named=True):
        if row["patient_code"] in said:
            said[row["patient_code"]].append(repr(sorted(row.items())))
    beginning = hashlib.sha256("\n".join(common).encode())
    return {code: _continued(beginning, lines) for code, lines in said.items() if code not in anew}


def _continued(beginning: hashlib._Hash, lines: Iterable[str]) -> str:
    digest = beginning.copy()
    digest.update("\n".join(lines).encode())
    return digest.hexdigest()


def kept_patients(standing: Published | None, now: Mapping[str, str]) -> list[str]:
    """Patients whose rows in the standing edition follow from the same grounds; none when its tables are not whole."""
    if standing is None or not (standing.edition / GROUNDS).is_file():
        return []
    before = json.loads((standing.edition / GROUNDS).read_text(encoding="utf-8"))
    kept = [code for code, digest in now.items() if before.get(code) == digest]
    return kept if kept and all(_is_whole(standing, table) for table in TAKEN.values()) else []


def _is_whole(standing: Published, table: str) -> bool:
    path = table_file(standing, table)
    return path.is_file() and file_sha256(path) == standing.manifest["tables"][table]["sha256"]


def table_file(standing: Published, table: str) -> Path:
    """Parquet file of a table of the edition."""
    return standing.edition / "tables" / f"{table}.parquet"


def offer(connection: duckdb.DuckDBPyConnection, standing: Published | None, patients: list[str]) -> None:
    """Make `kept.patients` and, for each model of TAKEN, a view `kept.<model>` of the rows to take over."""
    connection.execute("CREATE SCHEMA kept")
    connection.execute("CREATE TABLE kept.patients (patient_code VARCHAR)")
    if standing is None or not patients:
        return
    connection.execute("INSERT INTO kept.patients SELECT unnest(?)", [patients])
    for model, table in TAKEN.items():
        path = str(table_file(standing, table)).replace("'", "''")
        rows = f"SELECT * FROM read_parquet('{path}', hive_partitioning = false)"
        connection.execute(f"CREATE VIEW kept.{model} AS {rows} SEMI JOIN kept.patients USING (patient_code)")


def with_kept_rows(model: str, query: str) -> str:
    """The rows of a model's query for patients built anew, and the kept ones of all others."""
    anew = f"SELECT * FROM (\n{query}\n) ANTI JOIN kept.patients USING (patient_code)"
    columns = schema.PUBLISHED[model].columns if model in schema.PUBLISHED else RECORDING_TALLIES
    names = ", ".join(columns)
    return f"SELECT {names} FROM ({anew}) UNION ALL SELECT {names} FROM kept.{model}"


RECORDING_TALLIES = (
    "recording_id", "patient_code", "fingerprint", "worn_h", "analysable_h", "all_beats", "v_beats", "decided_beats",
)  # fmt: skip
