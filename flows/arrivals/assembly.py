"""Landed pieces and the register into recordings: which wear each delivery belongs to and what its recording is.

A recording is always made anew from all accepted pieces of its device and the present register, without touching
samples (an overlap's rest is the exception). So late parts, corrected wears and another arrival order end in the same
rows. What no wear covers any more stays in the lake under a key of its own, out of every published table.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Callable, Iterable, Sequence
from datetime import datetime, timedelta
from fractions import Fraction
from pathlib import Path
from typing import Any, NamedTuple

import polars as pl

from flows.arrivals.clocks import possible_utc
from flows.arrivals.joining import Arrangement, Span, arrange
from flows.arrivals.landing import typed_frame
from flows.arrivals.placing import DeliveredPart, Misfit, Piece, from_ns, to_ns
from flows.readers.recording import rate_ns
from flows.register import Register, Wear
from warehouse.parts import BLOCK_SAMPLES, Part, SignalReader, write_signal

_UNSET_CLOCK = timedelta(days=180)


class Assembled(NamedTuple):
    """One recording: rows of the lake tables and the signal parts in force."""

    recording: pl.DataFrame
    segments: pl.DataFrame
    signal: tuple[Part, ...]
    starts_ns: dict[str, int]  # first instant of each delivery
    findings: dict[str, tuple[str, ...]]  # codes of joining, by delivery


class Match(NamedTuple):
    """The wear that a delivery belongs to and the instants at which it may have begun there."""

    wear: Wear
    possible_starts: tuple[datetime, ...]
    start_from_register: bool


def match(register: Register, device_serial: str, start_local: datetime | None, file_zone: str | None) -> Match | None:
    """The wear of the device that covers the start, or None.

    A wall-clock start is read in the zone of each wear's patient unless the file says its zone. Where the file has no
    start, or one of a clock that was never set, the wear whose register row has one is taken when it is the only one.
    """
    wears = register.wears_of(device_serial)
    if start_local is None or _is_unset(start_local, wears):
        started = [wear for wear in wears if wear.start_local is not None]
        if len(started) != 1 or started[0].start_local is None:
            return None
        return Match(started[0], possible_utc(started[0].start_local, started[0].zone), True)
    for wear in wears:
        starts = tuple(start for start in possible_utc(start_local, file_zone or wear.zone) if wear.covers(start))
        if starts:
            return Match(wear, starts, False)
    return None


def _is_unset(start_local: datetime, wears: Sequence[Wear]) -> bool:
    """The device clock shows a time long before the device was first worn, as clocks do that begin at a fixed date."""
    return bool(wears) and start_local < wears[0].from_utc - _UNSET_CLOCK


def device_key(device_serial: str) -> str:
    """Key of a device in the lake: readable, safe in a path, and never shared by two serials."""
    readable = re.sub(r"[^A-Za-z0-9-]", "-", device_serial)
    return f"d-{readable[:60]}-{hashlib.sha256(device_serial.encode()).hexdigest()[:8]}"


def parts_of(lake: Path, pieces: pl.DataFrame, register: Register) -> dict[str, list[DeliveredPart]]:
    """The device's deliveries as parts of their recordings, in order of arrival; '' holds those without a wear."""
    found: dict[str, list[DeliveredPart]] = {}
    ordered = pieces.sort("arrival_number", "piece", "block")
    for (delivery_id,), blocks in ordered.group_by("delivery_id", maintain_order=True):
        head = blocks.row(0, named=True)
        matched = match(register, head["device_serial"], head["start_local"], head["file_zone"])
        recording_id = matched.wear.recording_id if matched else ""
        found.setdefault(recording_id, []).append(_part(lake, str(delivery_id), blocks, head, matched))
    return found


def _part(
    lake: Path, delivery_id: str, blocks: pl.DataFrame, head: dict[str, Any], matched: Match | None
) -> DeliveredPart:
    sizes = blocks.group_by("piece", maintain_order=True).agg(pl.col("offset_ns").first(), pl.col("sample_count").sum())
    reader = SignalReader(lake, signal_parts(blocks))
    return DeliveredPart(
        delivery_id=delivery_id,
        possible_starts_ns=tuple(to_ns(start) for start in matched.possible_starts) if matched else (),
        wall_clock_ns=to_ns(head["start_local"])
        if matched and not matched.start_from_register and head["file_zone"] is None
        else None,
        resolution_ms=head["start_resolution_ms"],
        rate=Fraction(head["rate_numerator"], head["rate_denominator"]),
        pieces=tuple(Piece(offset, size) for _, offset, size in sizes.iter_rows()),
        end_offset_ns=head["end_offset_ns"],
        likeness=tuple(head[name] for name in _LIKENESS),
        read=reader.read,
    )


_LIKENESS = ("lead", "mv_per_count", "count_at_zero_mv")


def signal_parts(blocks: pl.DataFrame) -> list[Part]:
    """Rows of `pieces` as the signal parts of their delivery."""
    columns = ("delivery_id", "part_path", "part_sha256", "sample_count", "part_bytes", "piece", "block")
    return [
        Part("signal", key, path, sha256, rows, size, "", piece, block)
        for key, path, sha256, rows, size, piece, block in blocks.select(columns).iter_rows()
    ]


def assemble(
    lake: Path, pieces: pl.DataFrame, wear: Wear, parts: Sequence[DeliveredPart]
) -> tuple[Assembled | None, list[Misfit]]:
    """Put one recording together from its parts, given in order of arrival.

    Parts that contradict earlier ones are left out and returned; None where no part is left.
    """
    arrangement, kept, misfits = _arranged(parts, wear.zone)
    if arrangement is None:
        return None, misfits
    present = pieces.filter(pl.col("delivery_id").is_in([part.delivery_id for part in kept]))
    segments = _segment_rows(arrangement, wear.recording_id)
    assembled = Assembled(
        recording=_recording_row(arrangement, segments, wear, present),
        segments=segments,
        signal=tuple(_signal(lake, present, wear.recording_id, arrangement, kept)),
        starts_ns=_starts(arrangement, kept),
        findings={name: tuple(found.code for found in said) for name, said in arrangement.findings.items()},
    )
    return assembled, misfits


def _arranged(
    parts: Sequence[DeliveredPart], zone: str
) -> tuple[Arrangement | None, list[DeliveredPart], list[Misfit]]:
    kept = list(parts)
    misfits: list[Misfit] = []
    while kept:
        try:
            return arrange(kept, zone), kept, misfits
        except Misfit as misfit:
            misfits.append(misfit)
            kept = [part for part in kept if part.delivery_id not in misfit.delivery_ids]
    return None, kept, misfits


def _starts(arrangement: Arrangement, parts: Iterable[DeliveredPart]) -> dict[str, int]:
    """First instant of each delivery, by the instants of the segments."""
    starts: dict[str, int] = {}
    by_id = {part.delivery_id: part for part in parts}
    for segment in arrangement.segments:
        at = 0
        for span in segment.spans:
            part = by_id[span.delivery_id]
            if span.delivery_id not in starts:
                instant = segment.start_ns + round(at / arrangement.fs_hz * 1e9) - rate_ns(span.first, part.rate)
                starts[span.delivery_id] = instant - part.pieces[span.piece].offset_ns
            at += span.last - span.first
    return starts


def _signal(
    lake: Path, pieces: pl.DataFrame, recording_id: str, arrangement: Arrangement, parts: Sequence[DeliveredPart]
) -> list[Part]:
    """Signal parts of the recording: landed blocks as they are, cut ones written anew."""
    blocks: dict[tuple[str, int], list[Part]] = {}
    for part in signal_parts(pieces.sort("delivery_id", "piece", "block")):
        blocks.setdefault((part.key, part.segment or 0), []).append(part)
    readers = {part.delivery_id: part.read for part in parts}
    signal: list[Part] = []
    for number, segment in enumerate(arrangement.segments):
        taken = [
            part
            for span in segment.spans
            for part in _cut(lake, span, blocks[(span.delivery_id, span.piece)], readers[span.delivery_id])
        ]
        signal += [part._replace(key=recording_id, segment=number, block=block) for block, part in enumerate(taken)]
    return signal


def _cut(lake: Path, span: Span, blocks: list[Part], read: Callable[..., Any]) -> Iterable[Part]:
    """The blocks of a piece within a span; a block that the span cuts is written again from there."""
    at = 0
    for part in blocks:
        first, last = max(span.first, at), min(span.last, at + part.rows)
        if first == at and last == at + part.rows:
            yield part
        elif first < last:
            for a in range(first, last, BLOCK_SAMPLES):
                yield write_signal(lake, span.delivery_id, span.piece, part.block or 0, read(span.piece, a, last))
        at += part.rows


def _segment_rows(arrangement: Arrangement, recording_id: str) -> pl.DataFrame:
    rows = [
        {
            "recording_id": recording_id,
            "segment": number,
            "start_utc": from_ns(segment.start_ns),
            "end_utc": from_ns(segment.start_ns + round(segment.n_samples / arrangement.fs_hz * 1e9)),
            "sample_count": segment.n_samples,
            "delivery_id": segment.spans[0].delivery_id,
        }
        for number, segment in enumerate(arrangement.segments)
    ]
    return typed_frame("segments", rows)


def _recording_row(arrangement: Arrangement, segments: pl.DataFrame, wear: Wear, pieces: pl.DataFrame) -> pl.DataFrame:
    head = pieces.sort("arrival_number", "piece", "block").row(0, named=True)
    n_samples = int(segments["sample_count"].sum())
    codes = {code for codes in pieces["findings"].drop_nulls() for code in codes.split()}
    codes |= {found.code for findings in arrangement.findings.values() for found in findings}
    row = {
        "recording_id": wear.recording_id,
        "device_serial": wear.device_serial,
        "start_utc": segments["start_utc"].min(),
        "end_utc": segments["end_utc"].max(),
        "zone": wear.zone,
        "zone_source": wear.zone_source,
        "fs_hz": arrangement.fs_hz,
        "segment_count": segments.height,
        "sample_count": n_samples,
        "recorded_h": n_samples / arrangement.fs_hz / 3600,
        "findings": " ".join(sorted(codes)) or None,
        # Headers that give each file's own extremes as its range: the widest of them all is nearest the converter's.
        "rail_low_count": pieces["rail_low_count"].min(),
        "rail_high_count": pieces["rail_high_count"].max(),
        "missing_count": next(iter(pieces["missing_count"].drop_nulls()), None),
    }
    return typed_frame("recordings", [row | {name: head[name] for name in _LIKENESS}])
