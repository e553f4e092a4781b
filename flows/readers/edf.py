"""EDF, EDF+C, EDF+D and BDF(+): which channel is the ECG, its scale, its stretches in time, its samples.

Source: Kemp & Olivan, Clin Neurophysiol 2003;114:1755 (edfplus.info/specs/edfplus.html). Departure: an EDF+C whose
record times jump is cut into stretches, with a finding. Memory does not grow with the file.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from datetime import timedelta
from fractions import Fraction
from io import FileIO
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from flows.readers.channels import choose, mv_per_unit
from flows.readers.codes import Refused
from flows.readers.edf_header import Header, read_header
from flows.readers.edf_times import RecordTimes, read_record_times
from flows.readers.recording import Finding, Opened, Site, checked_rate, checked_scale, finding
from flows.readers.wide import Wide, fitted

NAME = "EDF"
_READ_BYTES = 2_000_000


def identify(head: bytes) -> bool:
    """EDF begins with 0 and seven blanks, BDF with byte 255 and BIOSEMI; both have digits at 236 and 252."""
    if head[:8] == b"\xffBIOSEMI":
        return True
    if head[:1] != b"0" or head[1:8].strip(b" \0"):
        return False
    return len(head) < 256 or (head[236:244].strip(b" \0-").isdigit() and head[252:256].strip(b" \0").isdigit())


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG of one EDF or BDF file; raises Refused."""
    path = files[0]
    header = read_header(path)
    channel, choice = _ecg_channel(header, site)
    per_record = header.samples_per_record[channel]
    rate = checked_rate(per_record / header.record_s, header.where)
    mv_per_count, count_at_zero, scale_findings = _scale(header, channel, site)
    times = _record_times(path, header, rate)
    samples = Samples(path, header, channel)
    low, high = (int(limit) for limit in header.digital[channel])
    lead = Wide(
        samples.read, times.stretches_of(per_record), mv_per_count, count_at_zero, (low, high), _sentinel(header, low)
    )
    if header.sample_bytes == 3:
        lead, wide_findings = fitted(lead)
    else:
        wide_findings = ()
    return Opened(
        format=header.format,
        device_words=header.device_words,
        patient_words=header.patient_words,
        start_local=header.start + timedelta(microseconds=times.first_ns // 1000) if header.start else None,
        start_resolution_ms=1 if times.first_ns % 1_000_000_000 else 1000,
        zone=None,
        rate=rate,
        lead=header.labels[channel],
        mv_per_count=lead.mv_per_count,
        count_at_zero_mv=lead.count_at_zero_mv,
        rails=lead.rails,
        missing_count=lead.missing_count,
        stretches=lead.stretches,
        read=lead.read,
        findings=(*header.findings, *choice, *scale_findings, *times.findings, *wide_findings),
        marks=times.marks,
        end_offset_ns=times.end_ns,
        other_channels=tuple(
            label for n, label in enumerate(header.labels) if n != channel and n not in header.annotation_channels
        ),
    )


def _ecg_channel(header: Header, site: Site) -> tuple[int, tuple[Finding, ...]]:
    ordinary = [n for n in range(len(header.labels)) if n not in header.annotation_channels]
    if not ordinary:
        raise Refused("no_signals", "header: it lists annotations only; expected an ECG channel.")
    labels, units = [header.labels[n] for n in ordinary], [header.units[n] for n in ordinary]
    chosen, found = choose(labels, units, site.ecg_channel, "header")
    channel = ordinary[chosen]
    if header.samples_per_record[channel] <= 0:
        raise Refused("no_samples", f"header: channel {channel + 1} has no samples per record; expected at least one.")
    return channel, found


def _scale(header: Header, channel: int, site: Site) -> tuple[float, float, tuple[Finding, ...]]:
    """Millivolts per count, the count at 0 mV, and findings."""
    low, high = header.digital[channel]
    limit = 2 ** (8 * header.sample_bytes - 1)
    if not (low < high and -limit <= low and high < limit):
        raise Refused(
            "digital_range_wrong",
            f"header: channel {channel + 1} has the digital range {low:g} to {high:g}; expected a rising range within "
            f"{-limit} to {limit - 1}. Export the file again.",
        )
    if site.mv_per_count:
        return site.mv_per_count, 0.0, (finding("scale_from_site", f"{site.mv_per_count:g} mV"),)
    factor = mv_per_unit(header.units[channel])
    if factor is None:
        raise Refused(
            "unit_unknown",
            f"header: channel {channel + 1} has no voltage as unit; expected V, mV, uV or nV. Export it with its unit "
            "or set mv_per_count in section [site] of programme.toml.",
        )
    bottom, top = header.physical[channel]
    if not np.isfinite(top - bottom) or top == bottom:
        raise Refused(
            "amplitude_scale_missing",
            f"header: channel {channel + 1} has the physical range {bottom:g} to {top:g}; expected two different "
            "numbers. Set mv_per_count in section [site] of programme.toml if it is known.",
        )
    mv_per_count = (top - bottom) * factor / (high - low)
    checked_scale(mv_per_count, high - low, f"header: channel {channel + 1}")
    return mv_per_count, low - bottom * factor / mv_per_count, ()


def _sentinel(header: Header, digital_low: int) -> int | None:
    """The lowest count of the sample width marks a missing sample where the digital range does not reach it."""
    lowest = -(2 ** (8 * header.sample_bytes - 1))
    return lowest if digital_low > lowest else None


def _record_times(path: Path, header: Header, rate: Fraction) -> RecordTimes:
    """Times of the records; the first annotation channel begins with them, any of them may hold marks."""
    if not header.annotation_channels or not header.format.endswith(("+C", "+D")):
        return RecordTimes.continuous(header.n_records, header.record_s)
    block = max(1, _READ_BYTES // header.record_bytes)
    columns = np.concatenate(
        [
            header.offset_in_record(channel) + np.arange(header.samples_per_record[channel] * header.sample_bytes)
            for channel in header.annotation_channels
        ]
    )
    is_one = len(header.annotation_channels) == 1
    chosen = slice(columns[0], columns[-1] + 1) if is_one and columns.size else columns

    def pieces() -> Iterator[NDArray[np.uint8]]:
        with path.open("rb", buffering=0) as file:
            for start in range(0, header.n_records, block):
                records = _read_records(file, header, start, min(block, header.n_records - start))
                yield records[:, chosen]

    return read_record_times(pieces(), header.record_s, rate, declared_gapless=header.format.endswith("+C"))


def _read_records(file: FileIO, header: Header, first: int, count: int) -> NDArray[np.uint8]:
    """Whole records as bytes, shape (count, record_bytes); the file may have been cut since it was measured."""
    buffer = np.empty(count * header.record_bytes, np.uint8)
    file.seek(header.header_bytes + first * header.record_bytes)
    got = file.readinto(buffer.data)
    if got != buffer.size:
        raise Refused("samples_cut_short", f"data: record {first + 1} is no longer whole. Deliver the file again.")
    return buffer.reshape(count, header.record_bytes)


class Samples:
    """Samples of one channel over all records, read piece by piece."""

    def __init__(self, path: Path, header: Header, channel: int) -> None:
        self._path, self._header = path, header
        self._per_record = header.samples_per_record[channel]
        self._first_byte = header.offset_in_record(channel)

    def read(self, a: int, b: int) -> NDArray[Any]:
        """Samples a (included) to b (excluded): int16 for EDF, int32 for BDF."""
        first, last = a // self._per_record, -(-b // self._per_record)
        block = max(1, _READ_BYTES // self._header.record_bytes)
        with self._path.open("rb", buffering=0) as file:
            pieces = [
                self._decode(_read_records(file, self._header, start, min(block, last - start)))
                for start in range(first, last, block)
            ]
        samples = pieces[0] if len(pieces) == 1 else np.concatenate(pieces)
        return samples[a - first * self._per_record : b - first * self._per_record]

    def _decode(self, records: NDArray[np.uint8]) -> NDArray[Any]:
        width = self._header.sample_bytes
        chosen = records[:, self._first_byte : self._first_byte + self._per_record * width]
        if width == 2:
            return np.ascontiguousarray(chosen).view("<i2").reshape(-1)
        return int24(np.ascontiguousarray(chosen).reshape(-1, 3))


def int24(triples: NDArray[np.uint8]) -> NDArray[np.int32]:
    """Little-endian 24-bit two's complement, shape (n, 3) bytes to (n,) int32."""
    wide = np.zeros((len(triples), 4), np.uint8)
    wide[:, 1:] = triples
    return wide.view("<i4").reshape(-1) >> 8
