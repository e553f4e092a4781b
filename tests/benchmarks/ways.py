"""Ways in which the labelled records could have come: other devices, filters, leads, rates, halves of the wear.

No way changes what an expert would say. What moves between them is chance, and tells better than the records
themselves how the detector does on recordings that nobody saw.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.signal import butter, resample_poly, sosfilt, sosfiltfilt

from detectors.annotations import Annotations
from flows.scoring.score_record import Labelled, open_labelled

MV_PER_COUNT = 0.0025
Millivolts = NDArray[np.float64]


def open_in(way: str, header: Path) -> Labelled:
    """A record and its labels in one of the WAYS, or in one of the HARD_WAYS."""
    return (WAYS | HARD_WAYS)[way](header)


def _first(header: Path) -> Labelled:
    return open_labelled(header, 0)


def _second(header: Path) -> Labelled:
    return open_labelled(header, 1)


def _millivolts(record: Labelled) -> Millivolts:
    signal = record.signal
    return (signal.read(0, signal.n_samples) - signal.count_at_zero_mv) * signal.mv_per_count


def _holding(record: Labelled, mv: Millivolts, mv_per_count: float = MV_PER_COUNT) -> Labelled:
    """The record with another signal of the same rate."""
    counts = np.rint(mv / mv_per_count).astype(np.int16)
    (stretch,) = record.signal.stretches
    return record._replace(
        signal=replace(
            record.signal,
            read=lambda a, b: counts[a:b],
            stretches=(stretch._replace(n_samples=counts.size),),
            mv_per_count=mv_per_count,
            count_at_zero_mv=0.0,
            rails=(-32768, 32767),
        )
    )


def _changed(change: Callable[[Millivolts, float], Millivolts], header: Path, step: float = MV_PER_COUNT) -> Labelled:
    record = _first(header)
    return _holding(record, change(_millivolts(record), float(record.signal.rate)), step)


def _at_rate(rate: int, header: Path) -> Labelled:
    record = _first(header)
    ratio = Fraction(rate) / record.signal.rate
    other = _holding(record, resample_poly(_millivolts(record), ratio.numerator, ratio.denominator))
    moved = np.rint(record.labels.sample * float(ratio)).astype(np.int64)
    return other._replace(signal=replace(other.signal, rate=Fraction(rate)), labels=other.labels._replace(sample=moved))


def _at_speed(per_cent: int, header: Path) -> Labelled:
    """Played faster or slower: another heart rate and width."""
    record = _holding(_first(header), _millivolts(_first(header)))
    return record._replace(signal=replace(record.signal, rate=record.signal.rate * Fraction(per_cent, 100)))


def _part(begin_s: float, end_s: float, header: Path) -> Labelled:
    record = _first(header)
    begin, end = (round(at * float(record.signal.rate)) for at in (begin_s, end_s))
    inside = (record.labels.sample >= begin) & (record.labels.sample < end)
    labels = Annotations(*(column[inside] for column in record.labels))
    return _holding(record, _millivolts(record)[begin:end])._replace(
        labels=labels._replace(sample=labels.sample - begin)
    )


def _turned(degrees: int, header: Path) -> Labelled:
    """A lead between the two of the record: electrodes a little elsewhere."""
    record = _first(header)
    one, other = _millivolts(record), _millivolts(_second(header))
    other *= min(float(one.std() / other.std()), 2.0)
    angle = np.radians(degrees)
    return _holding(record, np.cos(angle) * one + np.sin(angle) * other)


def _noise(size_mv: float, mv: Millivolts, fs_hz: float) -> Millivolts:
    return mv + size_mv * np.random.default_rng(1).standard_normal(mv.size)


def _tone(size_mv: float, tone_hz: float, mv: Millivolts, fs_hz: float) -> Millivolts:
    return mv + size_mv * np.sin(2 * np.pi * tone_hz * np.arange(mv.size) / fs_hz)


def _times(factor: float, mv: Millivolts, fs_hz: float) -> Millivolts:
    return factor * mv


def _in_8_bits(mv: Millivolts, fs_hz: float) -> Millivolts:
    return np.clip(mv, -5, 4.96)


def _below(edge_hz: float, mv: Millivolts, fs_hz: float) -> Millivolts:
    return sosfiltfilt(butter(2, edge_hz, fs=fs_hz, output="sos"), mv)


def _above(edge_hz: float, mv: Millivolts, fs_hz: float) -> Millivolts:
    return sosfilt(butter(1, edge_hz, "high", fs=fs_hz, output="sos"), mv - mv[0])


Opening = Callable[[Path], Labelled]
TURNED = {f"lead turned {degrees:+d}": partial(_turned, degrees) for degrees in (-30, -20, -10, 10, 20, 30)}
RATES = (125, 128, 200, 250, 256, 500)
WAYS: dict[str, Opening] = {
    "as they are": _first,
    **{f"{rate} Hz": partial(_at_rate, rate) for rate in RATES},
    "8 bits of 10 mV": partial(_changed, _in_8_bits, step=10 / 256),
    "white noise 0.02 mV": partial(_changed, partial(_noise, 0.02)),
    "white noise 0.04 mV": partial(_changed, partial(_noise, 0.04)),
    "wander 0.3 mV": partial(_changed, partial(_tone, 0.3, 0.3)),
    "above 0.5 Hz": partial(_changed, partial(_above, 0.5)),
    "above 1 Hz": partial(_changed, partial(_above, 1.0)),
    "below 35 Hz": partial(_changed, partial(_below, 35)),
    "below 25 Hz": partial(_changed, partial(_below, 25)),
    "5 % slower": partial(_at_speed, 95),
    "5 % faster": partial(_at_speed, 105),
    "first half": partial(_part, 0, 905),
    "last 20 min": partial(_part, 605, 1806),
    "middle 25 min": partial(_part, 152, 1653),
    **TURNED,
}
HARD_WAYS: dict[str, Opening] = {
    "inverted": partial(_changed, partial(_times, -1.0)),
    "x 0.2": partial(_changed, partial(_times, 0.2), step=MV_PER_COUNT / 5),
    "x 5": partial(_changed, partial(_times, 5.0)),
    "white noise 0.1 mV": partial(_changed, partial(_noise, 0.1)),
    "mains 50 Hz 0.2 mV": partial(_changed, partial(_tone, 0.2, 50.0)),
    "lead turned -45": partial(_turned, -45),
    "lead turned +45": partial(_turned, 45),
    "second signal": _second,
}
