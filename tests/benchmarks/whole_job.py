"""Time and memory of each stage of the whole job on one long recording, as ratios to the floor of that stage.

Run from the checkout: python -m tests.benchmarks.whole_job FOLDER [--days 14] [--fs-hz 250]
The recording is made in FOLDER once and kept; the programme folder beside it is made anew each time. A floor does as
little as can be done with the same bytes or rows, measured in the same run: see FLOORS.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import shutil
import subprocess
import sys
import threading
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl

from flows import demo
from flows.programme import make_folder
from warehouse.parts import BLOCK_SAMPLES

BLOCK_BYTES = 2**20
ONE_THREAD = {"OPENBLAS_NUM_THREADS": "1"}  # as `flows` sets before it loads numpy, which this script loads first
REST, IDLE = "rest", "nothing new"
FLOORS = {
    "read": "copy and SHA-256 of the file",
    "land": "its samples as Parquet with zstd",
    "detect": "unpacking the landed samples",
    "stitch": "the landed beats as Parquet with zstd",
    "tables": "copy of database and tables",
    "pages": "copy of the pages",
}


def main() -> None:
    """Make the recording when it is not there, run the job in a process of its own, print the table."""
    asked = _arguments()
    programme = asked.folder / "programme"
    if asked.inside:
        print(json.dumps(_job(programme)))
        return
    asked.folder.mkdir(parents=True, exist_ok=True)
    recording = asked.folder / f"long-{asked.days:g}d-{asked.fs_hz}hz.edf"
    if not recording.exists():
        demo.write_long_recording(recording, days=asked.days, fs_hz=asked.fs_hz)
    _programme(programme, recording, asked.days)
    print(f"{recording.stat().st_size / 1e6:.0f} MB, {asked.days:g} days at {asked.fs_hz} Hz")
    told = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.whole_job", str(asked.folder), "--inside"],
        check=True, capture_output=True, text=True, env=os.environ | ONE_THREAD,
    ).stdout  # fmt: skip
    floors = _floors(programme, recording, asked.folder / "floor")
    _print(json.loads(told), floors)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--days", type=float, default=14)
    parser.add_argument("--fs-hz", type=int, default=250)
    parser.add_argument("--inside", action="store_true", help=argparse.SUPPRESS)
    return parser.parse_args()


def _print(found: dict[str, dict[str, float]], floors: dict[str, float]) -> None:
    for stage, floor_s in floors.items():
        seconds, peak_mb = found[stage]["seconds"], found[stage]["peak_mb"]
        print(
            f"{stage:12} {seconds:6.2f} s {seconds / floor_s:7.1f} x {floor_s:6.3f} s ({FLOORS[stage]})"
            f"  at most {peak_mb:.0f} MB anonymous"
        )
    print(f"{REST:12} {found[REST]['seconds']:6.2f} s  at most {found[REST]['peak_mb']:.0f} MB anonymous")
    whole_s = sum(one["seconds"] for stage, one in found.items() if stage != IDLE)
    floor_s = floors["read"] + floors["land"]
    print(f"{'whole job':12} {whole_s:6.2f} s {whole_s / floor_s:7.1f} x {floor_s:6.3f} s (floors of read and land)")
    print(f"{IDLE:12} {found[IDLE]['seconds']:6.2f} s  at most {found[IDLE]['peak_mb']:.0f} MB anonymous")


# The job, inside a process of its own


def _job(folder: Path) -> dict[str, dict[str, float]]:
    """Seconds and peak anonymous memory in MB of each stage of a run, and of a run that finds nothing new."""
    import detectors.analyse
    from flows import nightly
    from flows.arrivals import ingest

    stages = Stages()
    copied = ingest.staged

    @contextmanager
    def staged(*given: Any, **named: Any) -> Iterator[Any]:
        with stages.of("read"):
            opened = copied(*given, **named)
            copy = opened.__enter__()
        try:
            yield copy
        finally:
            opened.__exit__(*sys.exc_info())

    published = nightly.publish

    def publish(*given: Any) -> bool:
        from flows import publication

        publication.build_site = stages.timed("pages", publication.build_site)
        return published(*given)

    ingest.staged = staged
    nightly.publish = stages.timed("tables", publish)
    for stage, owner, name in (
        ("land", ingest, "ingest"),
        ("stitch", nightly, "analyse_one"),
        ("detect", detectors.analyse, "gather"),
    ):
        setattr(owner, name, stages.timed(stage, getattr(owner, name)))
    with stages:
        nightly.run(folder)
    found = stages.found()  # what is timed goes on counting in the run that finds nothing new
    idle = Stages()
    with idle:
        nightly.run(folder)
    return found | {IDLE: idle.found()[REST]}


class Stages:
    """Seconds of each stage without those inside it, and the process's peak anonymous memory meanwhile (Linux)."""

    def __init__(self) -> None:
        self._seconds: defaultdict[str, float] = defaultdict(float)
        self._peak_mb: defaultdict[str, float] = defaultdict(float)
        self._open, self._since, self._done = [REST], time.perf_counter(), threading.Event()
        self._watch = threading.Thread(target=self._look, daemon=True)

    def __enter__(self) -> None:
        self._watch.start()

    def __exit__(self, *problem: object) -> None:
        self._switch()
        self._done.set()
        self._watch.join()

    @contextmanager
    def of(self, stage: str) -> Iterator[None]:
        """The body belongs to this stage."""
        self._switch()
        self._open.append(stage)
        try:
            yield
        finally:
            self._switch()
            self._open.pop()

    def timed(self, stage: str, work: Callable[..., Any]) -> Callable[..., Any]:
        """The same function, which belongs to this stage."""

        def timed(*given: Any, **named: Any) -> Any:
            with self.of(stage):
                return work(*given, **named)

        return timed

    def found(self) -> dict[str, dict[str, float]]:
        """Per stage: seconds and peak_mb."""
        return {name: {"seconds": self._seconds[name], "peak_mb": self._peak_mb[name]} for name in self._seconds}

    def _switch(self) -> None:
        now = time.perf_counter()
        self._seconds[self._open[-1]] += now - self._since
        self._since = now

    def _look(self) -> None:
        while not self._done.wait(0.02):
            stage = self._open[-1]
            self._peak_mb[stage] = max(self._peak_mb[stage], _anonymous_mb())


def _anonymous_mb() -> float:
    """Memory of this process that no file backs, without pages it gave back that the system has not yet taken."""
    lines = Path("/proc/self/smaps_rollup").read_text().splitlines()[1:]
    kb = {name: int(rest.split()[0]) for name, rest in (line.split(":") for line in lines)}
    return (kb["Anonymous"] - kb["LazyFree"]) / 1024


def _programme(folder: Path, recording: Path, days: float) -> None:
    shutil.rmtree(folder, ignore_errors=True)
    make_folder(folder, "benchmark", "UTC")
    end = datetime.fromisoformat("2026-02-02") + timedelta(days=days + 1)
    with (folder / "register" / "patients.csv").open("a") as file:
        file.write("HB-900,\n")
    with (folder / "register" / "wears.csv").open("a") as file:
        file.write(f"SK9000,HB-900,2026-02-02T00:00,{end:%Y-%m-%dT%H:%M},\n")
    os.link(recording, folder / "inbox" / "SK9000_20260202.edf")


# Floors


def _floors(programme: Path, recording: Path, scratch: Path) -> dict[str, float]:
    """Seconds of the least that can be done with the bytes or rows of each stage."""
    lake, published = programme / "lake", programme / "published"
    samples = np.memmap(recording, dtype="<i2", mode="r", shape=(recording.stat().st_size // 2,))
    beats = [pl.read_parquet(path) for path in (lake / "beats").rglob("*.parquet")]
    steps = {
        "read": lambda: _copy_and_hash(recording, scratch),
        "land": lambda: _write_samples(samples, scratch),
        "detect": lambda: [pl.read_parquet(path).height for path in (lake / "signal").rglob("*.parquet")],
        "stitch": lambda: [rows.write_parquet(scratch, compression="zstd") for rows in beats],
        "tables": lambda: _copy([published / "burdenline.duckdb", *_files(published / "tables")], scratch),
        "pages": lambda: _copy(_files(published / "site"), scratch),
    }
    floors = {}
    for stage, step in steps.items():
        begun = time.perf_counter()
        step()
        floors[stage] = time.perf_counter() - begun
    scratch.unlink()
    return floors


def _copy_and_hash(source: Path, target: Path) -> None:
    """Read, hash and write a file in one pass."""
    digest, block = hashlib.sha256(), bytearray(BLOCK_BYTES)
    with source.open("rb", buffering=0) as read, target.open("wb", buffering=0) as write:
        while count := read.readinto(block):
            digest.update(memoryview(block)[:count])
            write.write(memoryview(block)[:count])


def _write_samples(samples: np.ndarray, target: Path) -> None:
    for begin in range(0, samples.size, BLOCK_SAMPLES):
        block = pl.DataFrame({"sample": samples[begin : begin + BLOCK_SAMPLES]})
        block.write_parquet(target, compression="zstd", compression_level=1)


def _files(folder: Path) -> list[Path]:
    return [path for path in folder.rglob("*") if path.is_file()]


def _copy(files: list[Path], target: Path) -> None:
    for file in files:
        shutil.copyfile(file, target)


if __name__ == "__main__":
    main()
