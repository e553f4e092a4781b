"""How publication and queries grow with the programme: `python tests/benchmarks/warehouse_scale.py --recordings 1000`.

Invented 14-day recordings of 1.3 M beats land as parts (the beats of one recording stand for those of all, under each
recording's name); then one recording changes and the programme is published again. Seconds depend on the host; the
ratios between programme sizes are what is looked at. Not part of the test run.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
import polars as pl

from warehouse import schema
from warehouse.build import TrendBuild
from warehouse.layers import COMPUTED_OUTSIDE
from warehouse.ledger import Ledger
from warehouse.parts import Part, frame_schema, write_part
from warehouse.publish import publish
from warehouse.published import Published

DAYS = 14
QUARTERS = DAYS * 96
BEATS = 1_300_000
EPISODES = 1500
FINGERPRINT = "bench"
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


def filled(table: str, frame: pl.DataFrame) -> pl.DataFrame:
    """The frame with every column of the lake table, NULL where nothing was given."""
    types = frame_schema(schema.LAKE[table])
    return frame.with_columns(pl.lit(None).alias(name) for name in types if name not in frame.columns).select(
        pl.col(name).cast(kind) for name, kind in types.items()
    )


def quarter_hours(recording_id: str, seed: int) -> pl.DataFrame:
    """Tallies of 14 days."""
    rng = np.random.default_rng(seed)
    v_beats = rng.poisson(40, QUARTERS)
    frame = pl.DataFrame({"quarter_utc": [FIRST_UTC + timedelta(minutes=15 * n) for n in range(QUARTERS)]})
    return filled(
        "quarter_hours",
        frame.with_columns(
            pl.lit(recording_id).alias("recording_id"),
            pl.lit(FINGERPRINT).alias("fingerprint"),
            *(pl.lit(900.0).alias(name) for name in ("recorded_s", "worn_s", "analysable_s", "rr_sum_s")),
            pl.lit(1000).alias("n_beats"),
            pl.Series("v_beats", v_beats),
            *(
                pl.lit(0).alias(name)
                for name in ("s_beats", "f_beats", "q_beats", "couplets", "runs", "sv_runs", "pauses")
            ),
            pl.Series("all_beats", 1000 + v_beats),
            pl.lit(1000).alias("rr_count"),
            pl.lit(0).alias("longest_run_beats"),
            *(pl.lit(0.0).alias(name) for name in ("bigeminy_s", "trigeminy_s", "irregular_s")),
        ),
    )


def found_tables(recording_id: str, seed: int) -> dict[str, pl.DataFrame]:
    """What else is found in 14 days: 5 families with their shapes and quarter hours, 1,500 episodes, a finding."""
    rng = np.random.default_rng(seed)
    quarters = [FIRST_UTC + timedelta(minutes=15 * n) for n in range(QUARTERS)]
    start_s = np.sort(rng.choice(DAYS * 86400, EPISODES, replace=False))
    rows = {
        "segments": pl.DataFrame({"segment": [0], "start_utc": FIRST_UTC, "end_utc": FIRST_UTC + timedelta(days=DAYS)}),
        "findings": pl.DataFrame({"finding_code": ["invented"], "finding_detail": str(seed)}),
        "families": pl.DataFrame(
            {"family": range(5), "family_class": "N", "beat_count": 1000 + seed, "shape_mv": rng.normal(size=(5, 90))}
        ).with_columns(pl.col("shape_mv").arr.to_list()),
        "family_quarters": pl.DataFrame(
            {
                "family": np.repeat(range(5), QUARTERS),
                "quarter_utc": quarters * 5,
                "beat_count": rng.poisson(200, 5 * QUARTERS),
            }
        ),
        "episodes": pl.DataFrame(
            {
                "episode_kind": "couplet",
                "segment": 0,
                "first_sample": start_s * 250,
                "last_sample": start_s * 250 + 200,
                "start_utc": [FIRST_UTC + timedelta(seconds=int(start)) for start in start_s],
                "beat_count": 2,
                "rate_bpm": rng.normal(140, 9, EPISODES),
            }
        ).with_columns(end_utc=pl.col("start_utc") + timedelta(seconds=1), duration_s=pl.lit(1.0)),
    }
    own = {"recording_id": pl.lit(recording_id), "fingerprint": pl.lit(FINGERPRINT)}
    return {
        table: filled(table, frame.with_columns(**{n: own[n] for n in own if n in schema.LAKE[table].columns}))
        for table, frame in rows.items()
    }


def beats() -> pl.DataFrame:
    """1.3 M beats of 14 days, one in 25 ventricular."""
    rng = np.random.default_rng(0)
    rr_ms = rng.normal(930, 60, BEATS)
    instant_us = (np.cumsum(rr_ms) * 1000).astype(np.int64) + int(FIRST_UTC.timestamp()) * 1_000_000
    frame = pl.DataFrame(
        {
            "sample": np.cumsum(rr_ms / 4).astype(np.int64),
            "beat_utc": pl.Series(instant_us).cast(pl.Datetime("us")),
            "rr_before_ms": rr_ms,
            "rr_after_ms": np.roll(rr_ms, -1),
            "beat_class": np.where(rng.random(BEATS) < 0.04, "V", "N"),
            "class_probability": rng.random(BEATS).round(3),
            "family": rng.integers(0, 5, BEATS),
            "amplitude_mv": rng.normal(1, 0.1, BEATS).round(3),
        }
    )
    return filled(
        "beats",
        frame.with_columns(
            pl.lit("R0000").alias("recording_id"),
            pl.lit(FINGERPRINT).alias("fingerprint"),
            pl.lit(0).alias("segment"),
            pl.lit(False).alias("is_escape"),
            pl.lit(True).alias("is_analysable"),
        ),
    )


def land_recording(lake: Path, number: int, seed: int, beats_part: Part) -> dict[tuple[str, str], list[Part]]:
    """Land one recording; its beats part is another name of the one beats file."""
    name = f"R{number:04d}"
    path = f"beats/recording_id={name}/{beats_part.sha256[:16]}.parquet"
    if not (lake / path).exists():
        (lake / path).parent.mkdir(parents=True, exist_ok=True)
        os.link(lake / beats_part.path, lake / path)
    recording = {
        "recording_id": name,
        "start_utc": FIRST_UTC,
        "end_utc": FIRST_UTC + timedelta(days=DAYS),
        "recorded_h": DAYS * 24.0,
    }
    tables = found_tables(name, seed) | {
        "quarter_hours": quarter_hours(name, seed),
        "recordings": filled("recordings", pl.DataFrame([recording])),
    }
    loads = {
        (table, name): [
            write_part(lake, table, name, rows, fingerprint=FINGERPRINT if "fingerprint" in rows.columns else "")
        ]
        for table, rows in tables.items()
    }
    return loads | {("beats", name): [beats_part._replace(key=name, path=path)]}


def register(recordings: int) -> dict[str, pl.DataFrame]:
    """Two recordings a patient, one therapy event each."""
    names = [f"R{number:04d}" for number in range(recordings)]
    patients = [f"P{number // 2:04d}" for number in range(recordings)]
    codes = sorted(set(patients))
    return {
        "patients": pl.DataFrame({"patient_code": codes, "zone": "Europe/Lisbon"}),
        "wears": pl.DataFrame({"recording_id": names, "device_serial": names, "patient_code": patients}).with_columns(
            pl.lit(FIRST_UTC).alias("from_utc"), pl.lit(None).alias("to_utc")
        ),
        "therapies": pl.DataFrame({"therapy_id": [f"T{code}" for code in codes], "patient_code": codes}).with_columns(
            pl.lit("medication_start").alias("therapy_kind"),
            pl.lit("invented").alias("therapy_detail"),
            pl.lit(FIRST_UTC.date() + timedelta(days=5)).alias("therapy_day"),
            pl.lit(2).alias("settling_days"),
        ),
    }


@contextmanager
def timed(what: str, found: dict[str, float]) -> Iterator[None]:
    """Print the seconds of a block; keep those of the processor, which other work on the host moves less."""
    begin, cpu = time.perf_counter(), time.process_time()
    yield
    found[what] = time.process_time() - cpu
    print(f"{time.perf_counter() - begin:8.2f} s, {found[what]:6.2f} s of the processor  {what}", flush=True)


def publication(folder: Path, recordings: int, found: dict[str, float], what: str) -> None:
    """One publication of the whole programme, in its steps."""
    with timed(f"{what}: all", found):
        with timed(f"{what}: parts in force", found):
            parts = Ledger(folder / "lake").parts()
        standing = Published(folder / "published") if (folder / "published" / "current").exists() else None
        build = TrendBuild(
            folder / "lake",
            parts,
            register=register(recordings),
            settings=SETTINGS,
            fingerprint=FINGERPRINT,
            workdir=folder / "work",
            standing=standing,
        )
        with build:
            with timed(f"{what}: models", found):
                build.run_models("decided")
                build.run_models("staging")
                build.run_models("intermediate")
                for name in COMPUTED_OUTSIDE:
                    build.add(name, pl.DataFrame(schema=frame_schema(schema.PUBLISHED[name])))
                build.run_models("marts")
            with timed(f"{what}: checks", found):
                failures = build.check()
                assert not failures, failures[0]
            with timed(f"{what}: publish", found):
                publish(build, folder / "published", site=lambda _, site: site.mkdir(), stamp={})


def cold(folder: Path, sql: str) -> float:
    """Seconds of one query in a fresh process, start-up apart."""
    program = (
        "import sys,time; from pathlib import Path; from warehouse.published import Published;"
        "p=Published(Path(sys.argv[1])); b=time.perf_counter(); p.frame(sys.argv[2]); print(time.perf_counter()-b)"
    )
    answer = subprocess.run(
        [sys.executable, "-c", program, str(folder / "published"), sql], capture_output=True, text=True, check=True
    )
    return float(answer.stdout)


def median_cold(folder: Path, what: str, sql: str) -> None:
    """Print the median of five cold answers."""
    print(f"{1000 * sorted(cold(folder, sql) for _ in range(5))[2]:8.0f} ms {what}", flush=True)


def best_of(tries: int, work: Callable[[], object]) -> float:
    """Shortest seconds of several tries."""
    seconds = []
    for _ in range(tries):
        begin = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - begin)
    return min(seconds)


def measure(folder: Path, recordings: int) -> dict[str, float]:
    """Land, publish, change one recording, publish again, ask."""
    print(f"--- {recordings} recordings of {DAYS} days")
    found: dict[str, float] = {}
    lake = folder / "lake"
    ledger = Ledger(lake)
    original = write_part(lake, "beats", "R0000", beats(), fingerprint=FINGERPRINT)
    with timed("land all", found):
        loads: dict[tuple[str, str], list[Part]] = {}
        for number in range(recordings):
            loads |= land_recording(lake, number, number, original)
        ledger.commit(loads)
    publication(folder, recordings, found, "first")
    for seed in (999_998, 999_999):  # the second time everything that is done once a process is done
        with timed("commit one recording", found):
            ledger.commit(land_recording(lake, 1, seed, original))
        publication(folder, recordings, found, "again after one changed")
    median_cold(
        folder,
        "daily burden of one patient",
        "SELECT local_day, v_burden_pct FROM wear_days WHERE patient_code = 'P0000'",
    )
    hour = "beat_utc >= '2026-01-05 10:00' AND beat_utc < '2026-01-05 11:00'"
    median_cold(folder, "all beats of one hour", f"FROM beats WHERE recording_id = 'R0001' AND {hour}")
    median_cold(
        folder,
        "all patients by day from hours",
        "SELECT patient_code, hour_utc::DATE, sum(v_beats), sum(all_beats) FROM hours GROUP BY ALL",
    )
    return found


def rebuild_ratio(folder: Path, recordings: int) -> None:
    """Quarter hours of many beats by SQL against one plain scan of the same columns."""
    published = Published(folder / "published")
    names = ", ".join(f"'R{number:04d}'" for number in range(min(recordings, 150)))
    chosen = f"FROM beats WHERE recording_id IN ({names})"
    quarter = "recording_id, time_bucket(INTERVAL 15 MINUTE, beat_utc)"
    plain = best_of(
        2, lambda: published.frame(f"SELECT count(beat_utc), max(rr_before_ms), count(beat_class) {chosen}")
    )
    tallies = best_of(
        2,
        lambda: published.frame(
            f"SELECT {quarter}, count(*), count_if(beat_class = 'V'), sum(rr_before_ms) {chosen} GROUP BY ALL"
        ),
    )
    print(f"{tallies / plain:8.2f}    tallies of {min(recordings, 150) * BEATS / 1e6:.0f} M beats over one plain scan")


def main() -> None:
    """Compare a tenth of the programme with the whole."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--recordings", type=int, default=1000)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as small, tempfile.TemporaryDirectory() as large:
        few = measure(Path(small), max(asked.recordings // 10, 2))
        many = measure(Path(large), asked.recordings)
        again = "again after one changed: all"
        print(f"{many[again] / few[again]:8.2f}    publication after one change, whole programme over a tenth of it")
        rebuild_ratio(Path(large), asked.recordings)


if __name__ == "__main__":
    main()
