"""From the inbox to landed recordings: open what arrived, find its wear, land its samples, say what was declined.

One ledger commit makes deliveries, recordings, segments and samples of a batch visible together. Beats are not made
here.
"""

from __future__ import annotations

import contextlib
import hashlib
import shutil
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from flows import run_log
from flows.arrivals import inbox as door
from flows.arrivals import reviews
from flows.arrivals.assembly import Match
from flows.arrivals.deliveries import ACCEPTED, QUARANTINED, SKIPPED, WAITING, Deliveries, Loads, Pieces
from flows.arrivals.inbox import Candidate, SeenFiles
from flows.arrivals.landing import Identity, Landed, land
from flows.arrivals.privacy import shown_name, shown_serial
from flows.arrivals.quarantine import quarantine, remove
from flows.arrivals.recordings import Recordings
from flows.arrivals.scaling import Scale, scaled_like
from flows.arrivals.staging import content_hash, hash_file, staged
from flows.arrivals.wearing import Wearing, wearing_of
from flows.readers.archive import Limits, is_archive
from flows.readers.codes import Declined, Refused, Waits
from flows.readers.identify import head_of, open_delivery
from flows.readers.recording import NO_SITE, Opened, Site
from flows.register import Register
from flows.settings import Settings
from warehouse.ledger import Ledger
from warehouse.parts import PartError

_BATCH_SAMPLES = 50_000_000
_BATCH_DELIVERIES = 500


@dataclass(frozen=True)
class Arrivals:
    """What one run found at the door; `waiting` counts all that wait now."""

    accepted: int = 0
    waiting: int = 0
    skipped: int = 0
    quarantined: int = 0
    changed: bool = False


def ingest(
    folder: Path, settings: Settings, register: Register, ledger: Ledger, say: Callable[[str], None] = lambda text: None
) -> Arrivals:
    """Take everything new of the inbox and bring all recordings in line with the register.

    Declined deliveries never stop the others. Running again without anything new changes nothing.
    """
    return _Run(folder, settings, register, ledger, say).all()


class _Skip(Exception):
    """The delivery holds nothing new."""

    def __init__(self, code: str, sentence: str, recording_id: str | None) -> None:
        super().__init__(sentence)
        self.code, self.sentence, self.recording_id = code, sentence, recording_id


class _Later(Exception):
    """The delivery is looked at again after all others of this run."""


class _Run:
    """One pass over the inbox."""

    def __init__(
        self, folder: Path, settings: Settings, register: Register, ledger: Ledger, say: Callable[[str], None]
    ) -> None:
        self._folder, self._settings, self._register, self._ledger, self._say = folder, settings, register, ledger, say
        self._lake = folder / "lake"
        self._site = Site(**vars(settings.site))
        self._limits = Limits(settings.inbox.largest_unpacked_mb * 10**6, settings.inbox.largest_unpack_ratio)
        self._deliveries = Deliveries(self._lake, ledger)
        self._recordings = Recordings(self._lake, ledger, register, self._deliveries, Pieces(self._lake, ledger))
        self._seen = SeenFiles(self._lake / "seen.json")
        self._batch: list[tuple[str, Landed]] = []
        self._batch_samples = 0
        self._review_loads: Loads = {}
        self._present: dict[str, Candidate] = {}
        self._new: dict[str, set[str]] = {status: set() for status in (ACCEPTED, WAITING, SKIPPED, QUARANTINED)}
        self._first_version = ledger.version

    def all(self) -> Arrivals:
        """Every candidate, then the recordings, then the moves that the ledger has decided."""
        shutil.rmtree(self._lake / "staging", ignore_errors=True)  # of a run that was killed
        candidates = door.look(self._folder / "inbox", self._settings.inbox, time.time())
        later = [candidate for candidate in candidates if not self._take(candidate, may_postpone=True)]
        self._commit()
        for candidate in later:
            self._take(candidate, may_postpone=False)
        self._forget_gone()
        self._commit(all_devices=True)
        self._seen.save()
        self._move_decided()
        return Arrivals(
            accepted=len(self._new[ACCEPTED]),
            waiting=len(self._deliveries.with_status(WAITING)),
            skipped=len(self._new[SKIPPED]),
            quarantined=len(self._new[QUARANTINED]),
            changed=self._ledger.version != self._first_version,
        )

    # One delivery

    def _take(self, candidate: Candidate, *, may_postpone: bool) -> bool:
        """Decide one candidate; False when it is better decided after the others."""
        sha256 = self._seen.hash_of(candidate.name, candidate.size, candidate.mtime_ns)
        delivery_id = _delivery_id(sha256 or "?", candidate.name)
        try:
            if candidate.problem is not None:
                raise candidate.problem
            if sha256 and self._is_decided(candidate, delivery_id):
                return True
            if sha256:
                self._would_match(candidate)
            with staged(self._lake / "staging" / "now", candidate.files) as copy:
                sha256 = copy.content_sha256
                delivery_id = _delivery_id(sha256, candidate.name)
                if not self._is_decided(candidate, delivery_id):
                    self._accept(candidate, delivery_id, sha256, copy.files, may_postpone)
        except _Later:
            return False
        except _Skip as skip:
            self._put(candidate, delivery_id, sha256, SKIPPED, skip.code, skip.sentence, recording_id=skip.recording_id)
        except Declined as declined:
            sha256 = sha256 or _hash_or_none(candidate)
            delivery_id = _delivery_id(sha256 or "?", candidate.name)
            status = WAITING if isinstance(declined, Waits) else QUARANTINED
            self._put(candidate, delivery_id, sha256, status, declined.code, declined.sentence)
        self._seen.note(candidate.name, candidate.size, candidate.mtime_ns, sha256)
        return True

    def _is_decided(self, candidate: Candidate, delivery_id: str) -> bool:
        """An earlier run accepted, skipped or refused these bytes under this name."""
        row = self._deliveries.rows.get(delivery_id)
        if row is None or (row["status"] == WAITING and not row["signal_sha256"]):
            return False
        self._present[delivery_id] = candidate
        self._seen.note(candidate.name, candidate.size, candidate.mtime_ns, row["content_sha256"])
        return True

    def _would_match(self, candidate: Candidate) -> None:
        """Open a delivery that waited before where it lies, to spare copying it again while it must wait on."""
        with contextlib.suppress(OSError):
            if not is_archive(head_of(candidate.files[0])):
                self._wearing(candidate, open_delivery(candidate.files, self._site))

    def _accept(
        self, candidate: Candidate, delivery_id: str, sha256: str, files: tuple[Path, ...], may_postpone: bool
    ) -> None:
        self._skip_known_bytes(sha256)
        if reviews.is_decisions(head_of(files[0])):
            self._accept_decisions(candidate, delivery_id, sha256, files[0])
            return
        scratch = self._lake / "staging" / "now" / "unpacked"
        with _faults_declined():
            opened = open_delivery(files, self._site, scratch=scratch, limits=self._limits)
        opened, serial, matched, file_zone = self._wearing(candidate, opened)
        if may_postpone and len(matched.possible_starts) > 1:
            raise _Later
        scale = self._scale_of(serial, matched.wear.recording_id)
        with _faults_declined():
            opened = scaled_like(opened, scale) if scale else opened
            landed = land(self._lake, opened, Identity(delivery_id, serial, file_zone))
        self._refuse_known_samples(landed, opened, matched)
        row = self._row(candidate, delivery_id, sha256) | {
            "status": ACCEPTED,
            "format": opened.format,
            "findings": " ".join(sorted({found.code for found in landed.findings})) or None,
            "recording_id": matched.wear.recording_id,
            "start_local": _start_local(opened, matched),
            "signal_sha256": landed.signal_sha256,
        }
        self._present[delivery_id] = candidate
        self._deliveries.put(row)
        self._batch.append((delivery_id, landed))
        self._batch_samples += opened.n_samples
        if self._batch_samples >= _BATCH_SAMPLES or len(self._batch) >= _BATCH_DELIVERIES:
            self._commit()

    def _scale_of(self, serial: str, recording_id: str) -> Scale | None:
        """Scale of the recording's first part, whether it is in the ledger or still in the batch."""
        known = self._recordings.scale_of(serial, recording_id)
        batch = (
            Scale.of(landed.pieces.row(0, named=True))
            for name, landed in self._batch
            if self._deliveries.rows[name]["recording_id"] == recording_id
        )
        return known or next(batch, None)

    def _accept_decisions(self, candidate: Candidate, delivery_id: str, sha256: str, file: Path) -> None:
        recording_id, loads = reviews.land(self._lake, self._ledger, file, delivery_id)
        self._review_loads |= loads
        row = self._row(candidate, delivery_id, sha256)
        row |= {"status": ACCEPTED, "format": reviews.FORMAT, "recording_id": recording_id}
        self._present[delivery_id] = candidate
        self._deliveries.put(row)
        self._tell(self._deliveries.rows[delivery_id])

    def _wearing(self, candidate: Candidate, opened: Opened) -> Wearing:
        self._wait_while_open(candidate, opened)
        stems = (candidate.files[0].stem, opened.file_stem)
        return wearing_of(opened, stems, self._register, self._site.clock_zone)

    def _wait_while_open(self, candidate: Candidate, opened: Opened) -> None:
        """A file that says it is still being recorded is taken when two runs in a row found it unchanged."""
        is_open = any(found.code == "record_count_open" for found in opened.findings)
        if is_open and not self._seen.is_unchanged(candidate.name, candidate.size, candidate.mtime_ns):
            raise Waits(
                "still_being_written",
                "the header leaves the number of records open, as it does while recording. "
                "It is taken when the next run finds it unchanged.",
            )

    # Bytes and samples that are there already

    def _skip_known_bytes(self, sha256: str) -> None:
        for row in self._deliveries.accepted_with("content_sha256", sha256):
            raise _Skip(
                "same_content_again",
                f"the same bytes were accepted as {row['file_name']}; nothing was counted twice.",
                row["recording_id"],
            )

    def _refuse_known_samples(self, landed: Landed, opened: Opened, matched: Match) -> None:
        if any(found.code == "flat" for found in landed.findings):
            return
        for row in self._deliveries.accepted_with("signal_sha256", landed.signal_sha256):
            same_start = row["start_local"] == _start_local(opened, matched)
            if same_start and row["recording_id"] == matched.wear.recording_id:
                raise _Skip(
                    "same_samples_other_header",
                    f"the same samples were accepted as {row['file_name']} under another header; "
                    "nothing was counted twice.",
                    row["recording_id"],
                )
            raise Refused(
                "same_start_other_patient" if same_start else "same_samples_other_time",
                f"the same samples were accepted as {row['file_name']} for {row['recording_id']}, with another "
                f"{'device' if same_start else 'start'}; expected them once. Check which of the two is right.",
            )

    # Rows and commits

    def _row(self, candidate: Candidate, delivery_id: str, sha256: str) -> dict[str, Any]:
        return {
            "delivery_id": delivery_id,
            "file_name": shown_name(candidate.name, delivery_id, self._register.codes),
            "file_bytes": candidate.size,
            "content_sha256": sha256 or None,
            "received_utc": candidate.received_utc,
        }

    def _put(
        self,
        candidate: Candidate,
        delivery_id: str,
        sha256: str,
        status: str,
        code: str,
        reason: str,
        recording_id: str | None = None,
    ) -> None:
        self._present[delivery_id] = candidate
        row = self._row(candidate, delivery_id, sha256)
        row |= {"status": status, "code": code, "reason": reason, "recording_id": recording_id}
        if self._deliveries.put(row):
            self._tell(self._deliveries.rows[delivery_id])

    def _forget_gone(self) -> None:
        """Drop waiting rows whose file is no longer in the inbox (or has changed its bytes)."""
        for row in self._deliveries.with_status(WAITING):
            if row["delivery_id"] not in self._present and not row["signal_sha256"]:
                self._deliveries.drop(row["delivery_id"])

    def _commit(self, *, all_devices: bool = False) -> None:
        """Land the batch, and with `all_devices` whatever the register changed, in one ledger commit."""
        landed, self._batch, self._batch_samples = self._batch, [], 0
        loads = self._recordings.bring_in_line(landed, all_devices=all_devices)
        refused = self._recordings.take_refused()
        loads |= self._deliveries.loads() | self._review_loads
        self._review_loads = {}
        if loads:
            self._ledger.commit(loads, note="ingest")
        self._recordings.committed()
        for delivery_id in [*(name for name, _ in landed if name not in refused), *refused]:
            self._tell(self._deliveries.rows[delivery_id])

    def _tell(self, row: dict[str, Any]) -> None:
        self._new[row["status"]].add(row["delivery_id"])
        told = f"into {row['recording_id']}" if row["status"] == ACCEPTED else f"{row['code']}: {row['reason']}"
        self._say(f"  {row['status']} {row['file_name']} {told}")
        run_log.tell(
            "delivery decided",
            delivery=row["delivery_id"],
            status=row["status"],
            code=row["code"],
            recording=row["recording_id"],
        )

    def _move_decided(self) -> None:
        """Do with the files what the ledger says; a run that was killed before this is finished here."""
        for delivery_id, candidate in sorted(self._present.items()):
            row = self._deliveries.rows.get(delivery_id)
            if row is None:
                continue
            if row["status"] == QUARANTINED:
                quarantine(self._folder, candidate, delivery_id, row["code"], row["reason"], self._register.codes)
            elif row["status"] in (ACCEPTED, SKIPPED) and self._settings.inbox.accepted_files == "remove":
                remove(self._folder, candidate)


@contextlib.contextmanager
def _faults_declined() -> Iterator[None]:
    """A fault of a reader stops its own delivery only: the others of the night go on."""
    try:
        yield
    except (Declined, OSError, PartError):
        raise
    except Exception as fault:
        raise Refused(
            "reader_failed",
            f"the reader failed on it with {type(fault).__name__}; this is a fault of the program, not of the file. "
            "Keep the file, report the fault, and retry with a newer version.",
        ) from fault


def _start_local(opened: Opened, matched: Match) -> datetime | None:
    return matched.wear.start_local if matched.start_from_register else opened.start_local


def _delivery_id(content_sha256: str, name: str) -> str:
    return hashlib.sha256(f"{content_sha256}/{name}".encode("utf-8", "surrogateescape")).hexdigest()[:16]


def _hash_or_none(candidate: Candidate) -> str:
    """Hash of the files where they lie; empty where they cannot be read or are no plain files."""
    if candidate.problem is not None and candidate.problem.code in ("not_a_plain_file", "still_being_written"):
        return ""
    try:
        return content_hash([hash_file(path) for path in candidate.files])
    except (Declined, OSError):
        return ""


def inspect(path: Path, settings: Settings | None = None) -> dict[str, Any]:
    """What a file holds and what would be kept of it, without taking it in. Plain values only.

    With a programme's settings its site's layout holds. Words of the person are counted, never shown.
    """
    site = Site(**vars(settings.site)) if settings else NO_SITE
    with tempfile.TemporaryDirectory() as scratch:
        try:
            return _inspected(open_delivery([path], site, scratch=Path(scratch) / "unpacked"))
        except Declined as declined:
            return {"would_be": QUARANTINED, "code": declined.code, "reason": declined.sentence}


def _inspected(opened: Opened) -> dict[str, Any]:
    recorded_h = opened.n_samples / float(opened.rate) / 3600
    return {
        "would_be": f"{ACCEPTED}, when register/wears.csv has its device and time",
        "format": opened.format,
        "device_serial": shown_serial(opened.device_words),
        "start_local": str(opened.start_local) if opened.start_local else "not in the file",
        "zone": opened.zone or "not in the file",
        "fs_hz": float(opened.rate),
        "lead": opened.lead,
        "channels_left_out": len(opened.other_channels),
        "recorded_h": round(recorded_h, 4),
        "gaps": len(opened.stretches) - 1,
        "mv_per_count": opened.mv_per_count,
        "range_mv": [round((rail - opened.count_at_zero_mv) * opened.mv_per_count, 4) for rail in opened.rails],
        "marks": len(opened.marks),
        "findings": [f"{found.code}: {found.detail}".removesuffix(": ") for found in opened.findings],
        "kept_of_the_person": "the patient code, if the register knows it",
        "dropped_words_of_the_person": len(opened.patient_words),
    }
