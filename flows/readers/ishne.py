"""ISHNE files: one fixed header, a block of free text, interleaved 16-bit samples.

Source: Badilini, Ann Noninvasive Electrocardiol 1998;3:263, "The ISHNE Holter Standard Output File Format". Writers
differ on whether the sample count is per lead or of all leads; the file's size decides. Names, sex, race and birth date
(bytes 28 to 137) and the free text are not read.
"""

from __future__ import annotations

import binascii
import struct
from collections.abc import Sequence
from datetime import date, datetime, time
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from flows.readers.channels import choose
from flows.readers.codes import Refused
from flows.readers.recording import Finding, Opened, Site, Stretch, checked_rate, checked_scale, finding

NAME = "ISHNE"
_MAGIC = b"ISHNE1.0"
_HEADER_BYTES = 522
_LEADS = (
    "unknown", "bipolar", "X", "Y", "Z", "I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6",
    "ES", "AS", "AI",
)  # fmt: skip
_MISSING = -32768
_ABSENT = -9
_PIECE_FRAMES = 500_000


def identify(head: bytes) -> bool:
    """The file begins with its format's name."""
    return head.startswith(_MAGIC)


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG lead of one file; raises Refused."""
    path = files[0]
    header, at_samples, crc_finding = _header(path)
    n_leads = struct.unpack_from("<h", header, 156)[0]
    if not 1 <= n_leads <= 12:
        raise Refused("no_signals", f"header: it lists {n_leads} leads; expected 1 to 12.")
    codes = struct.unpack_from(f"<{n_leads}h", header, 158)
    labels = [_LEADS[code] if 0 <= code < len(_LEADS) else "unknown" for code in codes]
    lead, choice = _lead(labels, site)
    rate = checked_rate(Fraction(struct.unpack_from("<h", header, 272)[0]), "header")
    mv_per_count, scale_findings = _scale(header, lead, site)
    n_frames, count_findings = _frames(header, path.stat().st_size - at_samples, n_leads)
    return Opened(
        format=NAME,
        device_words=_words(header[232:272]),
        patient_words=_words(header[108:128]),
        start_local=_start(header),
        start_resolution_ms=1000,
        zone=None,
        rate=rate,
        lead=labels[lead],
        mv_per_count=mv_per_count,
        count_at_zero_mv=0.0,
        rails=(-32767, 32767),
        missing_count=_MISSING,
        stretches=(Stretch(0, n_frames, 0),),
        read=_Samples(path, at_samples, n_leads, lead).read,
        findings=(*crc_finding, *choice, *scale_findings, *count_findings),
        other_channels=tuple(label for n, label in enumerate(labels) if n != lead),
    )


def _header(path: Path) -> tuple[bytes, int, tuple[Finding, ...]]:
    """Header, offset of the samples, and a finding where the checksum over both blocks is wrong."""
    size = path.stat().st_size
    with path.open("rb") as file:
        header = file.read(_HEADER_BYTES)
        if len(header) < _HEADER_BYTES:
            raise Refused("header_cut_short", f"header: the file has {size} bytes; expected at least {_HEADER_BYTES}.")
        text_bytes, at_samples = struct.unpack_from("<i", header, 10)[0], struct.unpack_from("<i", header, 22)[0]
        if text_bytes < 0 or at_samples < _HEADER_BYTES or at_samples > size:
            raise Refused(
                "bad_header_number",
                f"header: samples at byte {at_samples} of a file of {size} bytes; expected {_HEADER_BYTES} or later.",
            )
        checked = header[10:] + file.read(min(at_samples - _HEADER_BYTES, 2**26))
    stated = struct.unpack_from("<H", header, 8)[0]
    is_right = binascii.crc_hqx(checked, 0xFFFF) == stated
    return header, at_samples, () if is_right else (finding("checksum_wrong", "of the header"),)


def _lead(labels: list[str], site: Site) -> tuple[int, tuple[Finding, ...]]:
    """A file of one lead has no choice to make; of several the usual rule holds."""
    if len(labels) == 1 and not site.ecg_channel:
        return 0, ()
    return choose(labels, ["mV"] * len(labels), site.ecg_channel, "header")


def _scale(header: bytes, lead: int, site: Site) -> tuple[float, tuple[Finding, ...]]:
    if site.mv_per_count:
        return site.mv_per_count, (finding("scale_from_site", f"{site.mv_per_count:g} mV"),)
    resolution_nv = struct.unpack_from("<h", header, 206 + 2 * lead)[0]
    if resolution_nv in (0, _ABSENT):
        raise Refused(
            "amplitude_scale_missing",
            f"header: lead {lead + 1} has the resolution {resolution_nv} nV; expected a positive number. "
            "Set mv_per_count in section [site] of programme.toml if it is known.",
        )
    return checked_scale(resolution_nv * 1e-6, 65_534, "header"), ()


def _frames(header: bytes, data_bytes: int, n_leads: int) -> tuple[int, tuple[Finding, ...]]:
    """Samples per lead that are there, and what the header says otherwise."""
    stated = struct.unpack_from("<i", header, 14)[0]
    there, rest = divmod(data_bytes, 2 * n_leads)
    if there == 0:
        raise Refused("no_samples", f"data: {data_bytes} bytes follow the header; expected samples.")
    found = [finding("partial_last_record", f"{rest} bytes")] if rest else []
    if stated not in (there, there * n_leads):
        per_lead = stated if stated > there else stated // n_leads
        code = "file_cut_short" if per_lead > there else "more_records_than_header_says"
        found.append(finding(code, f"{there} samples, header {stated}"))
    return there, tuple(found)


def _start(header: bytes) -> datetime | None:
    day, month, year = struct.unpack_from("<3h", header, 138)
    clock = struct.unpack_from("<3h", header, 150)
    try:
        return datetime.combine(date(year, month, day), time(*clock))
    except ValueError:
        return None


def _words(field: bytes) -> tuple[str, ...]:
    return tuple(field.split(b"\0")[0].decode("latin-1").split())


class _Samples:
    """Samples of one lead among those interleaved."""

    def __init__(self, path: Path, at_samples: int, n_leads: int, lead: int) -> None:
        self._path, self._at, self._n_leads, self._lead = path, at_samples, n_leads, lead

    def read(self, a: int, b: int) -> NDArray[np.int16]:
        """Samples a (included) to b (excluded)."""
        samples = np.empty(b - a, np.int16)
        with self._path.open("rb", buffering=0) as file:
            for first in range(a, b, _PIECE_FRAMES):
                last = min(first + _PIECE_FRAMES, b)
                frames = np.empty((last - first, self._n_leads), "<i2")
                file.seek(self._at + first * self._n_leads * 2)
                if file.readinto(frames.data.cast("B")) != frames.nbytes:
                    raise Refused("samples_cut_short", "data: the file became shorter while it was read.")
                samples[first - a : last - a] = frames[:, self._lead]
        return samples
