"""Two hundred small deliveries over sixty simulated nights, late, twice and withdrawn ones among them.

Run from the checkout: python -m tests.benchmarks.soak FOLDER [--nights 60] [--patches 90] [--seed 1]
Every night is one run of the whole job in this process. Printed are, per night, what was new, CPU seconds and memory; then
what a night costs by itself, per new delivery and per delivery that was there before; then whether the tables are those
of one run over everything.
"""

from __future__ import annotations

import argparse
import gc
import json
import os
import shutil
import sys
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import NamedTuple

import numpy as np

from detectors import synthetic
from detectors.synthetic_beats import Rhythm
from flows import nightly
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.programme import make_folder

FIRST_NIGHT = datetime(2025, 2, 2, 3, tzinfo=UTC)
PATIENTS = 18
FS_HZ = 125
PART_H = 0.25
LATE_SHARE = 0.15
TWICE_SHARE = 0.11
WITHDRAWN_PATCHES = 6
WITHDRAWN_NIGHTS = 6  # then the wear is back in the register
OF_RUNS = ("runs_of_flow", "audit", "parts")  # tell of runs, of edits and of the clock


class Arrival(NamedTuple):
    """One delivery: half of a patch's wear, on the night on which it arrives."""

    night: int
    patch: int
    part: int
    name: str


class Night(NamedTuple):
    """What one night brought and cost."""

    new: int
    before: int
    cpu_s: float
    memory_mb: float


def main() -> None:
    """Print a line per night and the summary; exit 1 when the tables differ from those of one run."""
    asked = _arguments()
    folder = asked.folder / "soak"
    shutil.rmtree(folder, ignore_errors=True)
    make_folder(folder, "Soak (invented)", "UTC")
    rng = np.random.default_rng(asked.seed)
    arrivals = _arrivals(asked.patches, asked.nights, rng)
    gone_from = rng.integers(asked.nights // 3, asked.nights - WITHDRAWN_NIGHTS, WITHDRAWN_PATCHES)
    nights = []
    for night in range(asked.nights):
        new = [arrival for arrival in arrivals if arrival.night == night]
        gone = {patch for patch, first in enumerate(gone_from) if first <= night < first + WITHDRAWN_NIGHTS}
        _write_register(folder / "register", asked, gone)
        nights.append(_night(folder, night, new, asked, len(gone), before=sum(each.new for each in nights)))
    _print_summary(nights)
    different = _differences(folder, asked.folder / "at_once")
    print(f"tables that differ from one run over everything: {', '.join(different) or 'none'}")
    sys.exit(1 if different else 0)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--nights", type=int, default=60)
    parser.add_argument("--patches", type=int, default=90)
    parser.add_argument("--seed", type=int, default=1)
    return parser.parse_args()


def _arrivals(patches: int, nights: int, rng: np.random.Generator) -> list[Arrival]:
    """Two parts per patch, most on the night after they were recorded; some arrive once more under another name."""
    arrivals = []
    for patch in range(patches):
        for part in range(2):
            late = int(rng.integers(5, 20)) if rng.random() < LATE_SHARE else 0
            night = min(_first_night(patch, patches, nights) + 1 + part + late, nights - 1)
            arrivals.append(Arrival(night, patch, part, f"{_serial(patch)}-{part}.edf"))
            if rng.random() < TWICE_SHARE:
                again = int(min(night + rng.integers(0, 10), nights - 1))
                arrivals.append(Arrival(again, patch, part, f"{_serial(patch)}-{part}-2.edf"))
    return arrivals


def _first_night(patch: int, patches: int, nights: int) -> int:
    return patch * (nights - 3) // patches


def _start(night: int) -> datetime:
    return (FIRST_NIGHT + timedelta(days=night, hours=6)).replace(tzinfo=None)


def _serial(patch: int) -> str:
    return f"SK{patch:04d}"


def _night(folder: Path, night: int, new: list[Arrival], asked: argparse.Namespace, gone: int, before: int) -> Night:
    for arrival in new:
        _deliver(folder / "inbox", arrival, _first_night(arrival.patch, asked.patches, asked.nights))
    begun = time.process_time()
    outcome = nightly.run(folder)
    done = Night(len(new), before, time.process_time() - begun, _memory_mb())
    print(
        f"night {night:3}  {done.new:3} new, {gone} withdrawn  {outcome.outcome:10} {outcome.analysed_recordings:3} "
        f"analysed  {done.cpu_s:6.2f} CPU s  {done.memory_mb:6.0f} MB",
        flush=True,
    )
    return done


def _write_register(register: Path, asked: argparse.Namespace, gone: set[int]) -> None:
    patients = "".join(f"SC-{number:03d},\n" for number in range(PATIENTS))
    (register / "patients.csv").write_text("patient_code,zone\n" + patients)
    starts = [_start(_first_night(patch, asked.patches, asked.nights)) for patch in range(asked.patches)]
    wears = [
        f"{_serial(patch)},SC-{patch % PATIENTS:03d},{start:%Y-%m-%dT%H:%M},,\n"
        for patch, start in enumerate(starts)
        if patch not in gone
    ]
    header = "device_serial,patient_code,from_local,to_local,start_local\n"
    (register / "wears.csv").write_text(header + "".join(wears))


def _deliver(inbox: Path, arrival: Arrival, first_night: int) -> None:
    """Write the part; its bytes follow from patch and part, so a second delivery of it is the same."""
    start = _start(first_night + arrival.part)
    seed = 10 * arrival.patch + arrival.part
    rhythm = Rhythm(v_share_pct=float(arrival.patch % 7))
    (hour,) = synthetic.recording(rhythm, fs_hz=FS_HZ, hours=PART_H, seed=seed)
    header = EdfHeader(
        f"SC-{arrival.patch % PATIENTS:03d}", _serial(arrival.patch), start, FS_HZ, synthetic.MV_PER_COUNT
    )
    write_edf(inbox / arrival.name, header, [Piece(0, hour.counts)])
    arrived_s = (FIRST_NIGHT + timedelta(days=arrival.night, hours=-1)).timestamp()
    os.utime(inbox / arrival.name, (arrived_s, arrived_s))


def _memory_mb() -> float:
    """Anonymous memory of this process after a collection (Linux)."""
    gc.collect()
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith("RssAnon")) / 1024


def _print_summary(nights: list[Night]) -> None:
    print(f"{sum(night.new for night in nights)} deliveries in {len(nights)} nights")
    cpu_s = np.array([night.cpu_s for night in nights])
    causes = np.array([(1, night.new, night.before) for night in nights])
    (alone, per_new, per_old), *_ = np.linalg.lstsq(causes, cpu_s, rcond=None)
    print(
        f"a night costs {alone:.2f} CPU s, {per_new:.3f} per new delivery, {per_old:.4f} per one that was there before"
    )
    third = len(nights) // 3
    middle, last = (np.mean([each.memory_mb for each in part]) for part in (nights[third:-third], nights[-third:]))
    print(f"memory: {nights[0].memory_mb:.0f} MB first night, {middle:.0f} MB middle third, {last:.0f} MB last third")


def _differences(folder: Path, at_once: Path) -> list[str]:
    """Published tables whose rows differ from those of one run over the same inbox and register."""
    shutil.rmtree(at_once, ignore_errors=True)
    shutil.copytree(folder, at_once, ignore=shutil.ignore_patterns("lake", "published"))
    nightly.run(at_once)
    found, expected = (
        json.loads((each / "published" / "manifest.json").read_text(encoding="utf-8"))["tables"]
        for each in (folder, at_once)
    )
    return [name for name in expected if name not in OF_RUNS and found.get(name) != expected[name]]


if __name__ == "__main__":
    main()
