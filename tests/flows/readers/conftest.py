"""Makers of small recordings, byte by byte, so that every header field can be wrong on purpose."""

from collections.abc import Callable

import numpy as np
import pytest


def _ecg(n_samples: int) -> np.ndarray:
    phase = np.arange(n_samples) % 200
    return (1000 * np.exp(-(((phase - 60) / 4) ** 2)) + 50 * np.sin(np.arange(n_samples) / 700)).astype("<i2")


def _edf(
    samples: np.ndarray | None = None,
    *,
    per_record: int = 250,
    record_s: str = "1",
    labels: tuple[str, ...] = ("ECG",),
    units: tuple[str | bytes, ...] = ("mV",),
    physical: tuple[str, str] = ("-5", "5"),
    digital: tuple[str, str] = ("-32768", "32767"),
    others: dict[int, np.ndarray] | None = None,
    patient: str | bytes = "P-0001 X X X",
    recording: str = "Startdate 01-MAR-2026 X X SRL-1001",
    date: str = "01.03.26",
    time: str = "08.30.00",
    kind: str = "",
    onsets: list[str] | None = None,
    annotations: dict[int, bytes] | None = None,
    n_records: str | None = None,
    header_bytes: str | None = None,
    pad: bytes = b" ",
    bdf: bool = False,
) -> bytes:
    """An EDF (BDF) file; `onsets` adds an annotation channel with one time stamp per record."""
    if samples is None:
        samples = _ecg(60 * per_record)
    width = 3 if bdf else 2

    def field(text: str | bytes, size: int) -> bytes:
        raw = text if isinstance(text, bytes) else text.encode("latin-1")
        return raw[:size].ljust(size, pad)

    def coded(values: np.ndarray) -> bytes:
        return values.astype("<i4").view(np.uint8).reshape(-1, 4)[:, :width].tobytes()

    records = len(samples) // per_record
    ecg_at = next(n for n, label in enumerate(labels) if n not in (others or {}))
    sizes = [per_record] * len(labels)
    labels_all, units_all = list(labels), list(units)
    if onsets is not None:
        labels_all.append("BDF Annotations" if bdf else "EDF Annotations")
        units_all.append("")
        sizes.append(120 // width)
    count = len(labels_all)
    header = (b"\xffBIOSEMI" if bdf else field("0", 8)) + field(patient, 80) + field(recording, 80)
    header += field(date, 8) + field(time, 8) + field(header_bytes or str(256 * (count + 1)), 8) + field(kind, 44)
    header += field(n_records or str(records), 8) + field(record_s, 8) + field(str(count), 4)
    is_note = [label.endswith("Annotations") for label in labels_all]
    header += b"".join(field(label, 16) for label in labels_all) + field("", 80) * count
    header += b"".join(field(unit, 8) for unit in units_all)
    header += b"".join(field("-1" if note else physical[0], 8) for note in is_note)
    header += b"".join(field("1" if note else physical[1], 8) for note in is_note)
    header += b"".join(field("-32768" if note else digital[0], 8) for note in is_note)
    header += b"".join(field("32767" if note else digital[1], 8) for note in is_note)
    header += field("", 80) * count + b"".join(field(str(size), 8) for size in sizes) + field("", 32) * count
    body = []
    for n in range(records):
        for channel in range(len(labels)):
            values = samples if channel == ecg_at else (others or {}).get(channel, np.zeros_like(samples))
            body.append(coded(values[n * per_record : (n + 1) * per_record]))
        if onsets is not None:
            stamp = f"{onsets[n]}\x14\x14\x00".encode() if onsets[n] else b""
            body.append((stamp + (annotations or {}).get(n, b"")).ljust(120, b"\0"))
    return header + b"".join(body)


@pytest.fixture(scope="session")
def make_edf() -> Callable[..., bytes]:
    """Function that makes the bytes of an EDF or BDF file."""
    return _edf


@pytest.fixture(scope="session")
def ecg() -> Callable[[int], np.ndarray]:
    """Function that makes n int16 counts with a beat every 200 samples."""
    return _ecg
