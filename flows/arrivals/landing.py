"""Samples of one opened delivery into the lake: int16 blocks, their hash, and what was seen while they passed.

Nothing is in force after this; the parts count only once the ledger names them.
"""

from __future__ import annotations

import hashlib
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from flows.readers.codes import Refused
from flows.readers.recording import Finding, Opened, finding
from warehouse.parts import BLOCK_SAMPLES, Part, frame_schema, write_signal
from warehouse.schema import LAKE

_WRITERS = 2  # blocks written while the next one is read and hashed; more would only hold more memory
MOST_PIECES = 30_000  # piece and segment numbers are 16 bit


class Landed(NamedTuple):
    """What landed of one delivery: its blocks as rows of the lake table `pieces`, and its marks."""

    pieces: pl.DataFrame
    marks: pl.DataFrame
    signal_sha256: str
    findings: tuple[Finding, ...]


class Identity(NamedTuple):
    """What the blocks of a delivery carry so that a recording can be put together again from them alone."""

    delivery_id: str
    device_serial: str
    file_zone: str | None


def land(lake: Path, opened: Opened, identity: Identity, passed: Callable[[int], None] = lambda n: None) -> Landed:
    """Write all samples as signal parts under the delivery's own key; `passed(n)` is called per block.

    Raises Refused where the samples cannot be stored.
    """
    if len(opened.stretches) > MOST_PIECES:
        raise Refused(
            "too_many_gaps",
            f"the file has {len(opened.stretches)} gap-free stretches; expected at most {MOST_PIECES}. "
            "Export it without splitting at every record.",
        )
    digest = hashlib.sha256(f"{opened.rate} Hz int16\n".encode())
    seen = _Seen(opened)
    blocks: list[Part] = []
    with ThreadPoolExecutor(_WRITERS) as pool:
        writing: deque[Future[Part]] = deque()
        for piece, block, samples in _blocks(opened):
            digest.update(np.ascontiguousarray(samples, "<i2").data)
            seen.add(samples)
            if len(writing) == _WRITERS:
                blocks.append(writing.popleft().result())
            writing.append(pool.submit(write_signal, lake, identity.delivery_id, piece, block, samples))
            passed(samples.size)
        blocks += [future.result() for future in writing]
    findings = (*opened.findings, *seen.findings())
    return Landed(_pieces(opened, identity, blocks, findings), _marks(opened, identity), digest.hexdigest(), findings)


def _blocks(opened: Opened) -> Iterator[tuple[int, int, NDArray[np.int16]]]:
    for piece, stretch in enumerate(opened.stretches):
        for block, a in enumerate(range(0, stretch.n_samples, BLOCK_SAMPLES)):
            first = stretch.first_sample + a
            yield piece, block, opened.read(first, first + min(BLOCK_SAMPLES, stretch.n_samples - a))


class _Seen:
    """What can only be known from all samples: values at the ends of the range, or a single value."""

    def __init__(self, opened: Opened) -> None:
        self._rails, self._missing = opened.rails, opened.missing_count
        self._low, self._high, self._at_rails, self._missed = 32767, -32768, 0, 0

    def add(self, samples: NDArray[np.int16]) -> None:
        """Look at the next samples."""
        low, high = int(samples.min()), int(samples.max())
        if self._missing is not None and low == self._missing:
            self._missed += int(np.count_nonzero(samples == self._missing))
        if low <= self._rails[0] or high >= self._rails[1]:
            at_rail = (samples <= self._rails[0]) | (samples >= self._rails[1])
            if self._missing is not None:
                at_rail &= samples != self._missing
            self._at_rails += int(np.count_nonzero(at_rail))
        self._low, self._high = min(self._low, low), max(self._high, high)

    def findings(self) -> tuple[Finding, ...]:
        """What has to be said about the samples."""
        found = []
        if self._at_rails:
            found.append(finding("saturated", f"{self._at_rails} samples"))
        if self._missed:
            found.append(finding("missing_samples", f"{self._missed} samples"))
        if self._low == self._high:
            found.append(finding("flat"))
        return tuple(found)


def _pieces(opened: Opened, identity: Identity, blocks: list[Part], findings: tuple[Finding, ...]) -> pl.DataFrame:
    common = {
        "delivery_id": identity.delivery_id,
        "device_serial": identity.device_serial,
        "arrival_number": 0,
        "start_local": opened.start_local,
        "start_resolution_ms": opened.start_resolution_ms,
        "file_zone": identity.file_zone,
        "end_offset_ns": opened.end_offset_ns,
        "rate_numerator": opened.rate.numerator,
        "rate_denominator": opened.rate.denominator,
        "lead": opened.lead,
        "mv_per_count": opened.mv_per_count,
        "count_at_zero_mv": opened.count_at_zero_mv,
        "rail_low_count": opened.rails[0],
        "rail_high_count": opened.rails[1],
        "missing_count": opened.missing_count,
        "findings": " ".join(sorted({found.code for found in findings})) or None,
    }
    rows = [
        common
        | {
            "piece": part.segment,
            "block": part.block,
            "offset_ns": opened.stretches[part.segment or 0].offset_ns,
            "sample_count": part.rows,
            "part_path": part.path,
            "part_sha256": part.sha256,
            "part_bytes": part.bytes,
        }
        for part in blocks
    ]
    return typed_frame("pieces", rows)


def _marks(opened: Opened, identity: Identity) -> pl.DataFrame:
    rows = [
        {
            "delivery_id": identity.delivery_id,
            "offset_ns": mark.offset_ns,
            "duration_s": mark.duration_s,
            "mark_text": mark.text,
        }
        for mark in opened.marks
    ]
    return typed_frame("delivered_marks", rows)


def typed_frame(table: str, rows: list[dict]) -> pl.DataFrame:
    """Rows as a frame with the lake table's columns and types, also when there are none."""
    return pl.DataFrame(rows, schema=frame_schema(LAKE[table]), orient="row")
