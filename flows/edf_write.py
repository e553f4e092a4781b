"""Writing one ECG lead as EDF+C or EDF+D, streamed, whatever its length.

Source of the layout: Kemp & Olivan, Clin Neurophysiol 2003;114:1755-61 (EDF+), sections 2.1 and 2.2. The times of data
records stand in time-keeping annotations; a record that does not follow on makes the file discontinuous (EDF+D).
Reading lives in flows/readers/edf.py.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from datetime import datetime
from pathlib import Path
from typing import BinaryIO, NamedTuple

import numpy as np
from numpy.typing import NDArray

_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_TIME_BYTES = 24  # room for the time-keeping annotation of one data record
_MARK_BYTES = 40  # and for a mark beside it
_DIGITAL_MIN, _DIGITAL_MAX = -32768, 32767


class EdfHeader(NamedTuple):
    """What the file says about its recording."""

    patient_code: str
    device_serial: str
    start_local: datetime  # naive, the clock at the patient's place
    fs_hz: int
    mv_per_count: float
    lead: str = "ECG"
    record_s: int = 10  # length of one data record
    has_marks: bool = False  # there is room for one mark in each data record

    @property
    def annotation_bytes(self) -> int:
        """Room for annotations in one data record."""
        return _TIME_BYTES + _MARK_BYTES * self.has_marks


class Mark(NamedTuple):
    """Something that the patient marked, in whole milliseconds after the start of the file."""

    offset_ms: int
    text: str


class Piece(NamedTuple):
    """Samples and where they begin, in whole milliseconds after the start of the file, and the marks within them."""

    offset_ms: int
    counts: NDArray[np.int16]
    marks: tuple[Mark, ...] = ()


def write_edf(path: Path, header: EdfHeader, pieces: Iterable[Piece]) -> None:
    """Write pieces in time order; each is a whole number of data records and does not begin before the last one ends.

    Raises ValueError for a piece that breaks this, for a code with blanks or characters outside printable ASCII, and for
    annotations that a data record has no room for.
    """
    count, is_continuous, next_ms = 0, True, 0
    with path.open("wb") as file:
        _write_header(file, header, count, is_continuous)
        for piece in pieces:
            records = _records(header, piece, next_ms)
            is_continuous &= piece.offset_ms == next_ms
            next_ms = piece.offset_ms + len(records) * header.record_s * 1000
            count += len(records)
            file.write(records.tobytes())
        file.seek(0)
        _write_header(file, header, count, is_continuous)
        file.flush()
        os.fsync(file.fileno())


def _records(header: EdfHeader, piece: Piece, next_ms: int) -> NDArray[np.void]:
    """Data records of a piece: samples, then the annotation that keeps the time, then the marks of its seconds."""
    per_record = header.fs_hz * header.record_s
    count, rest = divmod(len(piece.counts), per_record)
    if rest or piece.offset_ms < next_ms:
        raise ValueError(
            f"piece at {piece.offset_ms} ms with {len(piece.counts)} samples; expected a multiple of {per_record} "
            f"samples beginning at {next_ms} ms or later"
        )
    records = np.zeros(count, np.dtype([("counts", "<i2", (per_record,)), ("notes", f"S{header.annotation_bytes}")]))
    records["counts"] = piece.counts.reshape(count, per_record)
    first_ms = piece.offset_ms + header.start_local.microsecond // 1000
    notes = [_note(first_ms + n * header.record_s * 1000, "") for n in range(count)]
    for mark in piece.marks:
        number = (mark.offset_ms - piece.offset_ms) // (header.record_s * 1000)
        notes[number] += b"\0" + _note(mark.offset_ms + header.start_local.microsecond // 1000, f"{mark.text}\x14")
        if len(notes[number]) > header.annotation_bytes:
            raise ValueError(f"no room for the mark {mark.text!r}; a data record holds {header.annotation_bytes} bytes")
    records["notes"] = notes
    return records


def _note(onset_ms: int, text: str) -> bytes:
    """A time-stamped annotation; without a text it keeps the time of its record."""
    seconds, rest_ms = divmod(onset_ms, 1000)
    fraction = f".{rest_ms:03d}".rstrip("0") if rest_ms else ""
    return f"+{seconds}{fraction}\x14{text or chr(0x14)}".encode()


def _write_header(file: BinaryIO, header: EdfHeader, count: int, is_continuous: bool) -> None:
    start = header.start_local
    day = f"{start:%d}-{_MONTHS[start.month - 1]}-{start:%Y}"
    low_mv, high_mv = (_number(edge * header.mv_per_count) for edge in (_DIGITAL_MIN, _DIGITAL_MAX))
    for text, width in (
        ("0", 8), (f"{_code(header.patient_code)} X X X", 80),
        (f"Startdate {day} X X {_code(header.device_serial)}", 80),
        (f"{start:%d.%m.%y}", 8), (f"{start:%H.%M.%S}", 8), ("768", 8), ("EDF+C" if is_continuous else "EDF+D", 44),
        (str(count), 8), (str(header.record_s), 8), ("2", 4),
        (header.lead, 16), ("EDF Annotations", 16), ("adhesive patch", 80), ("", 80), ("mV", 8), ("", 8),
        (low_mv, 8), ("-1", 8), (high_mv, 8), ("1", 8),
        (str(_DIGITAL_MIN), 8), (str(_DIGITAL_MIN), 8), (str(_DIGITAL_MAX), 8), (str(_DIGITAL_MAX), 8),
        ("", 80), ("", 80), (str(header.fs_hz * header.record_s), 8), (str(header.annotation_bytes // 2), 8), ("", 32), ("", 32),
    ):  # fmt: skip
        file.write(_field(text, width))


def _field(text: str, width: int) -> bytes:
    padded = text.ljust(width)
    if len(padded) > width or not all(" " <= character <= "~" for character in padded):
        raise ValueError(f"EDF field {text!r}; expected at most {width} printable ASCII characters")
    return padded.encode("ascii")


def _code(text: str) -> str:
    if not text or " " in text:
        raise ValueError(f"code {text!r}; expected one word without blanks")
    return text


def _number(value: float) -> str:
    """As exact as eight characters allow."""
    for digits in range(8, 0, -1):
        text = f"{value + 0.0:.{digits}g}"  # plus 0.0: never -0
        if len(text) <= 8:
            return text
    raise ValueError(f"{value} cannot be written in eight characters")
