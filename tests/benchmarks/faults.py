"""Disturb runs at random moments and look whether the next run ends in the tables and pages of an undisturbed one.

Run from the checkout: python -m tests.benchmarks.faults FOLDER [--trials 100] [--seed 1]
    [--only kill full torn clock store memory]

    kill    kill -9, up to three times
    full    the disk fills up (a small tmpfs; needs root)
    torn    kill -9, then what was not flushed to the disk is cut at random, as a power loss leaves it
    clock   kill -9 under a clock that is days off (needs libfaketime)
    store   lake in an object store that refuses every n-th request, and kill -9
    memory  a Dask worker that is ended when it takes more than so many MB: the run ends, completed or with a sentence

Every trial starts from a fresh copy of one small invented programme.
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
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import polars as pl

from flows import demo

OF_RUNS = "runs_of_flow"  # the only table that tells of runs and of the clock
OF_SETTINGS = "inputs"  # which names the store
FAKETIME = Path("/usr/lib/x86_64-linux-gnu/faketime/libfaketime.so.1")
LIMITS_MB = (100, 350)  # of a worker: below its own size, and room for everything
CACHES = ("lake/seen.json", "lake/assembled.json", "lake/last_run.json")


class Bench(NamedTuple):
    """What the trials share: the fresh programme, the undisturbed run, and how long and how large that was."""

    fresh: Path
    folder: Path
    expected: dict[str, str]
    length_s: float
    grown_bytes: int


def main() -> None:
    """Print a line per trial and a count per fault; exit 1 when a trial ended otherwise."""
    asked = _arguments()
    bench = _undisturbed(asked.folder)
    rng = np.random.default_rng(asked.seed)
    wrong = 0
    for name in asked.only:
        if reason := _missing(name):
            print(f"{name}: skipped, {reason}")
            continue
        ended = [_told(name, trial, bench, rng) for trial in range(asked.trials)]
        wrong += sum(map(bool, ended))
        print(f"{name}: {ended.count('')} of {len(ended)} ended in tables and pages of the undisturbed run", flush=True)
    sys.exit(1 if wrong else 0)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--trials", type=int, default=100, help="of each fault")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", nargs="+", choices=sorted(FAULTS), default=list(FAULTS))
    return parser.parse_args()


def _undisturbed(folder: Path) -> Bench:
    fresh = folder / "fresh"
    if not fresh.exists():
        _small_programme(fresh)
    whole = _copy(fresh, folder / "undisturbed")
    begun = time.monotonic()
    if problem := _run(whole):
        sys.exit(f"the undisturbed run failed: {problem}")
    length_s = time.monotonic() - begun
    print(f"the undisturbed run took {length_s:.1f} s")
    return Bench(fresh, folder, _outcome(whole), length_s, _size(whole) - _size(fresh))


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


def _size(folder: Path) -> int:
    return sum(path.stat().st_blocks * 512 for path in folder.rglob("*") if path.is_file() and not path.is_symlink())


def _told(name: str, trial: int, bench: Bench, rng: np.random.Generator) -> str:
    """Disturb, run once more, and say what differs; empty when nothing does."""
    with FAULTS[name](bench, rng) as (folder, environment, what):
        problem = _run(folder, environment) or _difference(bench.expected, _outcome(folder))
    print(f"{name} {trial}: {what}: {problem or 'the same'}", flush=True)
    return problem


def _difference(expected: dict[str, str], found: dict[str, str]) -> str:
    return ", ".join(sorted(name for name in expected.keys() | found.keys() if expected.get(name) != found.get(name)))


# Faults: each yields the disturbed folder, the environment of the next run, and what was done to it


@contextmanager
def _killed(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    folder = _copy(bench.fresh, bench.folder / "disturbed")
    moments_s = _moments(bench, rng, int(rng.integers(1, 4)))
    for moment_s in moments_s:
        _kill_after(folder, moment_s)
    yield folder, {}, f"killed after {moments_s} s"


@contextmanager
def _full(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    place = bench.folder / "full"
    place.mkdir(exist_ok=True)
    free_kb = int(rng.uniform(0, 1) * bench.grown_bytes / 1024)
    used_kb = _size(bench.fresh) // 1024 + 512
    subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={used_kb + free_kb}k", "tmpfs", place], check=True)
    try:
        folder = _copy(bench.fresh, place / "disturbed")
        said = _run(folder)
        subprocess.run(["mount", "-o", "remount,size=4g", place], check=True)
        yield folder, {}, f"{free_kb} kB free: {said or 'it was enough'}"
    finally:
        subprocess.run(["umount", place], check=True)


@contextmanager
def _torn(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    folder = _copy(bench.fresh, bench.folder / "disturbed")
    [moment_s] = _moments(bench, rng, 1)
    _kill_after(folder, moment_s)
    unflushed = [*folder.glob("lake/**/.writing-*"), *folder.glob("lake/staging/**/*"), *folder.glob("lake/build-*/*")]
    torn = [path for path in (*unflushed, *(folder / name for name in CACHES)) if path.is_file()]
    for path in torn:
        os.truncate(path, rng.integers(0, path.stat().st_size + 1))
    yield folder, {}, f"killed after {moment_s} s, {len(torn)} files torn"


@contextmanager
def _clock(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    folder = _copy(bench.fresh, bench.folder / "disturbed")
    jumps_d = rng.integers(-400, 400, 2).tolist()
    moments_s = _moments(bench, rng, 2)
    for jump_d, moment_s in zip(jumps_d, moments_s, strict=True):
        jumped = {"LD_PRELOAD": str(FAKETIME), "FAKETIME": f"{jump_d:+d}d", "NO_FAKE_STAT": "1"}
        _kill_after(folder, moment_s, jumped)
    yield folder, {}, f"clock {jumps_d} days off, killed after {moments_s} s"


@contextmanager
def _store(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    from tests.s3_server import BUCKET, S3Server

    folder = _copy(bench.fresh, bench.folder / "disturbed")
    toml = folder / "programme.toml"
    place = f"lake-{rng.integers(2**32)}"  # of this trial alone: what a server holds outlives it
    toml.write_text(toml.read_text().replace('store = ""', f'store = "s3://{BUCKET}/{place}"'))
    server = S3Server()
    every, code = int(rng.integers(2, 40)), str(rng.choice(["SlowDown", "AccessDenied"]))
    [moment_s] = _moments(bench, rng, 1)
    try:
        with server.refusing(every, code.encode()):
            said = _run(folder, server.environment)
            _kill_after(folder, moment_s, server.environment)
        yield folder, server.environment, f"{code} to request {every}: {said or 'borne'}; killed after {moment_s} s"
    finally:
        server.stop()


@contextmanager
def _memory(bench: Bench, rng: np.random.Generator) -> Iterator[tuple[Path, dict[str, str], str]]:
    from tests.benchmarks.starved_worker import StarvedWorker

    folder = _copy(bench.fresh, bench.folder / "disturbed")
    limit_mb = int(rng.integers(*LIMITS_MB))
    starved = StarvedWorker(bench.folder, limit_mb)
    try:
        toml = folder / "programme.toml"
        toml.write_text(toml.read_text().replace('scheduler = ""', f'scheduler = "{starved.address}"'))
        said = _run(folder)
        if said and "burdenline: " not in said:
            raise RuntimeError(f"a worker with {limit_mb} MB ended the run without a sentence: {said}")
        starved.feed()
        yield folder, {}, f"a worker with {limit_mb} MB: {said or 'it was enough'}"
    finally:
        starved.stop()


Fault = Callable[[Bench, np.random.Generator], Any]
FAULTS: dict[str, Fault] = {
    "kill": _killed, "full": _full, "torn": _torn, "clock": _clock, "store": _store, "memory": _memory,
}  # fmt: skip


def _missing(name: str) -> str:
    if name == "full" and os.geteuid():
        return "only root may make a small file system"
    if name == "clock" and not FAKETIME.exists():
        return f"there is no {FAKETIME}"
    return ""


def _moments(bench: Bench, rng: np.random.Generator, count: int) -> list[float]:
    return rng.uniform(0, 1.1 * bench.length_s, count).round(2).tolist()


def _kill_after(folder: Path, moment_s: float, environment: dict[str, str] | None = None) -> None:
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    process = subprocess.Popen(_command(folder), start_new_session=True, env=os.environ | (environment or {}), **quiet)
    try:
        process.wait(moment_s)
    except subprocess.TimeoutExpired:
        os.killpg(process.pid, signal.SIGKILL)
        process.wait()


def _run(folder: Path, environment: dict[str, str] | None = None) -> str:
    done = subprocess.run(_command(folder), capture_output=True, text=True, env=os.environ | (environment or {}))
    said = done.stderr.strip().splitlines() or ["nothing"]
    return "" if done.returncode in (0, 3) else f"exit {done.returncode}: {said[-1][-300:]}"


def _command(folder: Path) -> list[str]:
    return [sys.executable, "-m", "flows.cli", "run", str(folder), "--wait", "5"]


def _outcome(folder: Path) -> dict[str, str]:
    """Rows and hash of each published table as the manifest states them, the parts, and which pages are whole."""
    published = folder / "published"
    manifest = json.loads((published / "manifest.json").read_text(encoding="utf-8"))
    told = {name: json.dumps(table) for name, table in manifest["tables"].items() if name not in (OF_RUNS, "parts")}
    parts = pl.read_parquet(published / "tables" / "parts.parquet")
    parts = parts.filter(~pl.col("table_name").is_in([OF_RUNS, OF_SETTINGS]))
    site = (published / "site").resolve()
    pages = {str(path.relative_to(site)): path.read_text(encoding="utf-8") for path in sorted(site.rglob("*.html"))}
    half = [name for name, page in pages.items() if not page.rstrip().endswith("</html>")]
    return told | {"parts": parts.write_csv(), "pages": "\n".join(pages), "half pages": "\n".join(half)}


if __name__ == "__main__":
    main()
