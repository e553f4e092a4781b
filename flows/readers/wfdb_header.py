"""The text header of a WFDB record: which files hold which signals, their coding, scale and times.

Source: WFDB specification, physionet.org/physiotools/wag/header-5.htm. Comment lines may hold age, sex and
medication of the person and are not read.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from datetime import date, datetime, time
from fractions import Fraction

from flows.readers.codes import Refused
from flows.readers.recording import decimal_of

_RECORD_LINE = re.compile(
    rb"(?P<name>[\w.-]+)(?:/(?P<segments>\d{1,6}))?[ \t]+(?P<signals>\d{1,4})"
    rb"(?:[ \t]+(?P<rate>[\d.+eE-]+)(?:/(?P<counter>[\d.+eE-]+)(?:\((?P<base>[\d.+eE-]+)\))?)?"
    rb"(?:[ \t]+(?P<samples>\d{1,15})"
    rb"(?:[ \t]+(?P<time>[\d:.]{1,24})(?:[ \t]+(?P<date>\d{1,2}/\d{1,2}/\d{1,4}))?)?)?)?[ \t\r]*"
)
_SIGNAL_FORMAT = re.compile(
    r"(?P<format>\d{1,4})(?:x(?P<frame>\d{1,6}))?(?::(?P<skew>\d{1,9}))?(?:\+(?P<offset>\d{1,15}))?"
)
_GAIN = re.compile(
    r"(?P<gain>[+-]?\d{0,15}\.?\d{0,15}(?:[eE][+-]?\d{1,2})?)(?:\((?P<baseline>[+-]?\d{1,10})\))?(?:/(?P<unit>\S+))?"
)
_DEFAULT_FS_HZ = Fraction(250)  # the specification's default when the header gives none


@dataclass(frozen=True)
class Signal:
    """One signal line."""

    file_name: str
    coding: int
    samples_per_frame: int
    skew: int
    byte_offset: int
    gain: float  # counts per unit; 0 when not calibrated
    baseline: int
    unit: str
    adc_bits: int
    adc_zero: int
    checksum: int | None
    label: str


@dataclass(frozen=True)
class Header:
    """One header: either signals, or the segments that follow each other."""

    name: str
    fs_hz: Fraction
    n_samples: int | None
    start: datetime | None
    start_has_fraction: bool
    signals: tuple[Signal, ...] = ()
    segments: tuple[tuple[str, int], ...] = field(default=())  # (record name, samples); name ~ is a gap

    @property
    def file_names(self) -> list[str]:
        """Files that the header names: signal files, or headers of segments."""
        if self.segments:
            return [f"{name}.hea" for name, _ in self.segments if name != "~"]
        return list(dict.fromkeys(signal.file_name for signal in self.signals if signal.file_name != "~"))


def looks_like_header(head: bytes) -> bool:
    """The first line that is no comment is a record line, and a line that names a file or a segment follows."""
    lines = _lines(head)
    record = _RECORD_LINE.fullmatch(lines[0]) if lines else None
    if record is None or b"\0" in head[:512]:
        return False
    if int(record["signals"]) == 0 or len(lines) == 1:
        return record["rate"] is not None
    # A file or segment name has a letter (or is ~), so columns of numbers are no header.
    return re.match(rb"(?=\S*[A-Za-z_~])\S+[ \t]+\d+", lines[1]) is not None or record["segments"] is not None


def _lines(text: bytes) -> list[bytes]:
    stripped = (line.strip() for line in text.split(b"\n"))
    return [line for line in stripped if line and not line.startswith(b"#")]


def read_header(text: bytes) -> Header:
    """Parse one header; raises Refused for numbers that cannot be read."""
    lines = _lines(text)
    record = _RECORD_LINE.fullmatch(lines[0]) if lines else None
    if record is None:
        raise Refused("bad_header_number", "header: its record line cannot be read. Export the record again.")
    start, has_fraction = _start(record["time"], record["date"])
    header = Header(
        name=record["name"].decode("latin-1"),
        fs_hz=_rate(record["rate"]),
        n_samples=int(record["samples"]) if record["samples"] and int(record["samples"]) else None,
        start=start,
        start_has_fraction=has_fraction,
    )
    body = [line.decode("latin-1") for line in lines[1:]]
    if record["segments"] is not None:
        return _with_segments(header, body, int(record["segments"]))
    return _with_signals(header, body, int(record["signals"]))


def _with_segments(header: Header, body: list[str], count: int) -> Header:
    pairs = [tuple(line.split()[:2]) for line in body[:count]]
    if len(pairs) < count or any(len(pair) < 2 or not pair[1].isdigit() for pair in pairs):
        raise Refused("header_cut_short", f"header: {count} segments are announced, {len(pairs)} can be read.")
    segments = tuple((name, int(samples)) for name, samples in pairs)
    return Header(header.name, header.fs_hz, header.n_samples, header.start, header.start_has_fraction, (), segments)


def _with_signals(header: Header, body: list[str], count: int) -> Header:
    if len(body) < count:
        raise Refused("header_cut_short", f"header: {count} signals are announced, {len(body)} are described.")
    signals = tuple(_signal(line, n) for n, line in enumerate(body[:count]))
    return Header(header.name, header.fs_hz, header.n_samples, header.start, header.start_has_fraction, signals)


def _rate(text: bytes | None) -> Fraction:
    if text is None:
        return _DEFAULT_FS_HZ
    try:
        rate = decimal_of(text.decode())
    except ValueError:
        raise Refused("bad_header_number", "header: the sampling rate is not a number.") from None
    return rate or _DEFAULT_FS_HZ


def _signal(line: str, number: int) -> Signal:
    words = line.split(maxsplit=8)
    coding = _SIGNAL_FORMAT.fullmatch(words[1]) if len(words) > 1 else None
    if coding is None:
        raise Refused("bad_header_number", f"header: the format of signal {number + 1} cannot be read.")
    gain = _GAIN.fullmatch(words[2]) if len(words) > 2 else None
    numbers = [_integer(word, number) for word in words[3:8]] + [None] * (5 - len(words[3:8]))
    bits, zero, _first, checksum, _block = numbers
    baseline = int(gain["baseline"]) if gain and gain["baseline"] else (zero or 0)
    return Signal(
        file_name=words[0],
        coding=int(coding["format"]),
        samples_per_frame=int(coding["frame"] or 1),
        skew=int(coding["skew"] or 0),
        byte_offset=int(coding["offset"] or 0),
        gain=_gain(gain["gain"]) if gain else 0.0,
        baseline=baseline,
        unit=(gain["unit"] if gain else None) or "mV",
        adc_bits=min(bits or 0, 32),
        adc_zero=zero or 0,
        checksum=checksum,
        label=words[8].strip() if len(words) > 8 else f"signal {number + 1}",
    )


def _gain(text: str) -> float:
    try:
        return float(decimal_of(text))
    except ValueError:
        return 0.0


def _integer(word: str, number: int) -> int:
    if re.fullmatch(r"[+-]?\d{1,12}", word):
        return int(word)
    raise Refused("bad_header_number", f"header: a number of signal {number + 1} cannot be read.")


def _start(clock_text: bytes | None, day_text: bytes | None) -> tuple[datetime | None, bool]:
    """Start when time and date are there; a time alone is no start."""
    if clock_text is None or day_text is None:
        return None, False
    day, month, year = (int(part) for part in day_text.split(b"/"))
    try:
        clock = [decimal_of(part.decode() or "0") for part in clock_text.split(b":")]
        hour, minute, second = [Fraction(0)] * (3 - len(clock)) + clock
        micros = round((second % 1) * 1_000_000)
        start = datetime.combine(date(year, month, day), time(int(hour), int(minute), int(second), micros))
    except (ValueError, OverflowError):
        return None, False
    return start, b"." in clock_text
