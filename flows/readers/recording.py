"""What every reader returns: one lead of one delivery, described in exact numbers, samples read when asked.

Nothing of the person is kept but the words among which the register may find its own code.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from flows.readers.codes import FINDINGS, Refused

LOWEST_FS_HZ, HIGHEST_FS_HZ = 50, 10_000  # an ECG of use for beats; no device of the trade lies outside
COARSEST_MV_PER_COUNT = 0.05  # a QRS of 1 mV would have 20 steps
SMALLEST_RANGE_MV = 1.0
_DECIMAL = re.compile(r"[+-]?(\d{1,18}\.?\d{0,18}|\.\d{1,18})([eE][+-]?\d{1,2})?", re.ASCII)


class Site(NamedTuple):
    """What a site knows about its files that the files do not say; empty or 0 means nothing."""

    clock_zone: str = ""
    ecg_channel: str = ""
    mv_per_count: float = 0.0
    fs_hz: float = 0.0
    ecg_column: str = ""
    time_column: str = ""
    time_format: str = ""
    separator: str = ""
    decimal: str = ""
    unit: str = ""


NO_SITE = Site()


class Stretch(NamedTuple):
    """A gap-free stretch: first sample within the file's lead, length, and offset from the recording start in ns."""

    first_sample: int
    n_samples: int
    offset_ns: int


class Finding(NamedTuple):
    """An oddity of an accepted file: a code of FINDINGS and what was found."""

    code: str
    detail: str


class Mark(NamedTuple):
    """A patient button or diary text, at an offset from the recording start in ns."""

    offset_ns: int
    duration_s: float | None
    text: str


@dataclass(frozen=True)
class Opened:
    """One lead of one delivery.

    `read(a, b)` returns samples a (included) to b (excluded) of the lead as int16 counts, counted over all stretches
    without their gaps. A count c stands for (c - count_at_zero_mv) * mv_per_count millivolts.
    """

    format: str
    device_words: tuple[str, ...]  # where the device serial may stand, most likely first
    patient_words: tuple[str, ...]  # where the patient code may stand; compared with the register, never stored
    start_local: datetime | None  # naive: wall clock of the device
    start_resolution_ms: int
    zone: str | None  # zone of start_local when the file says it
    rate: Fraction  # samples per second
    lead: str
    mv_per_count: float
    count_at_zero_mv: float
    rails: tuple[int, int]
    missing_count: int | None
    stretches: tuple[Stretch, ...]
    read: Callable[[int, int], NDArray[np.int16]]
    findings: tuple[Finding, ...] = ()
    marks: tuple[Mark, ...] = ()
    end_offset_ns: int | None = None  # device clock at the end, from the start; None when the file has no end stamp
    other_channels: tuple[str, ...] = ()
    file_stem: str = ""  # name of the opened file without suffix, which may stand inside an archive

    @property
    def n_samples(self) -> int:
        """Samples of all stretches."""
        return sum(stretch.n_samples for stretch in self.stretches)


def finding(code: str, detail: str = "") -> Finding:
    """A finding whose code is in the one list."""
    if code not in FINDINGS:
        raise KeyError(f"finding {code} is not in flows/readers/codes.py")
    return Finding(code, detail)


def decimal_of(text: str) -> Fraction:
    """Exact value of a decimal number; ValueError for anything else and for numbers no header needs."""
    if not _DECIMAL.fullmatch(text.strip()):
        raise ValueError("not a decimal number of ordinary size")
    return Fraction(text.strip())


def checked_rate(rate: Fraction, where: str) -> Fraction:
    """The rate when an ECG can have it; refuses otherwise."""
    if not LOWEST_FS_HZ <= rate <= HIGHEST_FS_HZ:
        raise Refused(
            "sampling_rate_out_of_range",
            f"{where}: the sampling rate is {float(rate):g} Hz; expected {LOWEST_FS_HZ} to {HIGHEST_FS_HZ} Hz. "
            "Export the ECG channel at its own rate.",
        )
    return rate


def checked_scale(mv_per_count: float, counts: float, where: str) -> float:
    """The scale when an ECG can have it (`counts` is the width of the digital range); refuses otherwise."""
    size = abs(mv_per_count)
    if not np.isfinite(size) or size > COARSEST_MV_PER_COUNT or size * counts < SMALLEST_RANGE_MV:
        raise Refused(
            "amplitude_not_plausible",
            f"{where}: one count is {mv_per_count:g} mV over {counts:g} counts; expected steps of at most "
            f"{COARSEST_MV_PER_COUNT} mV and a range of at least {SMALLEST_RANGE_MV} mV. Check the unit, or set "
            "mv_per_count in section [site] of programme.toml.",
        )
    return mv_per_count


def rate_ns(samples: int, rate: Fraction) -> int:
    """Nanoseconds that `samples` last, rounded to the nearest."""
    return round(samples * 1_000_000_000 / rate)
