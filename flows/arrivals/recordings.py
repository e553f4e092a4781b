"""The lake's recordings brought in line with landed pieces and register, and what follows from that for deliveries.

Changed samples take their derived tables out of force in the same commit, so the detector sees what is left to do.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import polars as pl

from flows.arrivals.assembly import Assembled, assemble, device_key, parts_of, signal_parts
from flows.arrivals.deliveries import ACCEPTED, QUARANTINED, WAITING, Deliveries, Loads, Pieces
from flows.arrivals.landing import Landed, typed_frame
from flows.arrivals.placing import DeliveredPart, Misfit, from_ns
from flows.arrivals.scaling import Scale
from flows.register import Register, Wear
from warehouse.ledger import Ledger
from warehouse.parts import Part, read_part, write_part, write_whole
from warehouse.schema import LAKE

_OWN_TABLES = ("recordings", "segments", "signal", "marks")
_NOT_OF_THE_SIGNAL = ("zone", "zone_source", "findings")  # columns of a recording that no beat depends on


class Recordings:
    """Everything that follows from pieces and register, device by device."""

    def __init__(self, lake: Path, ledger: Ledger, register: Register, deliveries: Deliveries, pieces: Pieces) -> None:
        self._lake, self._ledger, self._register = lake, ledger, register
        self._deliveries, self._pieces = deliveries, pieces
        self._wears = {row["recording_id"]: Wear(**row) for row in register.wears.iter_rows(named=True)}
        self._cache = lake / "assembled.json"
        self._done = _read_json(self._cache)
        self._doing: dict[str, str] = {}
        self._refused: list[str] = []

    def bring_in_line(self, landed: Sequence[tuple[str, Landed]], *, all_devices: bool) -> Loads:
        """Loads that make recordings follow from what landed; with `all_devices` also from a changed register."""
        changed = self._add(landed)
        keys = sorted({*changed, *(self._pieces.devices() if all_devices else [])})
        loads: Loads = {}
        for key in keys:
            loads |= self._device(key, has_new=key in changed)
        return loads

    def scale_of(self, device_serial: str, recording_id: str) -> Scale | None:
        """Scale of the first accepted part of a recording, None when there is none yet."""
        pieces = self._pieces.of("pieces", device_key(device_serial)).sort("arrival_number")
        for piece in pieces.unique("delivery_id", keep="first", maintain_order=True).iter_rows(named=True):
            if self._deliveries.rows[piece["delivery_id"]]["recording_id"] == recording_id:
                return Scale.of(piece)
        return None

    def committed(self) -> None:
        """Remember which devices are in line, now that the ledger has them."""
        if self._doing:
            self._done |= self._doing
            self._doing = {}
            write_whole(self._cache, json.dumps(self._done, sort_keys=True).encode())

    def take_refused(self) -> list[str]:
        """Deliveries that turned out to contradict others since the last call."""
        refused, self._refused = self._refused, []
        return refused

    def _add(self, landed: Sequence[tuple[str, Landed]]) -> set[str]:
        by_device: dict[str, list[Landed]] = {}
        for _, each in landed:
            by_device.setdefault(each.pieces["device_serial"][0], []).append(each)
        return {
            self._pieces.with_landed(serial, [each.pieces for each in own], [each.marks for each in own])
            for serial, own in by_device.items()
        }

    def _device(self, key: str, *, has_new: bool) -> Loads:
        pieces = self._pieces.of("pieces", key)
        state = self._state(pieces)
        if not has_new and self._done.get(key) == state:
            return {}
        before = {self._deliveries.rows[name]["recording_id"] for name in pieces["delivery_id"].unique()}
        parts = parts_of(self._lake, pieces, self._register)
        without_wear = parts.pop("", [])
        loads: Loads = {}
        for recording_id, own in sorted(parts.items()):
            assembled, misfits = assemble(self._lake, pieces, self._wears[recording_id], own)
            self._refuse(key, misfits)
            if assembled is not None:
                loads |= self._recording(key, recording_id, assembled)
                before.discard(recording_id)
        for recording_id in sorted(name for name in before if name):
            loads |= self._withdrawal(recording_id)
        loads |= self._without_wear(key, pieces, without_wear)
        pieces = self._pieces.of("pieces", key)
        self._doing[key] = self._state(pieces)
        return loads | (self._pieces.loads(key) if has_new or self._refused else {})

    def _state(self, pieces: pl.DataFrame) -> str:
        """Hash of all that a device's recordings follow from."""
        serials = pieces["device_serial"].unique().to_list()
        wears = [wear for serial in sorted(serials) for wear in self._register.wears_of(serial)]
        digest = hashlib.sha256(repr(wears).encode())
        digest.update(pieces.sort("delivery_id", "piece", "block").write_csv().encode())
        return digest.hexdigest()

    def _recording(self, key: str, recording_id: str, assembled: Assembled) -> Loads:
        marks = self._marks(key, recording_id, assembled)
        for delivery_id in sorted({*assembled.starts_ns, *assembled.findings}):
            self._accept(delivery_id, recording_id, assembled.findings.get(delivery_id, ()))
        before = self._ledger.parts(key=recording_id)
        if self._is_other_signal(before, assembled):
            withdrawn: Loads = {(part.table, recording_id): [] for part in before if part.table not in _OWN_TABLES}
        else:
            withdrawn = {}
        return withdrawn | {
            ("recordings", recording_id): [write_part(self._lake, "recordings", recording_id, assembled.recording)],
            ("segments", recording_id): [write_part(self._lake, "segments", recording_id, assembled.segments)],
            ("signal", recording_id): list(assembled.signal),
            ("marks", recording_id): [write_part(self._lake, "marks", recording_id, marks)] if marks.height else [],
        }

    def _is_other_signal(self, before: Iterable[Part], assembled: Assembled) -> bool:
        """Samples, times or scale differ from what is in force."""
        in_force = {table: [part for part in before if part.table == table] for table in _OWN_TABLES}
        if not in_force["recordings"] or in_force["signal"] != list(assembled.signal):
            return True
        recording = read_part(self._lake, in_force["recordings"][0])
        segments = read_part(self._lake, in_force["segments"][0])
        same = recording.drop(_NOT_OF_THE_SIGNAL).equals(assembled.recording.drop(_NOT_OF_THE_SIGNAL))
        return not (same and segments.equals(assembled.segments))

    def _marks(self, key: str, recording_id: str, assembled: Assembled) -> pl.DataFrame:
        rows = [
            {
                "recording_id": recording_id,
                "delivery_id": mark["delivery_id"],
                "mark_utc": from_ns(assembled.starts_ns[mark["delivery_id"]] + mark["offset_ns"]),
                "duration_s": mark["duration_s"],
                "mark_text": mark["mark_text"],
            }
            for mark in self._pieces.of("delivered_marks", key).iter_rows(named=True)
            if mark["delivery_id"] in assembled.starts_ns
        ]
        return typed_frame("marks", rows)

    def _withdrawal(self, recording_id: str) -> Loads:
        """Take a recording and all that was derived from it out of force."""
        return {(part.table, recording_id): [] for part in self._ledger.parts(key=recording_id) if part.table in LAKE}

    def _without_wear(self, key: str, pieces: pl.DataFrame, parts: Sequence[DeliveredPart]) -> Loads:
        """Keep the samples of deliveries whose wear left the register in the lake, out of every recording."""
        names = [part.delivery_id for part in parts]
        for delivery_id in names:
            row = self._deliveries.rows[delivery_id]
            self._deliveries.put(
                row
                | {
                    "status": WAITING,
                    "code": "wear_not_in_register",
                    "reason": "its wear left register/wears.csv or was moved in time; expected a row that holds its "
                    "start. Its samples are kept and shown again when the row is back.",
                    "recording_id": None,
                }
            )
        kept_key = f"without-wear-{key}"
        kept = signal_parts(pieces.filter(pl.col("delivery_id").is_in(names)))
        if not kept and not self._ledger.parts("signal", kept_key):
            return {}
        return {("signal", kept_key): [part._replace(key=kept_key, segment=0, block=n) for n, part in enumerate(kept)]}

    def _accept(self, delivery_id: str, recording_id: str, codes: Iterable[str]) -> None:
        row = self._deliveries.rows[delivery_id]
        findings = sorted({*(row["findings"] or "").split(), *codes})
        self._deliveries.put(
            row
            | {
                "status": ACCEPTED,
                "code": None,
                "reason": None,
                "recording_id": recording_id,
                "findings": " ".join(findings) or None,
            }
        )

    def _refuse(self, key: str, misfits: Sequence[Misfit]) -> None:
        refused = [(delivery_id, misfit.reason) for misfit in misfits for delivery_id in misfit.delivery_ids]
        for delivery_id, reason in refused:
            row: dict[str, Any] = self._deliveries.rows[delivery_id]
            told = {"status": QUARANTINED, "code": reason.code, "reason": reason.sentence}
            self._deliveries.put(row | told | {"recording_id": None, "signal_sha256": None})
            self._refused.append(delivery_id)
        self._pieces.without(key, [delivery_id for delivery_id, _ in refused])


def _read_json(path: Path) -> dict[str, str]:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return found if isinstance(found, dict) else {}
