"""The rows of one patient or one recording, out of the published tables.

Small tables are read once and cut by patient or recording; the large ones are asked for one recording at a time.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
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

    def of(self, value: str) -> pl.DataFrame:
        """Return the rows with this value, in the order of the table; none is an empty frame with its columns."""
        return self._pieces.get(value, self._empty)


class Tables:
    """The published tables as pages read them."""

    BY_PATIENT = ("recordings", "wear_days", "local_hours", "therapies", "periods", "changes", "attention")
    BY_RECORDING = ("segments", "families", "hours", "findings", "review_sheet", "reviews")

    def __init__(self, published: PublishedTables) -> None:
        self._published = published
        self._cuts: dict[str, Cut] = {}

    def whole(self, name: str) -> pl.DataFrame:
        """Return a table with missing numbers as NULL."""
        return self._published.table(name).fill_nan(None)

    @property
    def queries(self) -> Sequence[WorkedQuery]:
        """Worked queries over the published tables."""
        return self._published.queries()

    @cached_property
    def patients(self) -> pl.DataFrame:
        return self.whole("patients").sort("patient_code")

    def of_patient(self, name: str, patient_code: str) -> pl.DataFrame:
        """Return a patient's rows of one of BY_PATIENT."""
        return self._cut(name, "patient_code").of(patient_code)

    def of_recording(self, name: str, recording_id: str) -> pl.DataFrame:
        """Return a recording's rows of one of BY_RECORDING."""
        return self._cut(name, "recording_id").of(recording_id)

    def large(self, name: str, recording_id: str) -> pl.DataFrame:
        """Return a recording's rows of a table too large to hold: strips, episodes, quality_windows."""
        return self._published.table(name, {"recording_id": recording_id}).fill_nan(None)

    def _cut(self, name: str, column: str) -> Cut:
        if name not in self._cuts:
            self._cuts[name] = Cut(self.whole(name), column)
        return self._cuts[name]
