"""Kill loads and publications at random, and read while publishing: `python tests/benchmarks/warehouse_crash.py`.

A writer lands, commits and publishes one recording after the other in a process of its own and is killed without
warning; after every kill the ledger must hold whole loads only, the publication must be of one piece, and a run to the
end must give the tables of an undisturbed run. Then readers open the published file in turn while it is published anew.
Not part of the test run; the tests do the same a few times.
"""

from __future__ import annotations

import argparse
import json
import os
import random
import signal
import subprocess
import sys
import tempfile
import threading
import time
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
import polars as pl

from warehouse import ledger as ledgers
from warehouse import schema
from warehouse.build import TrendBuild
from warehouse.layers import COMPUTED_OUTSIDE
from warehouse.ledger import Ledger
from warehouse.parts import frame_schema, write_part, write_signal
from warehouse.publish import publish
from warehouse.published import Published

RECORDINGS = 12
FIRST_UTC = datetime.fromisoformat("2026-01-01T00:00")
SETTINGS = {
    "min_analysable_h_per_day": 10.0,
    "min_days_per_period": 2,
    "baseline_days": 28,
    "after_days": 90,
    "attention_v_burden_pct": 10.0,
    "attention_run_beats": 3,
    "attention_fast_run_bpm": 120.0,
    "attention_pause_ms": 3000,
    "attention_sustained_run_s": 30.0,
    "attention_short_coupling_ms": 300.0,
    "attention_patch_end_days": 2,
}


def filled(table: str, rows: list[dict]) -> pl.DataFrame:
    """Rows of a lake table, NULL where nothing was given."""
    types = frame_schema(schema.LAKE[table])
    return pl.DataFrame([dict.fromkeys(types) | row for row in rows], schema=types)


def load(lake: Path, ledger: Ledger, number: int) -> None:
    """Land one recording with its samples and tallies and commit it; a second time it gives the same."""
    name = f"R{number:02d}"
    start_utc = FIRST_UTC + timedelta(days=number)
    header = {"recording_id": name, "start_utc": start_utc, "end_utc": start_utc + timedelta(days=1)}
    seconds = dict.fromkeys(("recorded_s", "worn_s", "analysable_s", "rr_sum_s"), 900.0)
    counts = dict.fromkeys(("s_beats", "f_beats", "q_beats", "couplets", "runs", "sv_runs", "longest_run_beats"), 0)
    beats = {"n_beats": 900, "v_beats": number, "all_beats": 900 + number, "rr_count": 900}
    quarter = {"recording_id": name, "fingerprint": "f", **seconds, **counts, **beats}
    quarters = [quarter | {"quarter_utc": start_utc + timedelta(minutes=15 * n)} for n in range(96)]
    samples = np.random.default_rng(number).integers(-500, 500, 50_000).astype(np.int16)
    ledger.commit(
        {
            ("recordings", name): [write_part(lake, "recordings", name, filled("recordings", [header]))],
            ("signal", name): [write_signal(lake, name, 0, block, samples + np.int16(block)) for block in range(3)],
            ("quarter_hours", name): [
                write_part(lake, "quarter_hours", name, filled("quarter_hours", quarters), fingerprint="f")
            ],
        }
    )


def publish_all(folder: Path, ledger: Ledger, stamp: int = 0) -> None:
    """Build and publish everything that is in force."""
    parts = ledger.parts()
    names = sorted({part.key for part in parts if part.table == "recordings"})
    wears = pl.DataFrame({"recording_id": names, "device_serial": names, "patient_code": ["P"] * len(names)})
    register = {
        "patients": pl.DataFrame({"patient_code": ["P"], "zone": ["Europe/Lisbon"]}),
        "wears": wears.with_columns(pl.lit(FIRST_UTC).alias("from_utc"), pl.lit(None).alias("to_utc")),
        "therapies": pl.DataFrame(
            {"therapy_id": ["T"], "patient_code": ["P"], "therapy_kind": ["other"], "therapy_detail": ["x"]}
        ).with_columns(pl.lit(FIRST_UTC.date()).alias("therapy_day"), pl.lit(1).alias("settling_days")),
    }
    build = TrendBuild(
        folder / "lake", parts, register=register, settings=SETTINGS, fingerprint="f", workdir=folder / "work"
    )
    with build:
        build.run_models("decided")
        build.run_models("staging")
        build.run_models("intermediate")
        for name in COMPUTED_OUTSIDE:
            build.add(name, pl.DataFrame(schema=frame_schema(schema.PUBLISHED[name])))
        build.run_models("marts")
        publish(build, folder / "published", site=write_site, stamp={"stamp": stamp})


def write_site(published: Published, folder: Path) -> None:
    """A page that says from how many recordings it was made."""
    folder.mkdir()
    (folder / "index.html").write_text(str(published.table("recordings").height))


def run(folder: Path) -> None:
    """The whole job: everything that is not in force yet is loaded, publishing after each."""
    ledger = Ledger(folder / "lake")
    done = {part.key for part in ledger.parts("recordings")}
    for number in range(RECORDINGS):
        if f"R{number:02d}" not in done:
            load(folder / "lake", ledger, number)
            publish_all(folder, ledger)
    publish_all(folder, ledger)


def start(folder: Path) -> subprocess.Popen[str]:
    """The whole job in a process of its own; returns once it has begun."""
    process = subprocess.Popen(
        [sys.executable, __file__, "--run", str(folder)], stdout=subprocess.PIPE, text=True, env=os.environ
    )
    assert process.stdout is not None
    process.stdout.readline()
    return process


def tables(folder: Path) -> dict[str, object]:
    """Rows and hashes of the files of every published table."""
    return json.loads((folder / "published" / "manifest.json").read_text())["tables"]


def check_whole(folder: Path) -> None:
    """The ledger holds whole loads whose bytes are right; database, tables and page tell of the same recordings."""
    assert ledgers.verify(folder / "lake") == []
    parts = Ledger(folder / "lake").parts()
    names = {part.key for part in parts}
    assert all(sum(part.key == name for part in parts) == 5 for name in names), "half a load is in force"
    if (folder / "published" / "current").is_symlink():
        published = Published(folder / "published")
        page = int((folder / "published" / "site" / "index.html").read_text())
        rows = published.frame("SELECT count(*) AS n FROM recordings")["n"][0]
        assert rows == published.table("recordings").height == page, "mixed publication"


def kill_many(kills: int) -> None:
    """Kill the job at random moments, again and again, until it was killed `kills` times."""
    rng = random.Random(1)
    with tempfile.TemporaryDirectory() as undisturbed:
        begin = time.perf_counter()
        run(Path(undisturbed))
        whole_s = time.perf_counter() - begin
        wanted = tables(Path(undisturbed))
    killed = folders = 0
    while killed < kills:
        folders += 1
        with tempfile.TemporaryDirectory() as name:
            folder, alive = Path(name), True
            while alive and killed < kills:
                alive = killed_alive(folder, rng.uniform(0, 0.3 * whole_s))
                killed += alive
                check_whole(folder)
            run(folder)
            assert tables(folder) == wanted, "not the tables of an undisturbed run"
            ledgers.tidy(folder / "lake", -1)
            check_whole(folder)
    print(f"{killed} kills of a running job in {folders} folders: ledger and publication whole, tables as undisturbed")


def killed_alive(folder: Path, after_s: float) -> bool:
    """Start the job, kill it after some time; returns whether it was still running then."""
    process = start(folder)
    time.sleep(after_s)
    alive = process.poll() is None
    process.send_signal(signal.SIGKILL)
    process.wait()
    process.stdout.close()
    return alive


def read_while_publishing(publications: int, readers: int) -> None:
    """Readers open the published file one after the other while it is published again and again."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        run(folder)
        ledger, stop, read = Ledger(folder / "lake"), threading.Event(), 0

        def keep_publishing() -> None:
            for stamp in range(1, publications + 1):
                publish_all(folder, ledger, stamp)
            stop.set()

        publisher = threading.Thread(target=keep_publishing)
        publisher.start()
        seen = set()
        while not stop.is_set() or read < readers:
            published = Published(folder / "published")
            stamp = published.manifest["stamp"]["stamp"]
            assert published.frame("FROM recordings").height == published.table("recordings").height == RECORDINGS
            assert Published(folder / "published").manifest["stamp"]["stamp"] >= stamp, "went back"
            seen.add(stamp)
            read += 1
        publisher.join()
    print(f"{read} readers during {publications} publications, {len(seen)} of which they met: no error, no mixed state")


def main() -> None:
    """Kill and read."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=100)
    parser.add_argument("--publications", type=int, default=50)
    parser.add_argument("--readers", type=int, default=500)
    parser.add_argument("--run", type=Path, help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.run:
        print("begun", flush=True)
        run(asked.run)
        return
    kill_many(asked.kills)
    read_while_publishing(asked.publications, asked.readers)


if __name__ == "__main__":
    main()
