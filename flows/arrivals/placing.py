"""When each delivered part of a wearing begins: wall clocks settled by their neighbours, clock changes seen in seams.

Arithmetic on instants only (integer nanoseconds UTC). Seam rule: stamps are whole seconds and device clocks miss by up
to 200 ppm, so a part that begins within 1.5 s plus 200 ppm of the part before of that part's end touches it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from fractions import Fraction
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from flows.arrivals.clocks import offset_at
from flows.readers.codes import Refused
from flows.readers.recording import Finding, finding, rate_ns

SEAM_NS = 1_500_000_000
_SEAM_PPM = 200
_EPOCH = datetime.fromisoformat("1970-01-01")  # naive UTC, as stored


def to_ns(instant_utc: datetime) -> int:
    """Nanoseconds since 1970 of a naive UTC instant."""
    return (instant_utc - _EPOCH) // timedelta(microseconds=1) * 1000


def from_ns(instant_ns: int) -> datetime:
    """Naive UTC instant, rounded to microseconds."""
    return _EPOCH + timedelta(microseconds=round(instant_ns / 1000))


class Piece(NamedTuple):
    """A gap-free stretch of a part: offset from the part's start in ns and number of samples."""

    offset_ns: int
    n_samples: int


@dataclass(frozen=True)
class DeliveredPart:
    """One accepted delivery as far as joining needs it; `read(piece, a, b)` returns int16 samples of a piece."""

    delivery_id: str
    possible_starts_ns: tuple[int, ...]  # two where the wall clock's hour happened twice or never
    wall_clock_ns: int | None  # the start as the device showed it; None where the file says an instant
    resolution_ms: int
    rate: Fraction
    pieces: tuple[Piece, ...]
    end_offset_ns: int | None
    likeness: tuple[object, ...]  # lead, scale and range: equal in all parts of one recording
    read: Callable[[int, int, int], NDArray[np.int16]]

    @property
    def end_ns_from_start(self) -> int:
        """Offset of the end of the last piece."""
        last = self.pieces[-1]
        return last.offset_ns + rate_ns(last.n_samples, self.rate)


class Misfit(Exception):
    """Parts do not fit to the others; the reason is a refusal of their deliveries."""

    def __init__(self, delivery_ids: Sequence[str], reason: Refused) -> None:
        super().__init__(reason.sentence)
        self.delivery_ids = tuple(delivery_ids)
        self.reason = reason


def placed(parts: Sequence[DeliveredPart], zone: str) -> tuple[dict[str, int], dict[str, list[Finding]]]:
    """Start of every part; a device clock that did not follow a clock change is known by its seams."""
    following = _following(parts)
    keeping = _keeping(parts, following, zone)
    if keeping is not None and _seams(parts, keeping) > _seams(parts, following):
        moved = {name for name, start in keeping.items() if start != following.get(name)}
        return keeping, {name: [finding("clock_not_changed")] for name in sorted(moved)}
    unsettled = [part.delivery_id for part in parts if part.delivery_id not in following]
    if unsettled:
        # All at once: with one of two left alone, the other would take a place that may not be its own.
        raise Misfit(
            unsettled,
            Refused(
                "local_time_ambiguous",
                "the local start lies in the hour of a clock change, and the other parts of the wear do not say which "
                "of two times is meant; expected a start that happened once. Deliver the part before or after it, or "
                "one with its offset from UTC, then retry.",
            ),
        )
    return following, {}


def _following(parts: Sequence[DeliveredPart]) -> dict[str, int]:
    """Starts by the zone's rules; an ambiguous one is settled by the only candidate that touches a neighbour.

    Where two parts could take the same place, nothing says which is which, and neither is settled.
    """
    starts_ns = {part.delivery_id: part.possible_starts_ns[0] for part in parts if len(part.possible_starts_ns) == 1}
    while True:
        settled: dict[str, int] = {}
        for part in parts:
            if part.delivery_id not in starts_ns:
                touching = [start for start in part.possible_starts_ns if _touches(part, start, parts, starts_ns)]
                if len(touching) == 1:
                    settled[part.delivery_id] = touching[0]
        places = list(settled.values())
        settled = {name: start for name, start in settled.items() if sum(_are_twins(start, p) for p in places) == 1}
        if not settled:
            return starts_ns
        starts_ns |= settled


def _are_twins(start_ns: int, other_ns: int) -> bool:
    return abs(start_ns - other_ns) <= SEAM_NS


def _touches(part: DeliveredPart, start_ns: int, parts: Sequence[DeliveredPart], starts_ns: dict[str, int]) -> bool:
    for other in parts:
        if other.delivery_id in starts_ns:
            other_ns = starts_ns[other.delivery_id]
            if abs(start_ns - other_ns - other.end_ns_from_start) <= tolerance_ns(other.end_ns_from_start):
                return True
            if abs(other_ns - start_ns - part.end_ns_from_start) <= tolerance_ns(part.end_ns_from_start):
                return True
    return False


def _keeping(parts: Sequence[DeliveredPart], following: dict[str, int], zone: str) -> dict[str, int] | None:
    """Starts of a device clock that kept the offset of its first part; None where that makes no difference."""
    if not following:
        return None
    first_offset = offset_at(from_ns(min(following.values())), zone)
    offset_ns = first_offset // timedelta(microseconds=1) * 1000
    starts_ns = {
        part.delivery_id: part.possible_starts_ns[0] if part.wall_clock_ns is None else part.wall_clock_ns - offset_ns
        for part in parts
    }
    ordered = sorted(starts_ns.values())
    if starts_ns == following or any(_are_twins(start, after) for start, after in pairwise(ordered)):
        return None
    return starts_ns


def _seams(parts: Sequence[DeliveredPart], starts_ns: dict[str, int]) -> int:
    placed = sorted((part for part in parts if part.delivery_id in starts_ns), key=lambda p: starts_ns[p.delivery_id])
    return sum(
        abs(starts_ns[after.delivery_id] - starts_ns[before.delivery_id] - before.end_ns_from_start)
        <= tolerance_ns(before.end_ns_from_start)
        for before, after in pairwise(placed)
    )


def tolerance_ns(length_ns: int) -> int:
    """How far the next part's stamp may be off from the end of a part of this length."""
    return SEAM_NS + length_ns * _SEAM_PPM // 1_000_000
