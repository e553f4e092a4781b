"""Speed of the whole analysis against a compiled QRS-only detector on the same signal, one thread, one process.

Run from the checkout: OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 python -m tests.benchmarks.detect_speed [HOURS]
Prints CPU milliseconds per hour of 250 Hz signal of both, in turn, and the ratio; only the ratio is worth comparing.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np
import sleepecg
from numpy.typing import NDArray

from detectors import synthetic, synthetic_beats
from detectors.analyse import analyse_recording
from detectors.results import Segment

FS_HZ = 250
ROUNDS = 5
PATTERN = [("N", 0.8)] * 11 + [("V", 0.5), ("N", 1.1)] + [("N", 0.82)] * 9 + [("S", 0.6), ("N", 0.8)]


def counts_of(hours: int) -> NDArray[np.int16]:
    """Hours of a synthetic rhythm with ectopic beats and noise, as counts of 0.005 mV."""
    beats = synthetic_beats.exact_beats(PATTERN * 190, fs_hz=FS_HZ)  # a little over an hour
    hour = synthetic.draw(beats, n_samples=3600 * FS_HZ, fs_hz=FS_HZ)
    rng = np.random.default_rng(1)
    noise = 0.02 * rng.standard_normal(hour.size) + 0.1 * np.sin(np.arange(hour.size) * (2 * np.pi * 0.3 / FS_HZ))
    return np.tile(np.rint((hour + noise) / 0.005).astype(np.int16), hours)


def ours(counts: NDArray[np.int16]) -> None:
    analyse_recording([Segment(counts.size, lambda a, b: counts[a:b])], fs_hz=FS_HZ, mv_per_count=0.005)


def peer(counts: NDArray[np.int16]) -> None:
    for begin in range(0, counts.size, 3600 * FS_HZ):
        sleepecg.detect_heartbeats(counts[begin : begin + 3600 * FS_HZ].astype(float), FS_HZ)


def cpu_ms_per_hour(work: Callable[[NDArray[np.int16]], None], counts: NDArray[np.int16]) -> float:
    begin = time.process_time()
    work(counts)
    return (time.process_time() - begin) * 1000 / (counts.size / FS_HZ / 3600)


def main() -> None:
    """Print one line per round and the ratio of the best rounds."""
    counts = counts_of(int(sys.argv[1]) if len(sys.argv) > 1 else 8)
    rounds = []
    for number in range(ROUNDS):
        rounds.append((cpu_ms_per_hour(peer, counts), cpu_ms_per_hour(ours, counts)))
        print(f"round {number}: peer {rounds[-1][0]:5.1f}  ours {rounds[-1][1]:5.1f} ms CPU per hour of signal")
    best_peer, best_ours = (min(column) for column in zip(*rounds, strict=True))
    print(f"ratio of the best rounds: {best_ours / best_peer:.2f}")


if __name__ == "__main__":
    main()
