"""WFDB records: a text header and the signal files it names, in one or several segments.

Source: WFDB specification, physionet.org/physiotools/wag/signal-5.htm and header-5.htm. Departures: a gain of 0 or
none is refused instead of taken as 200 counts per mV; file names that lead out of the delivery are refused; a wrong
checksum is a finding. A signal that is skewed against the others is read without its skew, so its own time is kept.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from flows.readers.channels import choose, mv_per_unit
from flows.readers.codes import Refused
from flows.readers.recording import Finding, Opened, Site, Stretch, checked_rate, checked_scale, finding, rate_ns
from flows.readers.wfdb_codings import CODINGS, Coding
from flows.readers.wfdb_flac import FlacCoding
from flows.readers.wfdb_header import Header, Signal, looks_like_header, read_header
from flows.readers.wide import Wide, fitted

NAME = "WFDB"
_CHECK_SAMPLES = 2**20


def identify(head: bytes) -> bool:
    """A WFDB delivery is known by its header's first lines; signal files alone have no mark."""
    return looks_like_header(head)


def names_in_header(path: Path) -> list[str]:
    """Files that a header names, without their headers' own names; raises Refused for one that leads outside."""
    header = read_header(path.read_bytes())
    for name in header.file_names:
        _refuse_outside(name)
    return header.file_names


def _refuse_outside(name: str) -> None:
    if "/" in name or "\\" in name or name.startswith(".") or "\0" in name:
        raise Refused(
            "file_name_points_outside",
            "header: a signal file name leads out of the delivery's folder; expected plain names beside the header.",
        )


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG of one record; the first file is its header. Raises Refused."""
    header = _header(files[0])
    pieces = _pieces(header, files[0].parent)
    described = next((piece for piece in pieces if piece.header.signals), None)
    if described is None:
        raise Refused("no_signals", "header: it lists no signals; expected an ECG signal.")
    labels = [signal.label for signal in described.header.signals]
    channel, choice = choose(labels, [signal.unit for signal in described.header.signals], site.ecg_channel, "header")
    label = labels[channel]
    first = described.header.signals[channel]
    rate = checked_rate(header.fs_hz * first.samples_per_frame, "header")
    mv_per_count, scale_findings = _scale(first, site)
    rank = labels[:channel].count(label)
    readers = [piece.open(label, rank, first) for piece in pieces]
    stretches, read = _joined(readers, header.fs_hz, first.samples_per_frame)
    coding = CODINGS[first.coding]
    lead = Wide(read, stretches, mv_per_count, float(first.baseline), _rails(first, coding), coding.missing)
    lead, wide_findings = fitted(lead) if coding.is_wide else (lead, ())
    return Opened(
        format=NAME,
        device_words=(),
        patient_words=(),
        start_local=header.start,
        start_resolution_ms=1 if header.start_has_fraction else 1000,
        zone=None,
        rate=rate,
        lead=label,
        mv_per_count=lead.mv_per_count,
        count_at_zero_mv=lead.count_at_zero_mv,
        rails=lead.rails,
        missing_count=lead.missing_count,
        stretches=lead.stretches,
        read=lead.read,
        findings=(*choice, *scale_findings, *wide_findings, *(f for reader in readers for f in reader.findings)),
        other_channels=tuple(other for n, other in enumerate(labels) if n != channel),
    )


def _header(path: Path) -> Header:
    try:
        return read_header(path.read_bytes())
    except FileNotFoundError:
        raise Refused(
            "part_missing", f"header: the segment header {path.suffix} it names is not in the delivery. Add it."
        ) from None


@dataclass(frozen=True)
class _Piece:
    """One segment of a record, or a gap where `folder` is None."""

    header: Header
    folder: Path | None
    first_frame: int

    def open(self, label: str, rank: int, like: Signal) -> _PieceReader:
        """Reader of the signal of this label, of several so called the one of this rank; it must be scaled alike."""
        named = [n for n, signal in enumerate(self.header.signals) if signal.label == label]
        if self.folder is None or len(named) <= rank:
            return _PieceReader(self.first_frame, 0, lambda a, b: np.empty(0, np.int16), ())
        signal = self.header.signals[named[rank]]
        if (signal.gain, signal.baseline, signal.samples_per_frame) != (
            like.gain, like.baseline, like.samples_per_frame,
        ):  # fmt: skip
            raise Refused("does_not_fit_recording", "header: the segments have different scales; expected one scale.")
        return _signal_reader(self.header, named[rank], self.folder, self.first_frame)


@dataclass(frozen=True)
class _PieceReader:
    first_frame: int
    n_samples: int
    read: Callable[[int, int], NDArray[Any]]
    findings: tuple[Finding, ...]


def _pieces(header: Header, folder: Path) -> list[_Piece]:
    if not header.segments:
        return [_Piece(header, folder, 0)]
    pieces, frame = [], 0
    for name, n_samples in header.segments:
        if name != "~":
            _refuse_outside(name)
            segment = _header(folder / f"{name}.hea")
            if segment.segments:
                raise Refused("bad_header_number", "header: a segment has segments itself; expected signals.")
            # A layout segment of a variable-layout record has length 0 and describes signals only.
            pieces.append(_Piece(segment, folder if n_samples else None, frame))
        frame += n_samples
    return pieces


def _signal_reader(header: Header, number: int, folder: Path, first_frame: int) -> _PieceReader:
    signal = header.signals[number]
    coding = CODINGS.get(signal.coding)
    if coding is None:
        known = ", ".join(str(code) for code in sorted(CODINGS))
        raise Refused(
            "sample_coding_not_supported",
            f"header: signal {number + 1} has format {signal.coding}; read here are {known}. Export it as format 16.",
        )
    _refuse_outside(signal.file_name)
    path = folder / signal.file_name
    if not path.is_file():
        raise Refused("part_missing", f"header: the signal file of signal {number + 1} is not in the delivery. Add it.")
    group = [other for other in header.signals if other.file_name == signal.file_name]
    earlier = (other for other in header.signals[:number] if other.file_name == signal.file_name)
    before = sum(other.samples_per_frame for other in earlier)
    frame_samples = sum(other.samples_per_frame for other in group)
    there = coding.count(path, signal.byte_offset) // frame_samples
    n_frames, findings = _length(header.n_samples, there)
    frames = _Frames(path, coding, signal.byte_offset, frame_samples, before, signal.samples_per_frame)
    n_samples = n_frames * signal.samples_per_frame
    if not findings:
        findings = _checksum(frames.read, n_samples, signal.checksum)
    return _PieceReader(first_frame, n_samples, frames.read, findings)


def _length(stated: int | None, there: int) -> tuple[int, tuple[Finding, ...]]:
    if there <= 0:
        raise Refused("no_samples", "signal file: it holds no whole frame of samples. Export the record again.")
    if stated is None or there == stated:
        return there, ()
    if there < stated:
        return there, (finding("file_cut_short", f"{there} of {stated} samples"),)
    return stated, ()  # signal files may be padded


def _checksum(read: Callable[[int, int], NDArray[Any]], n_samples: int, stated: int | None) -> tuple[Finding, ...]:
    """Compare the 16-bit sum of all samples, which headers write signed or unsigned."""
    if stated is None:
        return ()
    total = sum(
        int(read(a, min(a + _CHECK_SAMPLES, n_samples)).sum(dtype=np.int64))
        for a in range(0, n_samples, _CHECK_SAMPLES)
    )
    return () if (total - stated) % 65536 == 0 else (finding("checksum_wrong", "sum of the samples"),)


class _Frames:
    """Samples of one signal among those that share its file."""

    def __init__(
        self, path: Path, coding: Coding | FlacCoding, byte_offset: int, frame_samples: int, before: int, per_frame: int
    ) -> None:
        self._path, self._coding, self._byte_offset = path, coding, byte_offset
        self._frame_samples, self._before, self._per_frame = frame_samples, before, per_frame

    def read(self, a: int, b: int) -> NDArray[Any]:
        """Samples a (included) to b (excluded) of the signal."""
        first, last = a // self._per_frame, -(-b // self._per_frame)
        counts = self._coding.read(
            self._path, self._byte_offset, first * self._frame_samples, last * self._frame_samples
        )
        frames = counts.reshape(-1, self._frame_samples)[:, self._before : self._before + self._per_frame]
        return np.ascontiguousarray(frames).reshape(-1)[a - first * self._per_frame : b - first * self._per_frame]


def _scale(signal: Signal, site: Site) -> tuple[float, tuple[Finding, ...]]:
    if site.mv_per_count:
        return site.mv_per_count, (finding("scale_from_site", f"{site.mv_per_count:g} mV"),)
    factor = mv_per_unit(signal.unit)
    if factor is None:
        raise Refused("unit_unknown", "header: the ECG's unit is no voltage; expected V, mV, uV or nV.")
    if not signal.gain:
        raise Refused(
            "amplitude_scale_missing",
            "header: the ECG has no gain; expected counts per mV. Set mv_per_count in section [site] of "
            "programme.toml if it is known.",
        )
    mv_per_count = factor / signal.gain
    return checked_scale(mv_per_count, 2 ** (signal.adc_bits or 16), "header"), ()


def _rails(signal: Signal, coding: Coding | FlacCoding) -> tuple[int, int]:
    """Lowest and highest count of the converter, within what the coding can hold."""
    half = 2 ** (signal.adc_bits - 1) if signal.adc_bits else coding.highest + 1
    low, high = signal.adc_zero - half, signal.adc_zero + half - 1
    return max(low, coding.lowest), min(high, coding.highest)


def _joined(
    readers: list[_PieceReader], frame_rate: Any, per_frame: int
) -> tuple[tuple[Stretch, ...], Callable[[int, int], NDArray[Any]]]:
    """Stretches over the pieces (neighbours without a gap become one) and one reader over all of them."""
    filled = [reader for reader in readers if reader.n_samples]
    if not filled:
        raise Refused("no_samples", "header: all segments are empty. Export the record again.")
    firsts = np.cumsum([0] + [reader.n_samples for reader in filled])
    stretches: list[Stretch] = []
    for first, reader in zip(firsts, filled, strict=False):
        offset_ns = rate_ns(reader.first_frame - filled[0].first_frame, frame_rate)
        before = stretches[-1] if stretches else None
        if before and before.offset_ns + rate_ns(before.n_samples, frame_rate * per_frame) == offset_ns:
            stretches[-1] = before._replace(n_samples=before.n_samples + reader.n_samples)
        else:
            stretches.append(Stretch(int(first), reader.n_samples, offset_ns))

    def read(a: int, b: int) -> NDArray[Any]:
        pieces = [
            reader.read(max(a - first, 0), min(b - first, reader.n_samples))
            for first, reader in zip(firsts, filled, strict=False)
            if a < first + reader.n_samples and first < b
        ]
        return pieces[0] if len(pieces) == 1 else np.concatenate([np.empty(0, np.int16), *pieces])

    return tuple(stretches), read
