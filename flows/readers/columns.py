"""An ECG that comes as columns of numbers: which column, which unit, and its times cut into stretches.

Text and Parquet files share this. What neither header nor site settings say is refused, not guessed.
"""

from __future__ import annotations

import re
import tempfile
import weakref
from collections.abc import Iterable, Sequence
from datetime import datetime, timedelta
from fractions import Fraction
from typing import Any, NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from flows.readers.channels import choose, mv_per_unit
from flows.readers.codes import Refused
from flows.readers.recording import Finding, Opened, Site, Stretch, checked_rate, checked_scale, rate_ns
from flows.readers.wide import Wide, fitted

VALUE, TIME = "value", "time_ns"
_TIME_NAME = re.compile(r"(date ?time|time ?stamp|time|utc|zeit|t)([\W_].*)?", re.IGNORECASE)
_UNIT_IN_NAME = re.compile(r"[\[(_ ](V|mV|uV|µV|μV|nV)[\])]?$", re.IGNORECASE)
_SECONDS_IN_NAME = re.compile(r"[\[(_ ](s|ms|us|ns)[\])]?$", re.IGNORECASE)
_NS_PER = {"s": 10**9, "ms": 10**6, "us": 10**3, "ns": 1, "seconds": 10**9, "milliseconds": 10**6}
_MV_PER_STORED = 0.001  # values in volts are kept in steps of 1 µV, below the noise of a skin electrode
_FEWEST_STEPS = 100
_ANY_RAIL = 2**40
_EPOCH = datetime.fromisoformat("1970-01-01")  # naive, as the wall clock


class Layout(NamedTuple):
    """Which columns hold what."""

    value: int
    time: int | None
    label: str
    mv_per_value: float
    ns_per_time: int | None  # for elapsed times that are numbers
    others: tuple[str, ...]
    findings: tuple[Finding, ...]


def layout_of(names: Sequence[str], are_names: bool, site: Site) -> Layout:
    """Find value and time column by the site's settings or by their names; raises Refused."""
    time = _column(names, are_names, site.time_column, "time_column")
    if time is None and are_names:
        time = next((n for n, name in enumerate(names) if _TIME_NAME.fullmatch(name.strip())), None)
    value, findings = _value_column(names, are_names, time, site)
    label = names[value].strip() if are_names else f"column {value + 1}"
    return Layout(
        value,
        time,
        label,
        _mv_per_value(label, site),
        _ns_per_time(names[time] if time is not None and are_names else "", site),
        tuple(name for n, name in enumerate(names) if n not in (value, time)) if are_names else (),
        findings,
    )


def unclear(what: str, setting: str) -> Refused:
    """The refusal for a layout that cannot be told."""
    return Refused("text_layout_unclear", f"columns: {what}. Say it as {setting} in section [site] of programme.toml.")


def _column(names: Sequence[str], are_names: bool, wanted: str, setting: str) -> int | None:
    if not wanted:
        return None
    if wanted.isdigit() and 1 <= int(wanted) <= len(names):
        return int(wanted) - 1
    found = [n for n, name in enumerate(names) if are_names and name.strip().casefold() == wanted.casefold()]
    if len(found) != 1:
        raise unclear(f"{len(found)} of {len(names)} columns are the one that is set; expected one", setting)
    return found[0]


def _value_column(
    names: Sequence[str], are_names: bool, time: int | None, site: Site
) -> tuple[int, tuple[Finding, ...]]:
    wanted = _column(names, are_names, site.ecg_column, "ecg_column")
    if wanted is not None:
        return wanted, ()
    left = [n for n in range(len(names)) if n != time]
    if len(left) == 1:
        return left[0], ()
    if not are_names:
        raise unclear(f"{len(left)} columns without names could be the ECG; expected one", "ecg_column")
    bare = [_UNIT_IN_NAME.sub("", names[n].strip()) for n in left]
    chosen, findings = choose(bare, ["" for _ in left], site.ecg_channel, "columns")
    return left[chosen], findings


def _mv_per_value(label: str, site: Site) -> float:
    if site.unit == "counts" or (not site.unit and site.mv_per_count):
        if not site.mv_per_count:
            raise unclear("the ECG is in counts without a scale; expected millivolts per count", "mv_per_count")
        return site.mv_per_count
    in_name = _UNIT_IN_NAME.search(label)
    factor = mv_per_unit(site.unit or (in_name[1] if in_name else ""))
    if factor is None:
        raise unclear("the unit of the ECG is not told; expected V, mV, uV, nV or counts", "unit")
    return factor


def _ns_per_time(name: str, site: Site) -> int | None:
    if site.time_format in _NS_PER:
        return _NS_PER[site.time_format]
    in_name = _SECONDS_IN_NAME.search(name.strip())
    return _NS_PER[in_name[1].casefold()] if in_name and not site.time_format else None


def opened_from(
    batches: Iterable[pl.DataFrame],
    layout: Layout,
    site: Site,
    *,
    format_name: str,
    zone: str | None,
    findings: tuple[Finding, ...] = (),
) -> Opened:
    """Opened lead from batches with `value` (Float64, NULL missing) and, where there are times, `time_ns` (Int64).

    Values go through a temporary file of float32, so memory does not grow with the file. Raises Refused.
    """
    spool = Spool()
    times = _Times(site)
    for batch in batches:
        with np.errstate(over="ignore"):  # what does not fit becomes infinite, which is missing
            values = batch[VALUE].to_numpy().astype(np.float32)
        if layout.time is not None:
            times.add(batch[TIME].to_numpy(), spool.n_samples)
        spool.add(values)
    if not spool.n_samples:
        raise Refused("no_samples", "data: no rows follow the header; expected samples. Export the recording again.")
    rate, stretches = times.result(spool.n_samples) if layout.time is not None else _untimed(spool.n_samples, site)
    is_volts = not (site.unit == "counts" or (not site.unit and site.mv_per_count))
    step_mv = _MV_PER_STORED if is_volts else layout.mv_per_value
    spool.factor = layout.mv_per_value / step_mv
    checked_scale(step_mv, 65_535, "columns")
    lead, wide_findings = fitted(Wide(spool.read, stretches, step_mv, 0.0, (-_ANY_RAIL, _ANY_RAIL), None))
    first_ns = times.first_ns if layout.time is not None and layout.ns_per_time is None else None
    return Opened(
        format=format_name,
        device_words=(),
        patient_words=(),
        start_local=_EPOCH + timedelta(microseconds=first_ns // 1000) if first_ns is not None else None,
        start_resolution_ms=1,
        zone=zone if first_ns is not None else None,
        rate=rate,
        lead=layout.label,
        mv_per_count=lead.mv_per_count,
        count_at_zero_mv=lead.count_at_zero_mv,
        rails=lead.rails,
        missing_count=lead.missing_count,
        stretches=stretches,
        read=lead.read,
        findings=(*layout.findings, *findings, *wide_findings),
        end_offset_ns=times.end_offset_ns(rate) if layout.time is not None else None,
        other_channels=layout.others,
    )


def _untimed(n_samples: int, site: Site) -> tuple[Fraction, tuple[Stretch, ...]]:
    if not site.fs_hz:
        raise unclear("there is no time column and no sampling rate; expected one of them", "fs_hz")
    rate = checked_rate(Fraction(site.fs_hz).limit_denominator(10_000), "columns")
    return rate, (Stretch(0, n_samples, 0),)


class Spool:
    """Values on their way through a temporary file, which goes when nothing reads from it any more."""

    def __init__(self) -> None:
        self._file = tempfile.TemporaryFile()  # noqa: SIM115  closed by the finalizer
        self._closing = weakref.finalize(self, self._file.close)
        self.n_samples, self.factor = 0, 1.0

    def add(self, values: NDArray[np.float32]) -> None:
        """Append values."""
        self._file.write(values.data)
        self.n_samples += values.size

    def read(self, a: int, b: int) -> NDArray[Any]:
        """Values a (included) to b (excluded), in stored steps."""
        values = np.empty(b - a, np.float32)
        self._file.seek(4 * a)
        self._file.readinto(values.data.cast("B"))
        return values.astype(np.float64) * self.factor


class _Times:
    """Times of samples as they pass: the rate, and where a stretch ends."""

    def __init__(self, site: Site) -> None:
        self._site = site
        self._step_ns = 0.0
        self._slack_ns = 0.0
        self._last_ns: int | None = None
        self._starts: list[tuple[int, int]] = []  # (sample, instant)
        self._ends: list[int] = []
        self.first_ns = 0

    def add(self, time_ns: NDArray[np.int64], n_before: int) -> None:
        """Look at the times of the next samples; raises Refused where they cannot be those of samples."""
        if not time_ns.size:
            return
        if self._last_ns is None:
            self._begin(time_ns)
        else:
            time_ns = np.concatenate([[self._last_ns], time_ns])
            n_before -= 1
        steps = np.diff(time_ns)
        if (steps < -self._slack_ns).any():
            at = n_before + int(np.argmax(steps < -self._slack_ns)) + 2
            raise Refused("time_runs_backwards", f"columns: the time of row {at} lies before the row above.")
        for cut in np.flatnonzero(steps > self._step_ns + self._slack_ns):
            self._ends.append(int(time_ns[cut]))
            self._starts.append((n_before + int(cut) + 1, int(time_ns[cut + 1])))
        self._last_ns = int(time_ns[-1])

    def _begin(self, time_ns: NDArray[np.int64]) -> None:
        steps = np.diff(time_ns)
        later = steps[steps > 0]
        if self._site.fs_hz:
            self._step_ns = 1e9 / self._site.fs_hz
        elif later.size >= _FEWEST_STEPS // 2 and later.size * 2 >= steps.size:
            # The mean over ordinary steps: single stamps may be rounded, gaps are not ordinary.
            ordinary = later[later <= 3 * np.median(later)]
            self._step_ns = float(ordinary.mean())
        else:
            raise unclear("rows are too few or their times too coarse to tell the sampling rate", "fs_hz")
        coarseness_ns = float(later.min()) if later.size and later.size < steps.size else 0.0
        self._slack_ns = max(self._step_ns / 2 + _rounding_ns(time_ns), coarseness_ns)
        self.first_ns = int(time_ns[0])
        self._starts.append((0, self.first_ns))

    def result(self, n_samples: int) -> tuple[Fraction, tuple[Stretch, ...]]:
        """Rate and stretches of all samples."""
        firsts = [first for first, _ in self._starts] + [n_samples]
        stretches = tuple(
            Stretch(first, after - first, instant - self.first_ns)
            for (first, instant), after in zip(self._starts, firsts[1:], strict=True)
        )
        if self._site.fs_hz:
            rate = Fraction(self._site.fs_hz).limit_denominator(10_000)
        else:
            ends = [*self._ends, self._last_ns or 0]
            steps = sum(stretch.n_samples - 1 for stretch in stretches)
            spans = sum(end - instant for end, (_, instant) in zip(ends, self._starts, strict=True))
            rate = _nice(Fraction(steps * 10**9, max(spans, 1)))
        return checked_rate(rate, "columns"), stretches

    def end_offset_ns(self, rate: Fraction) -> int:
        """End of the last sample by the times."""
        return (self._last_ns or 0) - self.first_ns + rate_ns(1, rate)


def _rounding_ns(time_ns: NDArray[np.int64]) -> float:
    """The last digit of the times: the largest power of ten that divides them all."""
    for digits in range(9, -1, -1):
        if not (time_ns % 10**digits).any():
            return float(10**digits)
    return 1.0


def _nice(rate: Fraction) -> Fraction:
    """The nominal rate: a whole number within 0.1 %, as sample clocks are; the rest is drift."""
    whole = round(rate)
    return Fraction(whole) if abs(rate - whole) <= rate / 1000 else rate.limit_denominator(1000)
