"""Parts of one wearing joined into gap-free segments: what follows on, what is a gap, what is held twice.

Nothing is read but the samples of overlaps, through the parts' own `read`. What follows on is decided by the seam rule
of `placing`; the sample clock is held against the stamps over the longest segment.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from flows.arrivals.placing import SEAM_NS, DeliveredPart, Misfit, placed, tolerance_ns
from flows.readers.codes import Refused
from flows.readers.recording import Finding, finding, rate_ns

_SECOND_NS = 1_000_000_000
_NEEDLE = 500
_LEAST_HELD, _LEAST_HELD_S = 25, 0.2  # fewer equal samples are chance
_COMPARED = 2**20
_LEAST_DRIFT_ELAPSED_NS = 3600 * _SECOND_NS


class Span(NamedTuple):
    """Samples first (included) to last (excluded) of a delivery's piece."""

    delivery_id: str
    piece: int
    first: int
    last: int


class Segment(NamedTuple):
    """A gap-free stretch of the recording: its start and where its samples lie."""

    start_ns: int
    spans: tuple[Span, ...]

    @property
    def n_samples(self) -> int:
        """Samples of all spans."""
        return sum(span.last - span.first for span in self.spans)


class Arrangement(NamedTuple):
    """A whole recording; `fs_hz` is the rate against the stamps where they show a drift, else the nominal rate."""

    segments: tuple[Segment, ...]
    fs_hz: float
    findings: dict[str, tuple[Finding, ...]]  # by delivery


def arrange(parts: Sequence[DeliveredPart], zone: str) -> Arrangement:
    """Join the parts of one wearing, given in the order of their arrival.

    Raises Misfit for the later of two parts that contradict each other.
    """
    first = parts[0]
    for part in parts[1:]:
        if (part.rate, part.likeness) != (first.rate, first.likeness):
            raise Misfit(
                [part.delivery_id],
                Refused(
                    "does_not_fit_recording",
                    f"rate {float(part.rate):g} Hz, lead or scale differ from the other parts of the same wear "
                    f"({float(first.rate):g} Hz); expected equal ones. Export all parts of a wear with one setting.",
                ),
            )
    starts_ns, findings = placed(parts, zone)
    segments = _segments(parts, starts_ns, findings)
    fs_hz = _rate_by_stamps(segments, first, findings)
    return Arrangement(
        tuple(Segment(segment.start_ns, tuple(segment.spans)) for segment in segments),
        fs_hz,
        {delivery_id: tuple(found) for delivery_id, found in findings.items()},
    )


@dataclass
class _Growing:
    """A segment while pieces are added to it."""

    start_ns: int
    rate: Fraction
    spans: list[Span] = field(default_factory=list)
    parts: list[DeliveredPart] = field(default_factory=list)  # one per span
    stamps: list[tuple[int, int]] = field(default_factory=list)  # (sample, instant in ns) by the device clock
    end_ns: int = 0  # by the stamp of the last span
    tolerance_ns: int = 0
    n_samples: int = 0

    def add(self, part: DeliveredPart, piece: int, start_ns: int, first: int) -> None:
        """Append samples `first` onward of a piece that begins at `start_ns`."""
        n_samples = part.pieces[piece].n_samples
        length_ns = rate_ns(n_samples, self.rate)
        self.stamps.append((self.n_samples - first, start_ns))
        self.spans.append(Span(part.delivery_id, piece, first, n_samples))
        self.parts.append(part)
        self.n_samples += n_samples - first
        self.end_ns = start_ns + length_ns
        self.tolerance_ns = tolerance_ns(length_ns)
        if part.end_offset_ns is not None and piece == len(part.pieces) - 1:
            self.stamps.append((self.n_samples, start_ns - part.pieces[piece].offset_ns + part.end_offset_ns))

    def read(self, a: int, b: int) -> NDArray[np.int16]:
        """Samples a (included) to b (excluded) of what is joined so far."""
        pieces, at = [np.empty(0, np.int16)], 0
        for span, part in zip(self.spans, self.parts, strict=True):
            size = span.last - span.first
            if a < at + size and at < b:
                pieces.append(part.read(span.piece, span.first + max(a - at, 0), span.first + min(b - at, size)))
            at += size
        return np.concatenate(pieces)

    def part_at(self, sample: int) -> DeliveredPart:
        """The part that holds a sample."""
        at = 0
        for span, part in zip(self.spans, self.parts, strict=True):
            at += span.last - span.first
            if sample < at:
                return part
        return self.parts[-1]


def _segments(
    parts: Sequence[DeliveredPart], starts_ns: dict[str, int], findings: dict[str, list[Finding]]
) -> list[_Growing]:
    order = {part.delivery_id: number for number, part in enumerate(parts)}
    stretches = sorted(
        (starts_ns[part.delivery_id] + piece.offset_ns, order[part.delivery_id], number, part)
        for part in parts
        for number, piece in enumerate(part.pieces)
    )
    segments: list[_Growing] = []
    for start_ns, _, piece, part in stretches:
        current = segments[-1] if segments else None
        gap_ns = start_ns - current.end_ns if current else 0
        is_own_gap = current is not None and current.parts[-1] is part
        if current is None or gap_ns > (0 if is_own_gap else current.tolerance_ns):
            current = _Growing(start_ns, part.rate)
            segments.append(current)
            current.add(part, piece, start_ns, 0)
        else:
            _follow_on(current, part, piece, start_ns, order, findings)
    return segments


def _follow_on(
    segment: _Growing,
    part: DeliveredPart,
    piece: int,
    start_ns: int,
    order: dict[str, int],
    findings: dict[str, list[Finding]],
) -> None:
    """Add what a piece has beyond the segment's end.

    Samples that both hold are taken once. Where the stamps say overlap and the samples differ, the later part is
    refused; within the seam tolerance the stamps alone say nothing.
    """
    back = round((segment.end_ns - start_ns) * part.rate / _SECOND_NS)  # samples by which the piece begins early
    is_stamped = segment.end_ns - start_ns > segment.tolerance_ns
    held = _equal_overlap(segment, part, piece, back, may_be_flat=is_stamped)
    if held is None and not is_stamped:
        segment.add(part, piece, start_ns, 0)
        return
    if held is None:
        other = segment.part_at(max(segment.n_samples - back, 0))
        later = max(part, other, key=lambda each: order[each.delivery_id])
        raise Misfit(
            [later.delivery_id],
            Refused(
                "overlap_with_other_samples",
                f"{-(start_ns - segment.end_ns) / 1e9:.1f} s of it overlap with another part of the same wear and hold "
                "other samples; expected equal ones. Check device serial and start of both files.",
            ),
        )
    findings.setdefault(part.delivery_id, []).append(finding("overlap_trimmed", f"{held} samples"))
    if held < part.pieces[piece].n_samples:
        segment.add(part, piece, start_ns, held)


def _equal_overlap(segment: _Growing, part: DeliveredPart, piece: int, back: int, *, may_be_flat: bool) -> int | None:
    """How many first samples of a piece the segment holds already, or None when they differ.

    The stamps may be off by the seam time, so the place is searched around the stamped one, nearest first.
    """
    n_piece = part.pieces[piece].n_samples
    slack = round(SEAM_NS * part.rate / _SECOND_NS)
    low = max(segment.n_samples - back - slack, 0)
    high = min(segment.n_samples - back + slack, segment.n_samples - 1)
    needle = part.read(piece, 0, min(_NEEDLE, n_piece, segment.n_samples - low))
    around = segment.read(low, min(high + needle.size, segment.n_samples))
    least = min(max(_LEAST_HELD, round(part.rate * _LEAST_HELD_S)), n_piece)
    places = range(low, high + 1)
    for place in sorted(places, key=lambda at: abs(at - (segment.n_samples - back))):
        common = around[place - low : place - low + needle.size]
        held = min(segment.n_samples - place, n_piece)
        is_equal = held >= least and np.array_equal(common, needle[: common.size])
        if is_equal and (may_be_flat or np.ptp(common) > 0) and _same(segment, place, part, piece, held):
            return held
    return None


def _same(segment: _Growing, place: int, part: DeliveredPart, piece: int, held: int) -> bool:
    return all(
        np.array_equal(segment.read(place + a, place + b), part.read(piece, a, b))
        for a, b in ((a, min(a + _COMPARED, held)) for a in range(0, held, _COMPARED))
    )


# Sample clock against stamps


def _rate_by_stamps(segments: list[_Growing], first: DeliveredPart, findings: dict[str, list[Finding]]) -> float:
    """The nominal rate, or the rate that the longest segment's stamps give when they run apart beyond rounding."""
    longest = max(segments, key=lambda segment: segment.stamps[-1][1] - segment.stamps[0][1])
    (sample_a, ns_a), (sample_b, ns_b) = longest.stamps[0], longest.stamps[-1]
    elapsed_ns = ns_b - ns_a
    drift_ns = elapsed_ns - rate_ns(sample_b - sample_a, first.rate)
    rounding_ns = 2_000_000 * max(part.resolution_ms for part in longest.parts)
    if elapsed_ns < _LEAST_DRIFT_ELAPSED_NS or abs(drift_ns) <= rounding_ns:
        return float(first.rate)
    ppm = drift_ns / elapsed_ns * 1e6
    findings.setdefault(first.delivery_id, []).append(
        finding("clock_drift", f"{drift_ns / 1e9:.3f} s in {elapsed_ns / 3.6e12:.1f} h, {ppm:.0f} ppm")
    )
    return (sample_b - sample_a) / (elapsed_ns / 1e9)
