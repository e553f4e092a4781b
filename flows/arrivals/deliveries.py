"""What arrived: the rows of the lake table `deliveries`, and the landed pieces behind the accepted ones.

Rows of many deliveries share a part, so that ten thousand files do not make ten thousand parts.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import polars as pl

from flows.arrivals.assembly import device_key
from flows.arrivals.landing import typed_frame
from warehouse.ledger import Ledger
from warehouse.parts import Part, read_part, write_part

ACCEPTED, WAITING, SKIPPED, QUARANTINED = "accepted", "waiting", "skipped", "quarantined"
_HASHES = ("content_sha256", "signal_sha256")
Loads = dict[tuple[str, str], Sequence[Part]]


class Deliveries:
    """Rows by delivery_id as the ledger has them, and the changes of this run until they are committed."""

    def __init__(self, lake: Path, ledger: Ledger) -> None:
        self._lake = lake
        parts = ledger.parts("deliveries")
        frames = [read_part(lake, part) for part in parts]
        self.rows: dict[str, dict[str, Any]] = {
            row["delivery_id"]: row for frame in frames for row in frame.iter_rows(named=True)
        }
        self._changed: set[str] = set()
        self._accepted: dict[tuple[str, str], set[str]] = defaultdict(set)
        for row in self.rows.values():
            self._index(row)

    def put(self, row: Mapping[str, Any]) -> bool:
        """Add or replace a row; returns whether that changes anything."""
        complete = typed_frame("deliveries", [dict(row)]).row(0, named=True)
        if self.rows.get(complete["delivery_id"]) == complete:
            return False
        self._unindex(complete["delivery_id"])
        self.rows[complete["delivery_id"]] = complete
        self._index(complete)
        self._changed.add(_shard(complete["delivery_id"]))
        return True

    def drop(self, delivery_id: str) -> None:
        """Forget a delivery that is no longer there."""
        self._unindex(delivery_id)
        del self.rows[delivery_id]
        self._changed.add(_shard(delivery_id))

    def loads(self) -> Loads:
        """What the ledger has to commit for the changes since the last call."""
        by_shard: dict[str, list[dict[str, Any]]] = defaultdict(list)
        for delivery_id in sorted(self.rows):
            by_shard[_shard(delivery_id)].append(self.rows[delivery_id])
        loads: Loads = {}
        for shard in sorted(self._changed):
            rows = by_shard.get(shard, [])
            parts = [write_part(self._lake, "deliveries", shard, typed_frame("deliveries", rows))] if rows else []
            loads["deliveries", shard] = parts
        self._changed.clear()
        return loads

    def accepted_with(self, column: str, value: str) -> list[dict[str, Any]]:
        """Accepted rows whose content_sha256 or signal_sha256 is `value`, in order of their code."""
        return [self.rows[name] for name in sorted(self._accepted[column, value])]

    def _index(self, row: Mapping[str, Any]) -> None:
        if row["status"] == ACCEPTED:
            for column in _HASHES:
                self._accepted[column, row[column]].add(row["delivery_id"])

    def _unindex(self, delivery_id: str) -> None:
        row = self.rows.get(delivery_id)
        if row is not None:
            for column in _HASHES:
                self._accepted[column, row[column]].discard(delivery_id)

    def with_status(self, *status: str) -> list[dict[str, Any]]:
        """Rows of one of the statuses, in order of their code."""
        return [self.rows[name] for name in sorted(self.rows) if self.rows[name]["status"] in status]


def _shard(delivery_id: str) -> str:
    return f"shard-{delivery_id[:2]}"


class Pieces:
    """Landed pieces and marks of accepted deliveries, one part per device."""

    def __init__(self, lake: Path, ledger: Ledger) -> None:
        self._lake, self._ledger = lake, ledger
        self._frames: dict[tuple[str, str], pl.DataFrame] = {}

    def devices(self) -> list[str]:
        """Keys of all devices that have pieces."""
        return [part.key for part in self._ledger.parts("pieces")]

    def of(self, table: str, key: str) -> pl.DataFrame:
        """Rows of `pieces` or `delivered_marks` of one device key."""
        if (table, key) not in self._frames:
            parts = self._ledger.parts(table, key)
            self._frames[table, key] = read_part(self._lake, parts[0]) if parts else typed_frame(table, [])
        return self._frames[table, key]

    def with_landed(self, device_serial: str, pieces: Iterable[pl.DataFrame], marks: Iterable[pl.DataFrame]) -> str:
        """Add what landed; returns the device's key."""
        key = device_key(device_serial)
        before = self.of("pieces", key)
        first = max(before["arrival_number"].to_list(), default=-1) + 1
        numbered = [
            frame.with_columns(pl.lit(first + n, pl.Int32).alias("arrival_number")) for n, frame in enumerate(pieces)
        ]
        self._frames["pieces", key] = pl.concat([before, *numbered])
        self._frames["delivered_marks", key] = pl.concat([self.of("delivered_marks", key), *marks])
        return key

    def without(self, key: str, delivery_ids: Iterable[str]) -> None:
        """Take deliveries out again."""
        gone = list(delivery_ids)
        for table in ("pieces", "delivered_marks"):
            self._frames[table, key] = self.of(table, key).filter(~pl.col("delivery_id").is_in(gone))

    def loads(self, key: str) -> Loads:
        """What the ledger has to commit for one device."""
        return {
            (table, key): [write_part(self._lake, table, key, frame)] if frame.height else []
            for table in ("pieces", "delivered_marks")
            for frame in [self.of(table, key)]
        }
