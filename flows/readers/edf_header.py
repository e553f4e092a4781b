"""The header of EDF and BDF files: its numbers and words, lenient where a reader can still be right.

Source: Kemp et al., Electroencephalogr Clin Neurophysiol 1992;82:391; Kemp & Olivan, Clin Neurophysiol 2003;114:1755
(edfplus.info/specs/edfplus.html). Read as findings: a wrong header-size field, an open or wrong record count, a cut
last record. Read without a word: NUL padding, decimal commas, non-ASCII text.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date, datetime, time
from fractions import Fraction
from pathlib import Path

from flows.readers.codes import Refused
from flows.readers.recording import Finding, decimal_of, finding

_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")


@dataclass(frozen=True)
class Header:
    """The numbers and words of the header that are needed; the patient's name is not among them."""

    where: str
    format: str
    sample_bytes: int  # 2 for EDF, 3 for BDF
    header_bytes: int
    n_records: int
    record_s: Fraction
    labels: tuple[str, ...]
    units: tuple[str, ...]
    physical: tuple[tuple[float, float], ...]
    digital: tuple[tuple[float, float], ...]
    samples_per_record: tuple[int, ...]
    start: datetime | None
    patient_words: tuple[str, ...]
    device_words: tuple[str, ...]
    findings: tuple[Finding, ...]

    @property
    def record_bytes(self) -> int:
        """Bytes of one data record over all channels."""
        return sum(self.samples_per_record) * self.sample_bytes

    def offset_in_record(self, channel: int) -> int:
        """First byte of a channel within a record."""
        return sum(self.samples_per_record[:channel]) * self.sample_bytes

    @property
    def annotation_channels(self) -> list[int]:
        """Channels that hold time-stamped annotation lists."""
        return [n for n, label in enumerate(self.labels) if label in ("EDF Annotations", "BDF Annotations")]


def read_header(path: Path) -> Header:
    """Read and check the header; raises Refused."""
    where = path.suffix.lstrip(".").upper() or "file"
    size = path.stat().st_size
    with path.open("rb") as file:
        fixed = file.read(256)
        n_signals = _signal_count(fixed, size)
        signals = file.read(256 * n_signals)
    if len(signals) < 256 * n_signals:
        raise Refused(
            "header_cut_short",
            f"header: {n_signals} channels need {256 * (n_signals + 1)} bytes of header, the file has {size} bytes. "
            "Export the file again.",
        )
    columns = _columns(signals, n_signals)
    sample_bytes = 3 if fixed[:1] == b"\xff" else 2
    record_s = _record_duration(fixed)
    samples_per_record = tuple(_whole(text, "samples per record", n) for n, text in enumerate(columns["samples"]))
    header_bytes = 256 * (n_signals + 1)
    n_records, findings = _records(fixed, size - header_bytes, sum(samples_per_record) * sample_bytes)
    start, placeholder = _start(fixed)
    patient, recording = text_of(fixed[8:88]), text_of(fixed[88:168])
    return Header(
        where=where,
        format=_format(fixed, sample_bytes),
        sample_bytes=sample_bytes,
        header_bytes=header_bytes,
        n_records=n_records,
        record_s=record_s,
        labels=tuple(columns["label"]),
        units=tuple(columns["unit"]),
        physical=_limits(columns, "physical"),
        digital=_limits(columns, "digital"),
        samples_per_record=samples_per_record,
        start=None if placeholder else start,
        patient_words=tuple(word for word in patient.split() if word != "X"),
        device_words=_device_words(recording),
        findings=(*_size_finding(fixed, header_bytes), *findings),
    )


def text_of(field: bytes) -> str:
    """Header text: UTF-8 when it is, else latin-1; blanks and NULs around it dropped."""
    field = field.strip(b" \0")
    try:
        return field.decode("utf-8")
    except UnicodeDecodeError:
        return field.decode("latin-1")


_FIELDS = (
    ("label", 16), ("transducer", 80), ("unit", 8), ("physical_min", 8), ("physical_max", 8), ("digital_min", 8),
    ("digital_max", 8), ("prefilter", 80), ("samples", 8), ("reserved", 32),
)  # fmt: skip


def _columns(block: bytes, n_signals: int) -> dict[str, list[str]]:
    columns, offset = {}, 0
    for name, width in _FIELDS:
        columns[name] = [text_of(block[offset + n * width : offset + (n + 1) * width]) for n in range(n_signals)]
        offset += n_signals * width
    return columns


def _signal_count(fixed: bytes, size: int) -> int:
    if len(fixed) < 256:
        raise Refused(
            "header_cut_short", f"header: the file has {size} bytes, an EDF header at least 256. Export the file again."
        )
    n_signals = _whole(text_of(fixed[252:256]), "number of signals")
    if not 1 <= n_signals <= 4096:
        raise Refused("no_signals", f"header: it lists {n_signals} signals; expected at least one.")
    return n_signals


def _number(text: str, name: str, channel: int | None = None) -> Fraction:
    try:
        return decimal_of(text.replace(",", ".").strip(" \0"))
    except ValueError:
        where = "" if channel is None else f" of channel {channel + 1}"
        raise Refused(
            "bad_header_number", f"header: {name}{where} is not a number; expected digits. Export the file again."
        ) from None


def _whole(text: str, name: str, channel: int | None = None) -> int:
    number = _number(text, name, channel)
    if number.denominator != 1 or abs(number) > 2**53:
        raise Refused("bad_header_number", f"header: {name} is {float(number):g}; expected a whole number.")
    return int(number)


def _record_duration(fixed: bytes) -> Fraction:
    duration = _number(text_of(fixed[244:252]), "record duration")
    if duration <= 0:
        raise Refused(
            "record_duration_not_positive",
            f"header: the record duration is {float(duration):g} s; expected a positive number.",
        )
    return duration


def _limits(columns: dict[str, list[str]], kind: str) -> tuple[tuple[float, float], ...]:
    """Lower and upper limit of each channel; NaN where the field is no number (an error only for the ECG)."""

    def value(text: str) -> float:
        try:
            return float(text.replace(",", "."))
        except ValueError:
            return float("nan")

    pairs = zip(columns[f"{kind}_min"], columns[f"{kind}_max"], strict=True)
    return tuple((value(low), value(high)) for low, high in pairs)


def _records(fixed: bytes, data_bytes: int, record_bytes: int) -> tuple[int, tuple[Finding, ...]]:
    """Number of whole records that are there, and what the header says otherwise."""
    stated = _whole(text_of(fixed[236:244]), "number of data records")
    present, rest = divmod(max(data_bytes, 0), record_bytes) if record_bytes > 0 else (0, 0)
    if present == 0:
        raise Refused("no_samples", f"data: {data_bytes} bytes follow the header; expected records of {record_bytes}.")
    found = []
    if stated < 0:
        found.append(finding("record_count_open", f"{present} records"))
    elif present < stated:
        found.append(finding("file_cut_short", f"{present} of {stated} records"))
    elif present > stated:
        found.append(finding("more_records_than_header_says", f"{present}, header {stated}"))
    if rest:
        found.append(finding("partial_last_record", f"{rest} bytes"))
    return present, tuple(found)


def _size_finding(fixed: bytes, header_bytes: int) -> tuple[Finding, ...]:
    stated = text_of(fixed[184:192])
    if stated == str(header_bytes):
        return ()
    return (finding("header_size_field_wrong", f"true size {header_bytes}"),)


def _format(fixed: bytes, sample_bytes: int) -> str:
    plus = {b"EDF+C": "+C", b"EDF+D": "+D", b"BDF+C": "+C", b"BDF+D": "+D"}.get(fixed[192:197], "")
    return ("BDF" if sample_bytes == 3 else "EDF") + plus


def _start(fixed: bytes) -> tuple[datetime | None, bool]:
    """Start as wall clock of the device, and whether it is only the placeholder of an anonymised file."""
    recording = text_of(fixed[88:168])
    clock = _integers(text_of(fixed[176:184]))
    day = _full_date(recording) or _short_date(text_of(fixed[168:176]))
    if day is None or len(clock) != 3:
        return None, False
    try:
        start = datetime.combine(date(*day), time(clock[0], clock[1], clock[2]))
    except ValueError:
        return None, False
    # 01.01.85 is what the specification tells anonymisers to write.
    placeholder = day == (1985, 1, 1) and _full_date(recording) is None
    return start, placeholder


def _integers(text: str) -> list[int]:
    return [int(part) for part in re.findall(r"\d+", text)]


def _full_date(recording: str) -> tuple[int, int, int] | None:
    found = re.match(r"Startdate (\d{1,2})-([A-Za-z]{3})-(\d{4})\b", recording)
    if found is None or found[2].upper() not in _MONTHS:
        return None
    return int(found[3]), _MONTHS.index(found[2].upper()) + 1, int(found[1])


def _short_date(text: str) -> tuple[int, int, int] | None:
    parts = _integers(text)
    if len(parts) != 3 or parts[2] > 99:
        return None
    day, month, year = parts
    return (1900 if year >= 85 else 2000) + year, month, day


def _device_words(recording: str) -> tuple[str, ...]:
    """Words among which the serial may stand: the equipment first (EDF+ order is Startdate date code who equipment)."""
    words = recording.split()
    if words[:1] == ["Startdate"]:
        words = words[4:] + words[2:4]
    return tuple(word for word in words if word != "X")
