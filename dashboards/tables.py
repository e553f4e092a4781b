"""The rows of one patient or one recording, out of the published tables.

Small tables are read once and cut by patient or recording; the large ones are asked for one recording at a time.
Every cut has a mark that changes when its rows change, so that a page knows what it was made from.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from typing import Any, Protocol

import polars as pl

from warehouse.published import WorkedQuery


class PublishedTables(Protocol):
    """What pages need of a publication; `warehouse.published.Published` is the real one."""

    def table(self, name: str, where: Mapping[str, Any] | None = None) -> pl.DataFrame: ...

    def queries(self) -> Sequence[WorkedQuery]: ...


class Cut:
    """One published table, cut by the values of one column."""

    def __init__(self, frame: pl.DataFrame, column: str) -> None:
        self._empty = frame.clear()
        self._pieces = {key[0]: piece for key, piece in frame.partition_by(column, as_dict=True).items()}
        hashes = pl.DataFrame({"key": frame[column], "hash": frame.hash_rows()})
        self._marks = {key: mark(rows["hash"]) for (key,), rows in hashes.partition_by("key", as_dict=True).items()}

    def of(self, value: str) -> pl.DataFrame:
        """Return the rows with this value, in the order of the table; none is an empty frame with its columns."""
        return self._pieces.get(value, self._empty)

    def mark(self, value: str) -> str:
        """Return a text that stands for the rows with this value and changes when one of them does."""
        return self._marks.get(value, "")


def mark(row_hashes: pl.Series) -> str:
    """Return a text that stands for rows in their order."""
    return hashlib.sha256(str(row_hashes.to_list()).encode()).hexdigest()


class Tables:
    """The published tables as pages read them."""

    BY_PATIENT = (
        "patients", "recordings", "wear_days", "local_hours", "therapies", "periods", "changes", "rate_effects",
        "level_shifts", "attention", "visits", "visit_changes", "marks",
    )  # fmt: skip
    BY_RECORDING = (
        "recordings", "segments", "families", "hours", "findings", "marks", "review_sheet", "review_effort", "reviewed",
        "undecided_families", "decisions",
    )  # fmt: skip
    LARGE = ("strips", "episodes", "quality_windows")

    def __init__(self, published: PublishedTables) -> None:
        self._published = published
        self._wholes: dict[str, pl.DataFrame] = {}
        self._cuts: dict[tuple[str, str], Cut] = {}

    def whole(self, name: str) -> pl.DataFrame:
        """Return a small table with missing numbers as NULL."""
        if name not in self._wholes:
            self._wholes[name] = self._published.table(name).fill_nan(None)
        return self._wholes[name]

    @property
    def queries(self) -> Sequence[WorkedQuery]:
        """Worked queries over the published tables."""
        return self._published.queries()

    def of_patient(self, name: str, patient_code: str) -> pl.DataFrame:
        """Return a patient's rows of one of BY_PATIENT."""
        return self._cut(name, "patient_code").of(patient_code)

    def of_recording(self, name: str, recording_id: str) -> pl.DataFrame:
        """Return a recording's rows of one of BY_RECORDING."""
        return self._cut(name, "recording_id").of(recording_id)

    def large(self, name: str, recording_id: str) -> pl.DataFrame:
        """Return a recording's rows of one of LARGE: tables too large to hold."""
        return self._published.table(name, {"recording_id": recording_id}).fill_nan(None)

    def marks_of_whole(self, *names: str) -> list[str]:
        """Return a mark for each of these tables."""
        return [mark(self.whole(name).hash_rows()) for name in names]

    def marks_of_recording(self, recording_id: str) -> list[str]:
        """Return marks for everything that is published of a recording; its large tables are known by their parts."""
        small = [self._cut(name, "recording_id").mark(recording_id) for name in self.BY_RECORDING]
        return [*small, self._large_parts().mark(recording_id)]

    def marks_of_patient(self, patient_code: str) -> list[str]:
        """Return marks for everything that is published of a patient, recordings included."""
        own = [self._cut(name, "patient_code").mark(patient_code) for name in self.BY_PATIENT]
        recordings = self.of_patient("recordings", patient_code)["recording_id"]
        return own + [found for recording_id in recordings for found in self.marks_of_recording(recording_id)]

    def _cut(self, name: str, column: str) -> Cut:
        if (name, column) not in self._cuts:
            self._cuts[name, column] = Cut(self.whole(name), column)
        return self._cuts[name, column]

    def _large_parts(self) -> Cut:
        if ("parts", "part_key") not in self._cuts:
            parts = self.whole("parts").filter(pl.col("table_name").is_in(self.LARGE))
            self._cuts["parts", "part_key"] = Cut(parts.select("part_key", "table_name", "part_sha256"), "part_key")
        return self._cuts["parts", "part_key"]
