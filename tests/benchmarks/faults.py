"""Kill runs at random moments and look whether the next run ends in the tables of an undisturbed one.

Run from the checkout: python -m tests.benchmarks.faults FOLDER [--kills 100] [--seed 1]
Every trial starts from a fresh copy of one small invented programme; some trials are killed two or three times.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import polars as pl

from flows import demo

OF_RUNS = "runs_of_flow"  # the only table that tells of runs and of the clock


def main() -> None:
    """Print one line per trial that ended otherwise, then the count; exit 1 when there was one."""
    asked = _arguments()
    fresh = asked.folder / "fresh"
    if not fresh.exists():
        _small_programme(fresh)
    whole = _copy(fresh, asked.folder / "undisturbed")
    begun = time.monotonic()
    problem = _run(whole)
    if problem:
        sys.exit(f"the undisturbed run failed: {problem}")
    length_s = time.monotonic() - begun
    expected = _tables(whole)
    rng = np.random.default_rng(asked.seed)
    wrong = 0
    for trial in range(asked.kills):
        moments_s = rng.uniform(0, 1.1 * length_s, rng.integers(1, 4))
        told = _trial(_copy(fresh, asked.folder / "killed"), moments_s.tolist(), expected)
        if told:
            wrong += 1
            print(f"trial {trial}, killed after {np.round(moments_s, 2).tolist()} s: {told}", flush=True)
    print(
        f"{asked.kills - wrong} of {asked.kills} trials ended in the tables of the undisturbed run ({length_s:.1f} s)"
    )
    sys.exit(1 if wrong else 0)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--kills", type=int, default=100)
    parser.add_argument("--seed", type=int, default=1)
    return parser.parse_args()


def _small_programme(folder: Path) -> None:
    """Two patients of the story with one day per wear, and the two files that must be refused."""
    told = demo.story
    few = tuple(p._replace(wears=tuple(w._replace(days=1) for w in p.wears)) for p in (told()[1], told()[-1]))
    demo.story = lambda: few
    demo.make_programme(folder)
    demo.story = told


def _copy(source: Path, target: Path) -> Path:
    shutil.rmtree(target, ignore_errors=True)
    return Path(shutil.copytree(source, target))  # keeps file times, from which the arrival is told


def _trial(folder: Path, moments_s: list[float], expected: dict[str, str]) -> str:
    """Kill one run per moment, run once more, and say what differs; empty when nothing does."""
    for moment_s in moments_s:
        process = subprocess.Popen(
            _command(folder), start_new_session=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        try:
            process.wait(moment_s)
        except subprocess.TimeoutExpired:
            os.killpg(process.pid, signal.SIGKILL)
            process.wait()
    problem = _run(folder)
    if problem:
        return problem
    found = _tables(folder)
    return ", ".join(sorted(name for name in expected.keys() | found.keys() if expected.get(name) != found.get(name)))


def _run(folder: Path) -> str:
    done = subprocess.run(_command(folder), capture_output=True, text=True)
    return "" if done.returncode in (0, 3) else f"exit {done.returncode}: {done.stderr.strip()[-300:]}"


def _command(folder: Path) -> list[str]:
    return [sys.executable, "-m", "flows.cli", "run", str(folder), "--wait", "5"]


def _tables(folder: Path) -> dict[str, str]:
    """Rows and hash of each published table as the manifest states them, without what tells of runs."""
    published = folder / "published"
    manifest = json.loads((published / "manifest.json").read_text(encoding="utf-8"))
    told = {name: json.dumps(table) for name, table in manifest["tables"].items() if name != OF_RUNS}
    parts = pl.read_parquet(published / "tables" / "parts.parquet").filter(pl.col("table_name") != OF_RUNS)
    return told | {"parts": parts.write_csv()}


if __name__ == "__main__":
    main()
