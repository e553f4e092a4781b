"""Makers of small recordings, byte by byte, so that every header field can be wrong, and programmes to put them in."""

import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from flows.arrivals.ingest import Arrivals, ingest
from flows.register import load as load_register
from warehouse.ledger import Ledger
from warehouse.parts import SignalReader, read_part


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


class Programme:
    """A programme folder under test: files in, runs, rows out."""

    def __init__(self, folder: Path, zone: str = "UTC", **settings: str) -> None:
        self.folder = folder
        self.inbox = folder / "inbox"
        self.quarantine = folder / "quarantine"
        for name in ("register", "inbox", "quarantine"):
            (folder / name).mkdir(parents=True, exist_ok=True)
        (folder / "programme.toml").write_text(f'[programme]\nzone = "{zone}"\n' + settings.pop("toml", ""))
        self.register("P-0001,", "SRL-1001,P-0001,2026-02-28,2026-03-20,")

    def register(self, patients: str, wears: str) -> None:
        """Rows of patients.csv and wears.csv."""
        folder = self.folder / "register"
        (folder / "patients.csv").write_text(f"patient_code,zone\n{patients}\n")
        (folder / "wears.csv").write_text(f"device_serial,patient_code,from_local,to_local,start_local\n{wears}\n")

    def deliver(self, name: str, content: bytes, minute: int = 0) -> Path:
        """Put a file into the inbox, with an arrival time that orders it among others."""
        path = self.inbox / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)
        os.utime(path, (1_775_000_000 + minute * 60,) * 2)
        return path

    def run(self) -> Arrivals:
        """One run of ingest."""
        from flows import settings

        read = settings.load(self.folder / "programme.toml")
        people = load_register(self.folder, read.programme.zone)
        self.said: list[str] = []
        return ingest(self.folder, read, people, Ledger(self.folder / "lake"), self.said.append)

    def rows(self, table: str, key: str | None = None) -> list[dict]:
        """Rows of a lake table in force."""
        lake = self.folder / "lake"
        frames = [read_part(lake, part) for part in Ledger(lake).parts(table, key)]
        return [row for frame in frames for row in frame.iter_rows(named=True)]

    def deliveries(self) -> dict[str, tuple[str, str | None]]:
        """Status and code by shown file name."""
        return {row["file_name"]: (row["status"], row["code"]) for row in self.rows("deliveries")}

    def samples(self, recording_id: str) -> list[np.ndarray]:
        """Samples of each segment of a recording."""
        lake = self.folder / "lake"
        reader = SignalReader(lake, Ledger(lake).parts("signal", recording_id))
        return [reader.read(segment, 0, size) for segment, size in reader.segment_samples.items()]

    def state(self) -> dict:
        """Everything that a publication could follow from, for comparison of two programmes."""
        tables = ("deliveries", "recordings", "segments", "marks")
        state: dict = {table: sorted(map(repr, self.rows(table))) for table in tables}
        for row in self.rows("recordings"):
            state[row["recording_id"]] = [piece.tobytes() for piece in self.samples(row["recording_id"])]
        return state


@pytest.fixture
def programme(tmp_path: Path) -> Programme:
    """An empty programme with patient P-0001 and device SRL-1001 worn from 28 February to 20 March 2026."""
    return Programme(tmp_path / "programme")


@pytest.fixture
def make_programme(tmp_path: Path) -> Callable[..., Programme]:
    """Function that makes further programmes."""
    return lambda name, **settings: Programme(tmp_path / name, **settings)
