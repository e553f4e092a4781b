"""CPU seconds of all change tables of a programme, 60 days of 24 hours per patient.

    python -m tests.benchmarks.changes_scale [PATIENTS ...]

Printed beside the whole programme: the next publication after new days of one patient and of a tenth of the patients,
who alone are computed while the programme lends the same (`flows.change.lending`).
"""

from __future__ import annotations

import sys
import time
from datetime import date, timedelta
from typing import Any

import numpy as np
import polars as pl

from flows.change import trends
from flows.change.lending import Kept, is_same, lent
from flows.change.trends import PER_PATIENT
from flows.settings import ChangeSettings, WearSettings

EVENT = date(2026, 3, 20)
BEFORE_D, SETTLING_D, DAYS = 28, 7, 60
PERIODS = {"baseline": (-28, -1), "settling": (0, 6), "after": (7, 96)}
DAY_SD, PATIENT_SD = 0.6, 1.5  # of ln ventricular beats per hour


def programme(patients: int) -> dict[str, Any]:
    """Fields of `trends.Inputs` for patients with one ablation each, some rich in ectopy and some without."""
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


def next_day(made: trends.Inputs, patients: list[str]) -> trends.Inputs:
    """The same programme in which these patients had a fifth more ectopy on every day."""
    is_one = pl.col("patient_code").is_in(patients)
    v_beats = pl.when(is_one).then(pl.col("v_beats") + pl.col("v_beats") // 5).otherwise("v_beats")
    return made._replace(local_hours=made.local_hours.with_columns(v_beats=v_beats))


def kept(standing: trends.Tables, patients: list[str]) -> Kept:
    """What the next publication takes over of these patients."""
    of_kept = pl.col("patient_code").is_in(patients)
    return Kept(patients, standing.evidence, {name: standing.published[name].filter(of_kept) for name in PER_PATIENT})


def main(sizes: list[int]) -> None:
    """Print three lines per number of patients."""
    settings = ChangeSettings(), WearSettings()
    for patients in sizes:
        made = trends.Inputs(**programme(patients))
        codes = made.therapies["patient_code"].to_list()
        began = time.process_time()
        standing = trends.tables(made, *settings)
        whole_s = time.process_time() - began
        rows = standing.published["changes"].height
        print(f"{patients} patients, {rows} rows of changes: {whole_s:.1f} CPU s", flush=True)
        for new in (codes[:1], codes[: patients // 10]):
            tonight = next_day(made, new)
            began = time.process_time()
            over = trends.tables(tonight, *settings, kept(standing, codes[len(new) :]))
            part_s = time.process_time() - began
            is_lent = "the same" if is_same(lent(standing.evidence), lent(over.evidence)) else "other spreads"
            print(f"  new days of {len(new)}: {part_s:.1f} CPU s, {part_s / whole_s:.2f} of the whole; ", end="")
            print(f"the programme lends {is_lent}", flush=True)


if __name__ == "__main__":
    main([int(size) for size in sys.argv[1:]] or [250, 1000])
