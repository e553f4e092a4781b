"""EC57 figures of labelled records as they are and as other devices would have stored them.

Run from the checkout: python -m tests.benchmarks.robustness ../shared/reference-ecg/mitdb
Other sampling rates, 8 bits, inverted, smaller, larger, with white noise, and the records' second signal.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.signal import resample_poly

from detectors.scoring import gross
from flows.readers.recording import Opened
from flows.scoring.score_record import Labelled, open_labelled, score_record
from flows.scoring.score_report import FIGURES, Options

MV_PER_COUNT = 0.0025
Changed = Callable[[NDArray[np.float64], float], NDArray[np.float64]]


def main(folder: Path) -> None:
    """Print a line per way of storing: gross figures over all time, V figures in analysable time, analysable share."""
    records = [open_labelled(header, 0) for header in sorted(folder.glob("*.hea"))]
    print(f"{'':22}", *(f"{name:>9}" for name in FIGURES), "  V, analysable time  analysable")
    _print("as they are", records)
    for rate in (125, 128, 200, 250, 256, 500):
        _print(f"{rate} Hz", [_at_rate(record, rate) for record in records])
    ways: dict[str, tuple[Changed, float]] = {
        "8 bits of 10 mV": (lambda mv, fs_hz: np.clip(mv, -5, 4.96), 10 / 256),
        "inverted": (lambda mv, fs_hz: -mv, MV_PER_COUNT),
        "x 0.2": (lambda mv, fs_hz: 0.2 * mv, MV_PER_COUNT / 5),
        "x 5": (lambda mv, fs_hz: 5 * mv, MV_PER_COUNT),
        "white noise 0.1 mV": (_with_white_noise, MV_PER_COUNT),
        "mains 50 Hz 0.2 mV": (_with_mains, MV_PER_COUNT),
    }
    for name, (changed, mv_per_count) in ways.items():
        _print(name, [_stored(record, changed, mv_per_count) for record in records])
    _print("second signal", [open_labelled(header, 1) for header in sorted(folder.glob("*.hea"))])


def _print(name: str, records: list[Labelled]) -> None:
    options = Options("S", 300.0, 0, "")
    scores = [score_record(record, options) for record in records]
    all_time = gross([score.beats.matrix for score in scores])
    analysable = gross([score.beats_analysable.matrix for score in scores])
    share = np.mean([score.analysable_share_pct for score in scores])
    figures = " ".join(f"{all_time[figure]:9.2f}" for figure in FIGURES)
    print(f"{name:22} {figures} {analysable['veb_se']:10.2f} {analysable['veb_ppv']:9.2f} {share:11.2f}", flush=True)


def _with_white_noise(mv: NDArray[np.float64], fs_hz: float) -> NDArray[np.float64]:
    return mv + 0.1 * np.random.default_rng(1).standard_normal(len(mv))


def _with_mains(mv: NDArray[np.float64], fs_hz: float) -> NDArray[np.float64]:
    return mv + 0.2 * np.sin(2 * np.pi * 50 * np.arange(len(mv)) / fs_hz)


def _millivolts(record: Labelled) -> NDArray[np.float64]:
    signal = record.signal
    return (signal.read(0, signal.n_samples) - signal.count_at_zero_mv) * signal.mv_per_count


def _stored(record: Labelled, changed: Changed, mv_per_count: float) -> Labelled:
    counts = np.rint(changed(_millivolts(record), float(record.signal.rate)) / mv_per_count).astype(np.int16)
    return record._replace(signal=_with_counts(record, counts, mv_per_count))


def _with_counts(record: Labelled, counts: NDArray[np.int16], mv_per_count: float) -> Opened:
    return replace(
        record.signal,
        read=lambda a, b: counts[a:b],
        mv_per_count=mv_per_count,
        count_at_zero_mv=0.0,
        rails=(-32768, 32767),
    )


def _at_rate(record: Labelled, rate: int) -> Labelled:
    """The record as a device of another rate would have stored it, its labels moved along."""
    ratio = Fraction(rate) / record.signal.rate
    mv = resample_poly(_millivolts(record), ratio.numerator, ratio.denominator)
    counts = np.rint(mv / MV_PER_COUNT).astype(np.int16)
    (stretch,) = record.signal.stretches
    signal = replace(
        _with_counts(record, counts, MV_PER_COUNT),
        rate=Fraction(rate),
        stretches=(stretch._replace(n_samples=len(counts)),),
    )
    moved = np.rint(record.labels.sample * float(ratio)).astype(np.int64)
    return record._replace(signal=signal, labels=record.labels._replace(sample=moved))


if __name__ == "__main__":
    main(Path(sys.argv[1]))
