"""What a recording costs in each stage, one and two workers measured, and where more workers stop helping.

Run from the checkout: python -m tests.benchmarks.scaling FOLDER [--recordings 6] [--days 2]
The model: the run itself reads and lands one recording after the other, then workers analyse side by side while it
commits, then it publishes: n land + max(n analyse / w, n commit) + fixed + n publish CPU seconds on w workers.
"""

from __future__ import annotations

import argparse
import importlib
import os
import shutil
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import NamedTuple

from distributed import Client, LocalCluster

from detectors import synthetic
from detectors.synthetic_beats import Rhythm
from flows import nightly, publication, register, workers
from flows.arrivals import ingest
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.programme import make_folder
from flows.progress import SILENT
from flows.settings import load
from warehouse.ledger import Ledger

FS_HZ = 250
START = datetime.fromisoformat("2025-02-02T10:00")  # local to the patient
STAGES = ("land", "analyse", "commit", "publish")
MODELLED_WORKERS = (1, 2, 10, 100, 1000)
MODELLED_RECORDINGS = 1000
ROUNDS = 3  # one worker and two in turn, the best of each


class Cost(NamedTuple):
    """Of one stage, for all recordings."""

    wall_s: float
    cpu_s: float

    def __str__(self) -> str:
        return f"{self.wall_s:.2f} s ({self.cpu_s:.2f} CPU s)"


def main() -> None:
    """Print costs per recording and patient-day, measured speed-up and the modelled night."""
    asked = _arguments()
    shutil.rmtree(asked.folder, ignore_errors=True)
    fresh = asked.folder / "fresh"
    make_programme(fresh, asked.recordings, asked.days)
    alone = linked(fresh, asked.folder / "stages")
    costs = _stages(alone)
    lake_bytes = sum(part.bytes for part in Ledger(alone / "lake").parts())
    _print_costs(costs, lake_bytes, asked.recordings, asked.recordings * asked.days)
    landed = _landed(linked(fresh, asked.folder / "landed"))
    rounds = [[_analyse_on(linked(landed, asked.folder / "workers"), count) for count in (1, 2)] for _ in range(ROUNDS)]
    one, two = (min(column) for column in zip(*rounds, strict=True))
    print(f"measured: 1 worker {one:.1f} s, 2 workers {two:.1f} s to analyse and commit, {one / two:.2f} x")
    make_programme(asked.folder / "single", 1, asked.days)
    _print_model(costs, asked.recordings, _stages(asked.folder / "single")["publish"].cpu_s)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--recordings", type=int, default=6)
    parser.add_argument("--days", type=float, default=2.0)
    return parser.parse_args()


def make_programme(folder: Path, recordings: int, days: float) -> None:
    """A programme with one continuous recording per patient."""
    make_folder(folder, "Scaling (invented)", "UTC")
    for number in range(recordings):
        header = EdfHeader(f"SC-{number:03d}", f"SK{number:04d}", START, FS_HZ, synthetic.MV_PER_COUNT)
        hours = synthetic.recording(Rhythm(v_share_pct=8.0), fs_hz=FS_HZ, hours=24 * days, seed=number)
        pieces = (Piece(n * 3_600_000, hour.counts) for n, hour in enumerate(hours))
        write_edf(folder / "inbox" / f"SK{number:04d}.edf", header, pieces)
        with (folder / "register" / "patients.csv").open("a") as patients:
            patients.write(f"SC-{number:03d},\n")
        with (folder / "register" / "wears.csv").open("a") as wears:
            wears.write(f"SK{number:04d},SC-{number:03d},{START:%Y-%m-%dT%H:%M},,\n")


def _stages(folder: Path) -> dict[str, Cost]:
    """Land, analyse, commit and publish a programme in this process, stage by stage."""
    settings = load(folder / "programme.toml")
    people, ledger = register.load(folder, settings.programme.zone), Ledger(folder / "lake")
    loads: list[dict] = []

    def analyse() -> None:
        loads.extend(nightly.analyse_one(item).loads for item in _work(folder))

    def commit() -> None:
        for each in loads:
            ledger.commit(each, note="detect")

    return {
        "land": _cost(lambda: ingest.ingest(folder, settings, people, ledger, SILENT.say)),
        "analyse": _cost(analyse),
        "commit": _cost(commit),
        "publish": _cost(lambda: publication.refresh(folder, settings, people, ledger, SILENT.say)),
    }


def _work(folder: Path, scheduler: str = "") -> list[nightly.Work]:
    settings = load(folder / "programme.toml")
    settings = replace(settings, workers=replace(settings.workers, scheduler=scheduler))
    ledger = Ledger(folder / "lake")
    return [nightly.Work(folder, name, settings) for name in nightly.unanalysed(ledger, settings)]


def _cost(step: Callable[[], object]) -> Cost:
    wall_s, cpu_s = time.perf_counter(), time.process_time()
    step()
    return Cost(time.perf_counter() - wall_s, time.process_time() - cpu_s)


def _landed(folder: Path) -> Path:
    settings = load(folder / "programme.toml")
    people, ledger = register.load(folder, settings.programme.zone), Ledger(folder / "lake")
    ingest.ingest(folder, settings, people, ledger, SILENT.say)
    return folder


def _analyse_on(folder: Path, count: int) -> float:
    """Seconds to analyse and commit a landed programme on `count` worker processes of one thread, once they are warm."""
    ledger = Ledger(folder / "lake")
    with LocalCluster(n_workers=count, threads_per_worker=1, dashboard_address=None) as cluster:
        with Client(cluster) as client:
            client.run(_warm)
        work = _work(folder, cluster.scheduler_address)
        begun = time.perf_counter()
        for analysed in workers.analyse_on_workers(work, SILENT):
            ledger.commit(analysed.loads, note="detect")
        return time.perf_counter() - begun


def _warm() -> None:
    """Import what the first recording would: a worker serves many nights."""
    importlib.import_module("flows.detect")


def linked(fresh: Path, target: Path) -> Path:
    """A copy of a programme folder whose exports and parts, which nobody writes to, are links."""
    shutil.rmtree(target, ignore_errors=True)
    return Path(shutil.copytree(fresh, target, copy_function=_link_large))


def _link_large(source: str, target: str) -> None:
    if source.endswith((".edf", ".parquet")):
        os.link(source, target)
    else:
        shutil.copy2(source, target)


def _print_costs(costs: dict[str, Cost], lake_bytes: int, recordings: int, patient_days: float) -> None:
    for stage, cost in costs.items():
        print(f"{stage:8} {cost.cpu_s / recordings:7.3f} CPU s and {cost.wall_s / recordings:7.3f} s per recording")
    cpu_s = sum(cost.cpu_s for cost in costs.values()) / patient_days
    print(f"a patient-day costs {cpu_s:.3f} CPU s and {lake_bytes / patient_days / 1e6:.2f} MB of lake")


def _print_model(costs: dict[str, Cost], recordings: int, publish_one_s: float) -> None:
    """The modelled night, and the workers from which all that they cannot do takes longer than what they do."""
    land, analyse, commit = (costs[stage].cpu_s / recordings for stage in STAGES[:3])
    publish = max(costs["publish"].cpu_s - publish_one_s, 0.0) / (recordings - 1)
    fixed = publish_one_s - publish
    nights = {
        count: MODELLED_RECORDINGS * (land + max(analyse / count, commit) + publish) + fixed
        for count in MODELLED_WORKERS
    }
    for count, seconds in nights.items():
        print(
            f"model: {MODELLED_RECORDINGS} recordings on {count:4} workers {seconds:8.0f} s, {nights[1] / seconds:5.1f} x"
        )
    print(f"model: {analyse / (land + publish):.1f} workers analyse as fast as one process lands and publishes")


if __name__ == "__main__":
    main()
