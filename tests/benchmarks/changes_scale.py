"""CPU seconds of all change tables of a programme, 60 days of 24 hours per patient.

    python -m tests.benchmarks.changes_scale [PATIENTS ...]

All patients are computed anew whenever one of them has new days: the spread between days is borrowed from the whole
programme, so that one patient's days may move every interval.
"""

from __future__ import annotations

import sys
import time
from datetime import date, timedelta
from typing import Any

import numpy as np
import polars as pl

from flows.change import trends
from flows.settings import ChangeSettings, WearSettings

EVENT = date(2026, 3, 20)
BEFORE_D, SETTLING_D, DAYS = 28, 7, 60
PERIODS = {"baseline": (-28, -1), "settling": (0, 6), "after": (7, 96)}
DAY_SD, PATIENT_SD = 0.6, 1.5  # of ln ventricular beats per hour


def programme(patients: int) -> dict[str, Any]:
    """Arguments of `trends.tables` for patients with one ablation each, some rich in ectopy and some without."""
    rng = np.random.default_rng(1)
    usual = 3 + PATIENT_SD * rng.standard_normal((patients, 1, 1))
    log_level = usual + DAY_SD * rng.standard_normal((patients, DAYS, 1))
    v_beats = rng.poisson(np.exp(log_level), (patients, DAYS, 24)).ravel()
    runs = rng.poisson(v_beats / 400)
    patient, day, hour = (index.ravel() for index in np.indices((patients, DAYS, 24)))
    worn = np.arange(DAYS) - BEFORE_D
    worn[BEFORE_D:] += SETTLING_D
    hours = pl.DataFrame({
        "patient_code": np.char.mod("P%05d", patient), "clock_hour": hour, "analysable_s": 3600.0, "v_beats": v_beats,
        "local_day": pl.Series([EVENT + timedelta(int(d)) for d in worn])[day], "s_beats": rng.poisson(3, len(day)),
        "all_beats": 4200, "mean_rate_bpm": rng.normal(70, 5, len(day)), "couplets": rng.poisson(v_beats / 50),
        "runs": runs, "longest_run_beats": np.where(runs, 2 + rng.geometric(0.4, len(day)), 0),
        "fastest_run_bpm": rng.normal(140, 15, len(day)), "bigeminy_s": 0.0,
    }).with_columns(fastest_run_bpm=pl.when(pl.col("runs") > 0).then("fastest_run_bpm"))  # fmt: skip
    days = hours.select("patient_code", "local_day").unique().with_columns(analysable_h=24.0, is_valid_day=True)
    events = hours.select("patient_code").unique().sort("patient_code").with_columns(
        therapy_id="patient_code", therapy_kind=pl.lit("ablation"), therapy_day=pl.lit(EVENT)
    )  # fmt: skip
    spans = [
        events.select("patient_code", "therapy_id", period=pl.lit(name), first_day=pl.lit(EVENT + timedelta(first)),
                      last_day=pl.lit(EVENT + timedelta(last)))
        for name, (first, last) in PERIODS.items()
    ]  # fmt: skip
    return {"local_hours": hours, "wear_days": days, "periods": pl.concat(spans), "therapies": events}


def main(sizes: list[int]) -> None:
    """Print one line per number of patients."""
    for patients in sizes:
        made = programme(patients)
        began = time.process_time()
        tables = trends.tables(trends.Inputs(**made), ChangeSettings(), WearSettings()).published
        seconds = time.process_time() - began
        print(f"{patients} patients, {tables['changes'].height} rows of changes: {seconds:.1f} CPU s", flush=True)


if __name__ == "__main__":
    main([int(size) for size in sys.argv[1:]] or [250, 1000])
