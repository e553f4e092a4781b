"""DICOM ECG waveforms: ambulatory, general, 12-lead and 32-bit ECG storage, read in place.

Source: DICOM PS3.3 C.10.9 (waveform module) and sup. 237. The first multiplex group is read. Patient name, birth date
and every other attribute of the person but the patient ID are passed over.
"""

from __future__ import annotations

import re
import struct
from collections.abc import Sequence
from datetime import date, datetime, time, timedelta
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from flows.readers.channels import choose, mv_per_unit
from flows.readers.codes import Refused
from flows.readers.dicom_elements import WAVEFORM_DATA, Elements, Place, read_elements
from flows.readers.recording import Finding, Opened, Site, Stretch, checked_rate, checked_scale, decimal_of, finding
from flows.readers.wide import Wide, fitted

NAME = "DICOM"
_ECG_STORAGE = b"1.2.840.10008.5.1.4.1.1.9.1."
_DTYPES = {
    (8, "SB"): "<i1", (8, "UB"): "<u1", (16, "SS"): "<i2", (16, "US"): "<u2", (32, "SL"): "<i4", (32, "UL"): "<u4",
}  # fmt: skip
_MOMENT = re.compile(r"(\d{4})(\d\d)(\d\d)(\d\d)(\d\d)(\d\d)?(\.\d{1,6})?([+-]\d{4})?")


def identify(head: bytes) -> bool:
    """DICM stands at byte 128."""
    return head[128:132] == b"DICM"


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG channel of the first multiplex group; raises Refused."""
    path = files[0]
    with path.open("rb") as file:
        elements = read_elements(file)
    if not _bytes(elements, 0x00080016).startswith(_ECG_STORAGE) or not _item(elements, 0x54000100):
        raise Refused("no_signals", "DICOM: it is no ECG waveform; expected ambulatory or general ECG storage.")
    group = _item(elements, 0x54000100)
    channels = group.get(0x003A0200)
    if not isinstance(channels, list) or not channels:
        raise Refused("no_signals", "DICOM: the waveform describes no channels; expected an ECG channel.")
    labels = [_label(channel) for channel in channels]
    number, choice = choose(labels, [_unit(channel) for channel in channels], site.ecg_channel, "DICOM")
    rate = checked_rate(_decimal(group, 0x003A001A, "sampling frequency"), "DICOM")
    dtype = _dtype(group)
    n_frames, place, count_findings = _extent(path, group, len(channels), dtype)
    mv_per_count, count_at_zero, scale_findings = _scale(channels[number], site, 2.0 ** (8 * dtype.itemsize))
    stretches = (Stretch(0, n_frames, 0),)
    limits = np.iinfo(dtype)
    read = _Samples(path, place.offset, len(channels), number, dtype).read
    lead = Wide(
        read, stretches, mv_per_count, count_at_zero, (int(limits.min), int(limits.max)), _padding(group, dtype)
    )
    lead, wide_findings = fitted(lead) if limits.max > 32767 else (lead, ())
    start, zone = _start(elements)
    return Opened(
        format=NAME,
        device_words=_words(elements, 0x00181000),
        patient_words=_words(elements, 0x00100020),
        start_local=start,
        start_resolution_ms=1 if start and start.microsecond else 1000,
        zone=zone,
        rate=rate,
        lead=labels[number],
        mv_per_count=lead.mv_per_count,
        count_at_zero_mv=lead.count_at_zero_mv,
        rails=lead.rails,
        missing_count=lead.missing_count,
        stretches=stretches,
        read=lead.read,
        findings=(*choice, *scale_findings, *count_findings, *wide_findings),
        other_channels=tuple(label for n, label in enumerate(labels) if n != number),
    )


def _bytes(elements: Elements, tag: int) -> bytes:
    value = elements.get(tag, b"")
    return value.strip(b" \0") if isinstance(value, bytes) else b""


def _text(elements: Elements, tag: int) -> str:
    return _bytes(elements, tag).decode("latin-1")


def _words(elements: Elements, tag: int) -> tuple[str, ...]:
    return tuple(_text(elements, tag).split())


def _item(elements: Elements, tag: int) -> Elements:
    items = elements.get(tag)
    return items[0] if isinstance(items, list) and items else {}


def _decimal(elements: Elements, tag: int, name: str, default: str = "") -> Fraction:
    try:
        return decimal_of(_text(elements, tag) or default)
    except ValueError:
        raise Refused("bad_header_number", f"DICOM: the {name} is no number; expected one.") from None


def _whole(elements: Elements, tag: int, form: str) -> int:
    try:
        return int(struct.unpack(form, elements.get(tag, b""))[0])
    except (struct.error, TypeError):
        raise Refused("bad_header_number", f"DICOM: element {tag:08X} is no number; expected one.") from None


def _label(channel: Elements) -> str:
    source = _text(_item(channel, 0x003A0208), 0x00080104) or _text(channel, 0x003A0203)
    return source.removeprefix("Lead ").strip() or "unnamed"


def _unit(channel: Elements) -> str:
    return _text(_item(channel, 0x003A0211), 0x00080100)


def _dtype(group: Elements) -> np.dtype[Any]:
    bits, kind = _whole(group, 0x54001004, "<H"), _text(group, 0x54001006)
    if (bits, kind) not in _DTYPES:
        raise Refused(
            "sample_coding_not_supported",
            f"DICOM: samples are {kind or 'not described'} of {bits} bit; expected linear samples of 8, 16 or 32 bit.",
        )
    return np.dtype(_DTYPES[bits, kind])


def _extent(
    path: Path, group: Elements, n_channels: int, dtype: np.dtype[Any]
) -> tuple[int, Place, tuple[Finding, ...]]:
    """Samples per channel that are there, where they lie, and what the header says otherwise."""
    data = group.get(WAVEFORM_DATA)
    if not isinstance(data, Place):
        raise Refused("no_samples", "DICOM: there are no waveform data; expected samples.")
    there = min(data.n_bytes, path.stat().st_size - data.offset) // (n_channels * dtype.itemsize)
    stated = _whole(group, 0x003A0010, "<I")
    if there <= 0:
        raise Refused("no_samples", "DICOM: the file ends before the samples. Export it again.")
    if there < stated:
        return there, data, (finding("file_cut_short", f"{there} of {stated} samples"),)
    if stated == 0:
        return there, data, (finding("more_records_than_header_says", f"{there} samples, header 0"),)
    return stated, data, ()


def _scale(channel: Elements, site: Site, n_counts: float) -> tuple[float, float, tuple[Finding, ...]]:
    if site.mv_per_count:
        return site.mv_per_count, 0.0, (finding("scale_from_site", f"{site.mv_per_count:g} mV"),)
    factor = mv_per_unit(_unit(channel))
    if factor is None:
        raise Refused("unit_unknown", "DICOM: the channel's sensitivity has no voltage as unit; expected mV or uV.")
    sensitivity = _decimal(channel, 0x003A0210, "channel sensitivity", "0")
    mv_per_count = float(sensitivity * _decimal(channel, 0x003A0212, "sensitivity correction factor", "1")) * factor
    if not mv_per_count:
        raise Refused(
            "amplitude_scale_missing",
            "DICOM: the channel has no sensitivity; expected millivolts per count. Set mv_per_count in section [site] "
            "of programme.toml if it is known.",
        )
    baseline_mv = float(_decimal(channel, 0x003A0213, "channel baseline", "0")) * factor
    return checked_scale(mv_per_count, n_counts, "DICOM"), (0.0 - baseline_mv) / mv_per_count, ()


def _padding(group: Elements, dtype: np.dtype[Any]) -> int | None:
    value = group.get(0x5400100A)
    if not isinstance(value, bytes) or len(value) < dtype.itemsize:
        return None
    return int(np.frombuffer(value[: dtype.itemsize], dtype)[0])


def _start(elements: Elements) -> tuple[datetime | None, str | None]:
    """Wall clock of the device, or UTC where the file says its offset."""
    found = _MOMENT.fullmatch(_text(elements, 0x0008002A))
    if found is None:
        return None, None
    year, month, day, hour, minute = (int(part) for part in found.groups()[:5])
    offset = found[8] or _text(elements, 0x00080201)
    try:
        micros = round(float(found[7] or 0) * 1_000_000)
        start = datetime.combine(date(year, month, day), time(hour, minute, int(found[6] or 0), micros))
        if not re.fullmatch(r"[+-]\d{4}", offset):
            return start, None
        return start - timedelta(hours=int(offset[:3]), minutes=int(offset[0] + offset[3:])), "UTC"
    except (ValueError, OverflowError):
        return None, None


class _Samples:
    """Samples of one channel among those interleaved."""

    def __init__(self, path: Path, offset: int, n_channels: int, number: int, dtype: np.dtype[Any]) -> None:
        self._path, self._offset, self._n_channels, self._number = path, offset, n_channels, number
        self._dtype = dtype

    def read(self, a: int, b: int) -> NDArray[Any]:
        """Samples a (included) to b (excluded)."""
        frames = np.empty((b - a, self._n_channels), self._dtype)
        with self._path.open("rb", buffering=0) as file:
            file.seek(self._offset + a * self._n_channels * self._dtype.itemsize)
            if b > a and file.readinto(frames.data.cast("B")) != frames.nbytes:
                raise Refused("samples_cut_short", "DICOM: the file became shorter while it was read.")
        counts = np.ascontiguousarray(frames[:, self._number])
        return counts.astype(np.int16) if self._dtype.itemsize == 1 else counts
