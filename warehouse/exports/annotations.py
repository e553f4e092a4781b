"""Beats of one recording as annotation files that other ECG software reads: WFDB `.atr`, and EDF+ with events.

A file holds one gap-free segment, because both formats count from the first sample of one stretch. The symbols are
those of the beat classes; a late ventricular beat that ends a pause is an escape beat.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from warehouse.exports.provenance import provenance
from warehouse.parts import write_whole
from warehouse.published import Published, PublishedError

SYMBOLS = {"N": "N", "S": "S", "V": "V", "F": "F", "Q": "Q", "escape": "E"}
# Annotation codes of the WFDB annotation format.
_CODES = {"N": 1, "V": 5, "F": 6, "S": 9, "E": 10, "Q": 13}
_SKIP, _AUX = 59, 63
_MAX_STEP, _MAX_AUX = 1023, 255

_EDF_RECORD_BYTES = 8192
_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")


class SegmentBeats(NamedTuple):
    """Beats of one segment: sample index and symbol of each, shape (n_beats,), and what places them in time."""

    name: str
    sample: NDArray[np.int64]
    symbol: NDArray[np.str_]
    fs_hz: float
    sample_count: int
    start_utc: datetime


def segment_beats(published: Published, recording_id: str) -> Iterator[SegmentBeats]:
    """Beats of a recording, segment by segment. Raises PublishedError for a recording that is not published."""
    recordings = published.table("recordings", {"recording_id": recording_id})
    if recordings.is_empty():
        raise PublishedError(
            f"no published recording {recording_id!r}; list them with: SELECT recording_id FROM recordings"
        )
    beats = published.table("beats", {"recording_id": recording_id}).select(
        "segment", "sample", pl.when("is_escape").then(pl.lit("escape")).otherwise("beat_class").alias("kind")
    )
    for row in published.table("segments", {"recording_id": recording_id}).iter_rows(named=True):
        own = beats.filter(pl.col("segment") == row["segment"]).sort("sample")
        symbol = own["kind"].replace_strict(SYMBOLS, return_dtype=pl.String).to_numpy().astype(np.str_)
        name = f"{recording_id}_{row['segment']}"
        yield SegmentBeats(
            name, own["sample"].to_numpy(), symbol, recordings["fs_hz"][0], row["sample_count"], row["start_utc"]
        )


def export_atr(published: Published, folder: Path, recording_id: str) -> list[Path]:
    """Write NAME.atr and NAME.hea for every segment; a note on the first beat says where they come from."""
    folder.mkdir(parents=True, exist_ok=True)
    origin = provenance(published)
    note = f"{origin.program} {origin.publication} {origin.fingerprint}"
    files = []
    for beats in segment_beats(published, recording_id):
        header = "\n".join([_wfdb_header(beats), *(f"# {line}" for line in origin.lines()), ""])
        write_whole(folder / f"{beats.name}.hea", header.encode())
        write_whole(folder / f"{beats.name}.atr", atr_content(beats.sample, beats.symbol, note))
        files += [folder / f"{beats.name}.atr", folder / f"{beats.name}.hea"]
    return files


def _wfdb_header(beats: SegmentBeats) -> str:
    return f"{beats.name} 0 {beats.fs_hz:g} {beats.sample_count} {beats.start_utc:%H:%M:%S %d/%m/%Y}"


def atr_content(sample: NDArray[np.int64], symbol: NDArray[np.str_], note: str) -> bytes:
    """Bytes of a WFDB annotation file for beats in rising order of their sample.

    A word of 16 bits holds the code in its upper 6 and the step from the annotation before in its lower 10 bits; a
    longer step goes ahead of it as SKIP with 32 bits, upper half first (WFDB annotation format, MIT variant). `note`
    hangs on the first beat: readers take a note of its own at the first sample for a definition and drop it.
    """
    code = np.array([_CODES[each] for each in symbol.tolist()], np.uint16)
    step = np.diff(sample, prepend=0)
    is_long = step > _MAX_STEP
    words = np.zeros((len(sample), 4), np.uint16)
    words[:, 0] = _SKIP << 10
    words[:, 1], words[:, 2] = step >> 16, step & 0xFFFF
    words[:, 3] = (code << 10) | np.where(is_long, 0, step).astype(np.uint16)
    kept = np.repeat(is_long[:, None], 4, axis=1)
    kept[:, 3] = True
    first = int(kept[:1].sum())
    stored = words[kept].astype("<u2")
    return stored[:first].tobytes() + (_note(note) if first else b"") + stored[first:].tobytes() + bytes(2)


def _note(text: str) -> bytes:
    content = text.encode("ascii", "replace")[:_MAX_AUX]
    return np.array([(_AUX << 10) | len(content)], "<u2").tobytes() + content + bytes(len(content) % 2)


def export_edf_events(published: Published, folder: Path, recording_id: str) -> list[Path]:
    """Write NAME.edf for every segment: an EDF+ file with annotations only, one event per beat."""
    folder.mkdir(parents=True, exist_ok=True)
    files = []
    for beats in segment_beats(published, recording_id):
        write_whole(folder / f"{beats.name}.edf", edf_content(beats, provenance(published).lines()))
        files.append(folder / f"{beats.name}.edf")
    return files


def edf_content(beats: SegmentBeats, remarks: list[str]) -> bytes:
    """Bytes of an EDF+C file whose only signal is its annotations (EDF+ specification, section 2.2).

    Onsets are seconds after the header's start, which is the whole second (UTC) in which the segment begins. A file
    without ordinary signals has data records of duration 0; each begins with its time-keeping annotation.
    """
    fraction_s = beats.start_utc.microsecond / 1e6
    lists = [_event(0.0, remark) for remark in remarks]
    lists += [_event(fraction_s + s / beats.fs_hz, name) for s, name in zip(beats.sample, beats.symbol, strict=True)]
    records = list(_packed(lists))
    return _edf_header(beats.start_utc, len(records)) + b"".join(records)


def _event(onset_s: float, text: str) -> bytes:
    return f"+{onset_s:.6f}\x14{text}\x14\x00".encode()


def _packed(lists: list[bytes]) -> Iterator[bytes]:
    keeper = b"+0\x14\x14\x00"
    record, used = [keeper], len(keeper)
    for each in lists:
        if used + len(each) > _EDF_RECORD_BYTES:
            yield b"".join(record).ljust(_EDF_RECORD_BYTES, b"\0")
            record, used = [keeper], len(keeper)
        record.append(each)
        used += len(each)
    yield b"".join(record).ljust(_EDF_RECORD_BYTES, b"\0")


def _edf_header(start_utc: datetime, records: int) -> bytes:
    day = f"{start_utc.day:02}-{_MONTHS[start_utc.month - 1]}-{start_utc.year}"
    fixed: list[tuple[Any, int]] = [
        ("0", 8), ("X X X X", 80), (f"Startdate {day} X X X", 80), (f"{start_utc:%d.%m.%y}", 8),
        (f"{start_utc:%H.%M.%S}", 8), (512, 8), ("EDF+C", 44), (records, 8), (0, 8), (1, 4),
    ]  # fmt: skip
    signal: list[tuple[Any, int]] = [
        ("EDF Annotations", 16), ("", 80), ("", 8), (-1, 8), (1, 8), (-32768, 8), (32767, 8), ("", 80),
        (_EDF_RECORD_BYTES // 2, 8), ("", 32),
    ]  # fmt: skip
    return b"".join(str(value).encode("ascii").ljust(width) for value, width in fixed + signal)
