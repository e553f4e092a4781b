"""Record times and marks of EDF+ and BDF+: time-stamped annotation lists, read in columns rather than one by one.

Source: Kemp & Olivan, Clin Neurophysiol 2003;114:1755, section 2.2 (edfplus.info/specs/edfplus.html).
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from flows.readers.codes import Refused
from flows.readers.recording import Finding, Mark, Stretch, finding, rate_ns

_END_OF_ONSET = 0x14
_LONGEST_ONSET = 24  # sign, 10 digits of seconds, point, 9 of nanoseconds and the closing byte fit
_LONGEST_TEXT = 200
_MOST_MARKS = 100_000
_ANNOTATION = re.compile(rb"([+-]\d{1,10}(?:\.\d{1,12})?)(?:\x15(\d{1,10}(?:\.\d{1,12})?))?\x14([^\x00]*)\x14\x00")


@dataclass(frozen=True)
class RecordTimes:
    """When the records lie: runs of records without a gap, as (first record, number of records, offset in ns)."""

    first_ns: int  # onset of the first record after the header's whole second
    runs: tuple[tuple[int, int, int], ...]
    end_ns: int | None  # onset of the last record plus its length by the sample clock; None without stamps
    findings: tuple[Finding, ...] = ()
    marks: tuple[Mark, ...] = ()

    @classmethod
    def continuous(cls, n_records: int, record_s: Fraction) -> RecordTimes:
        """Records that follow each other, as a file without time stamps says."""
        return cls(0, ((0, n_records, 0),), None)

    def stretches_of(self, samples_per_record: int) -> tuple[Stretch, ...]:
        """The runs in samples of a channel."""
        return tuple(
            Stretch(first * samples_per_record, count * samples_per_record, offset)
            for first, count, offset in self.runs
        )


def read_record_times(
    blocks: Iterable[NDArray[np.uint8]], record_s: Fraction, rate: Fraction, *, declared_gapless: bool
) -> RecordTimes:
    """Times and marks of all records from the bytes of the annotation channel, shape (n_records, width) per block.

    Raises Refused where time runs backwards, or a record of a discontinuous file has no time.
    """
    onsets_ns: list[NDArray[np.int64]] = []
    marks: list[Mark] = []
    decimals = n_bad = 0
    for block in blocks:
        onset_ns, most_decimals, is_timed, has_more = _onsets(block)
        onsets_ns.append(np.where(is_timed, onset_ns, np.iinfo(np.int64).min))
        decimals = max(decimals, most_decimals)
        for row in np.flatnonzero(has_more):
            found, bad = _marks(block[row].tobytes())
            n_bad += bad
            if len(marks) < _MOST_MARKS:
                marks.extend(found)
    onset_ns = np.concatenate(onsets_ns)
    untimed = onset_ns == np.iinfo(np.int64).min
    findings = [finding("bad_annotation", f"{n_bad} annotations")] if n_bad else []
    if untimed.any():
        if not declared_gapless:
            raise Refused(
                "no_time_in_record",
                f"data: record {int(np.argmax(untimed)) + 1} has no time stamp; a discontinuous file (EDF+D) needs one "
                "in every record. Export the file again.",
            )
        findings.append(finding("bad_annotation", f"{int(untimed.sum())} records without time"))
        first_ns = 0 if untimed[0] else int(onset_ns[0])
        return RecordTimes(first_ns, ((0, onset_ns.size, 0),), None, tuple(findings), _from_start(marks, first_ns))
    runs = _runs(onset_ns, record_s, rate, decimals)
    if len(runs) > 1 and declared_gapless:
        findings.append(finding("gap_in_file_declared_continuous", f"{len(runs) - 1} gaps"))
    first_ns = int(onset_ns[0])
    end_ns = int(onset_ns[-1]) - first_ns + rate_ns(1, 1 / record_s)
    return RecordTimes(first_ns, runs, end_ns, tuple(findings), _from_start(marks, first_ns))


def _runs(
    onset_ns: NDArray[np.int64], record_s: Fraction, rate: Fraction, decimals: int
) -> tuple[tuple[int, int, int], ...]:
    """Cut where a record starts later than the one before ends, by over half a sample or the stamps' last digit."""
    record_ns = float(record_s) * 1e9
    slack_ns = 0.5e9 / float(rate)
    if (record_s * 10**decimals).denominator != 1:  # the stamps cannot say the record's length exactly
        slack_ns = max(slack_ns, 10.0 ** (9 - decimals))
    late_ns = np.diff(onset_ns) - record_ns
    if (late_ns < -slack_ns).any():
        at = int(np.argmax(late_ns < -slack_ns))
        raise Refused(
            "time_runs_backwards",
            f"data: record {at + 2} starts {-late_ns[at] / 1e9:.3f} s before record {at + 1} ends; expected rising "
            "times. Export the file again.",
        )
    firsts = np.concatenate([[0], np.flatnonzero(late_ns > slack_ns) + 1, [onset_ns.size]])
    return tuple((int(a), int(b - a), int(onset_ns[a] - onset_ns[0])) for a, b in pairwise(firsts))


def _onsets(block: NDArray[np.uint8]) -> tuple[NDArray[np.int64], int, NDArray[np.bool_], NDArray[np.bool_]]:
    """First onset of each record in ns, most decimals, whether it is a time stamp, and whether more text follows."""
    head = block[:, :_LONGEST_ONSET]
    n_rows, width = head.shape
    if width == 0:
        none = np.zeros(n_rows, np.bool_)
        return np.zeros(n_rows, np.int64), 0, none, none
    end = np.argmax(head == _END_OF_ONSET, axis=1)
    is_timed = (end > 1) & (end + 1 < width) & np.isin(head[:, 0], (0x2B, 0x2D))
    nano = np.zeros(n_rows, np.int64)
    after_point = np.full(n_rows, -1, np.int64)  # digits since the decimal point, -1 before it
    for column in range(1, int(end.max(initial=0))):
        inside = (column < end) & is_timed
        byte = head[:, column]
        is_point = inside & (byte == 0x2E) & (after_point < 0)
        is_digit = inside & (byte >= 0x30) & (byte <= 0x39)
        is_timed &= ~inside | is_point | is_digit
        counted = is_digit & (after_point < 9)
        nano[counted] = nano[counted] * 10 + (byte[counted].astype(np.int64) - 0x30)
        after_point[counted & (after_point >= 0)] += 1
        after_point[is_point] = 0
    decimals = np.maximum(after_point, 0)
    onset_ns = nano * 10 ** (9 - decimals)
    onset_ns[head[:, 0] == 0x2D] *= -1
    # The time stamp alone is `onset, 20, 20, 0`: as many bytes as its end says, the rest zero.
    has_more = np.count_nonzero(block, axis=1) > np.where(is_timed, end + 2, 0)
    return onset_ns, int(decimals[is_timed].max(initial=0)), is_timed, has_more


def _marks(record: bytes) -> tuple[list[Mark], int]:
    """Marks with their text in one record, and the number of lists that could not be read."""
    marks, read_to = [], 0
    for found in _ANNOTATION.finditer(record):
        read_to = found.end()
        for text in found[3].split(b"\x14"):
            if text.strip():
                onset_ns = int(Fraction(found[1].decode()) * 1_000_000_000)
                duration_s = float(found[2]) if found[2] else None
                marks.append(Mark(onset_ns, duration_s, mark_text(text)))
    return marks, int(bool(record[read_to:].strip(b"\0")))


def mark_text(raw: bytes) -> str:
    """Printable text of a mark, at most 200 characters: UTF-8 when it is, else latin-1."""
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError:
        text = raw.decode("latin-1")
    return "".join(sign if sign.isprintable() else " " for sign in text).strip()[:_LONGEST_TEXT]


def _from_start(marks: list[Mark], first_ns: int) -> tuple[Mark, ...]:
    """Marks counted from the first sample instead of the header's whole second."""
    return tuple(mark._replace(offset_ns=mark.offset_ns - first_ns) for mark in marks)
