"""Time and memory of the whole job on one long recording, as ratios to a plain copy with hash of the same file.

Run from the checkout: python -m tests.benchmarks.whole_job FOLDER [--days 14] [--fs-hz 250]
The recording is made in FOLDER once and kept; the programme folder beside it is made anew each time.
"""

from __future__ import annotations

import argparse
import hashlib
import os
import shutil
import subprocess
import sys
import threading
import time
from datetime import datetime, timedelta
from pathlib import Path

from flows import demo
from flows.programme import make_folder

BLOCK_BYTES = 2**20
STAGES = ("ingest", "detect", "publish", "nothing new")


def main() -> None:
    """Make the recording when it is not there, run the job in a process of its own, print the table."""
    asked = _arguments()
    if asked.inside:
        _job(asked.folder / "programme")
        return
    asked.folder.mkdir(parents=True, exist_ok=True)
    recording = asked.folder / f"long-{asked.days:g}d-{asked.fs_hz}hz.edf"
    if not recording.exists():
        demo.write_long_recording(recording, days=asked.days, fs_hz=asked.fs_hz)
    copy_s = _copy_and_hash(recording, asked.folder / "copy")
    _programme(asked.folder / "programme", recording, asked.days)
    print(f"{recording.stat().st_size / 1e6:.0f} MB, {asked.days:g} days at {asked.fs_hz} Hz")
    print(f"{'copy and hash':14} {copy_s:7.2f} s")
    told = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.whole_job", str(asked.folder), "--inside"],
        check=True, capture_output=True, text=True,
    ).stdout  # fmt: skip
    for line in told.splitlines():
        stage, seconds, peak_mb = line.split("\t")
        ratio = float(seconds) / copy_s
        print(f"{stage:14} {float(seconds):7.2f} s  {ratio:6.2f} x copy  at most {peak_mb:>4} MB anonymous")


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--days", type=float, default=14)
    parser.add_argument("--fs-hz", type=int, default=250)
    parser.add_argument("--inside", action="store_true", help=argparse.SUPPRESS)
    return parser.parse_args()


def _copy_and_hash(source: Path, target: Path) -> float:
    """Seconds to read, hash and write a file in one pass."""
    begun = time.perf_counter()
    digest, block = hashlib.sha256(), bytearray(BLOCK_BYTES)
    with source.open("rb", buffering=0) as read, target.open("wb", buffering=0) as write:
        while count := read.readinto(block):
            digest.update(memoryview(block)[:count])
            write.write(memoryview(block)[:count])
    target.unlink()
    return time.perf_counter() - begun


def _programme(folder: Path, recording: Path, days: float) -> None:
    shutil.rmtree(folder, ignore_errors=True)
    make_folder(folder, "benchmark", "UTC")
    end = datetime(2026, 2, 2) + timedelta(days=days + 1)  # noqa: DTZ001  register times are local
    with (folder / "register" / "patients.csv").open("a") as file:
        file.write("HB-900,\n")
    with (folder / "register" / "wears.csv").open("a") as file:
        file.write(f"SK9000,HB-900,2026-02-02T00:00,{end:%Y-%m-%dT%H:%M},\n")
    os.link(recording, folder / "inbox" / "SK9000_20260202.edf")


def _job(folder: Path) -> None:
    """Run ingest, detection, publication and an idle run; print stage, seconds and peak anonymous memory in MB."""
    from flows import nightly, publication, register
    from flows.arrivals import ingest
    from flows.progress import Silent
    from flows.settings import load
    from warehouse.ledger import Ledger

    settings, silent = load(folder / "programme.toml"), Silent()
    people, ledger = register.load(folder, settings.programme.zone), Ledger(folder / "lake")

    def detect() -> None:
        work = [nightly.Work(folder, name, settings) for name in nightly.unanalysed(ledger, settings)]
        for loads in nightly.analyse_here(work, silent):
            ledger.commit(loads, note="detect")

    steps = (
        lambda: ingest.ingest(folder, settings, people, ledger, silent.say),
        detect,
        lambda: publication.refresh(folder, settings, people, ledger, silent.say),
        lambda: nightly.run(folder),
    )
    for stage, step in zip(STAGES, steps, strict=True):
        with Watch() as watch:
            begun = time.perf_counter()
            step()
            seconds = time.perf_counter() - begun
        print(stage, f"{seconds:.3f}", f"{watch.peak_mb:.0f}", sep="\t")


class Watch:
    """Peak anonymous memory of this process while the block runs, looked at fifty times a second (Linux)."""

    def __enter__(self) -> Watch:
        self.peak_mb, self._done = 0.0, threading.Event()
        self._thread = threading.Thread(target=self._look, daemon=True)
        self._thread.start()
        return self

    def __exit__(self, *problem: object) -> None:
        self._done.set()
        self._thread.join()

    def _look(self) -> None:
        while not self._done.wait(0.02):
            lines = Path("/proc/self/status").read_text().splitlines()
            anonymous_kb = next(int(line.split()[1]) for line in lines if line.startswith("RssAnon"))
            self.peak_mb = max(self.peak_mb, anonymous_kb / 1024)


if __name__ == "__main__":
    main()
