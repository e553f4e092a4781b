"""The tables of a trial: visits with their wear days and protocol, visits against the first, responders.

A day belongs to the visit whose target is nearest within that visit's window, at equal distance to the later one
(common practice, no source). Missing visits keep their row; nothing is imputed. Comparing arms is left to the trial's
statistician: counts and analysable hours stand in `visits`, so that any rate model can take them up.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import polars as pl

from flows.change.cohorts import cohort_rows
from flows.change.lending import NOTHING_KEPT, Kept
from flows.change.trends import Inputs, Tables, changes
from flows.settings import ChangeSettings, TrialSettings, WearSettings
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

MASKED, NO_ARM = "masked", "none"
_KEYS = ("patient_code", "visit")


def visits(planned: pl.DataFrame, wear_days: pl.DataFrame, trial: TrialSettings) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["visits"]` for the planned visits of the register.

    Arms are masked unless the programme's settings give a reason to show them.
    """
    days = _days_of_visits(planned)
    spans = days.group_by(_KEYS).agg(first_day=pl.col("local_day").min(), last_day=pl.col("local_day").max())
    worn = days.join(wear_days, on=["patient_code", "local_day"])
    is_valid = pl.col("analysable_h") >= trial.min_analysable_h_per_day
    counted = worn.group_by(_KEYS).agg(
        wear_days=pl.len(),
        valid_days=is_valid.sum(),
        **{name: pl.col(name).filter(is_valid).sum() for name in ("analysable_h", "v_beats", "s_beats", "all_beats")},
    )
    arm = pl.col("arm") if trial.unmask_reason else pl.when(pl.col("arm").is_not_null()).then(pl.lit(MASKED))
    table = (
        planned.with_columns(arm=arm)
        .join(spans, on=_KEYS, how="left")
        .join(counted, on=_KEYS, how="left")
        .with_columns(pl.col("wear_days", "valid_days", "analysable_h").fill_null(0))
        .with_columns(
            meets_protocol=pl.col("valid_days") >= trial.min_days_per_visit,
            v_burden_pct=_ratio(100 * pl.col("v_beats"), "all_beats"),
            s_burden_pct=_ratio(100 * pl.col("s_beats"), "all_beats"),
            v_per_h=_ratio(pl.col("v_beats"), "analysable_h"),
        )
        .sort("patient_code", "target_day", "visit")
    )
    reasons = [_reason(row, trial) for row in table.iter_rows(named=True)]
    return _published("visits", table.with_columns(reason=pl.Series(reasons, dtype=pl.String)))


def visit_changes(
    of_visits: pl.DataFrame,
    local_hours: pl.DataFrame,
    wear_days: pl.DataFrame,
    change: ChangeSettings,
    trial: TrialSettings,
    kept: Kept = NOTHING_KEPT,
) -> tuple[pl.DataFrame, Tables]:
    """Rows of `schema.PUBLISHED["visit_changes"]`: every visit against the patient's first, as events are compared.

    Beside them the comparison with all columns of `changes`, of which the next publication may take over rows (`kept`).
    """
    ordered = of_visits.sort("patient_code", "target_day")
    first = ordered.unique("patient_code", keep="first", maintain_order=True)
    later = ordered.join(first, on=_KEYS, how="anti").select(*_KEYS, "arm", "first_day", "last_day")
    spans = first.select("patient_code", "first_day", "last_day")
    before = later.select(*_KEYS).join(spans, on="patient_code").with_columns(period=pl.lit("baseline"))
    after = later.select(*_KEYS, "first_day", "last_day").with_columns(period=pl.lit("after"))
    inputs = Inputs(
        local_hours=local_hours,
        wear_days=wear_days.with_columns(is_valid_day=pl.col("analysable_h") >= trial.min_analysable_h_per_day),
        periods=pl.concat([before, after]).rename({"visit": "therapy_id"}),
        therapies=later.rename({"visit": "therapy_id"}),
    )
    wear = WearSettings(trial.min_analysable_h_per_day, trial.min_days_per_visit)
    compared = changes(inputs, change, wear, kept)
    rows = compared.published["changes"].rename({"therapy_id": "visit"})
    return _published("visit_changes", rows.join(later, on=_KEYS)), compared


def unchanged(of_visits: pl.DataFrame, standing: pl.DataFrame) -> list[str]:
    """Patients whose visits are those of the `standing` edition's table, column by column."""
    same = of_visits.join(standing, on=of_visits.columns, how="inner", nulls_equal=True)
    counts = [rows.group_by("patient_code").len() for rows in (of_visits, standing, same)]
    whole = counts[0].join(counts[1], on=["patient_code", "len"]).join(counts[2], on=["patient_code", "len"])
    return whole["patient_code"].sort().to_list()


def responders(compared: pl.DataFrame, success_limit_pct: float) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["responders"]` from `visit_changes`; masked arms are counted together."""
    return cohort_rows("responders", compared.with_columns(pl.col("arm").fill_null(NO_ARM)), success_limit_pct)


def _published(table: str, frame: pl.DataFrame) -> pl.DataFrame:
    return frame.select(pl.col(name).cast(polars_type(COLUMNS[name].type)) for name in PUBLISHED[table].columns)


def _days_of_visits(planned: pl.DataFrame) -> pl.DataFrame:
    """One row per patient and calendar day within a window, with the visit it belongs to."""
    first = pl.col("target_day") - pl.duration(days=pl.col("days_before"))
    last = pl.col("target_day") + pl.duration(days=pl.col("days_after"))
    return (
        planned.with_columns(local_day=pl.date_ranges(first, last))
        .explode("local_day")
        .with_columns(distance=(pl.col("local_day") - pl.col("target_day")).abs())
        .sort("patient_code", "local_day", "distance", "target_day", descending=[False, False, False, True])
        .unique(["patient_code", "local_day"], keep="first", maintain_order=True)
        .select(*_KEYS, "local_day")
    )


def _ratio(above: pl.Expr, below: str) -> pl.Expr:
    return pl.when(pl.col(below) > 0).then(above / pl.col(below))


def _reason(row: Mapping[str, Any], trial: TrialSettings) -> str:
    if row["wear_days"] == 0:
        return "No wear within the window."
    needed = f"{trial.min_days_per_visit} with at least {trial.min_analysable_h_per_day:g} analysable hours are needed"
    verb = "meets" if row["meets_protocol"] else "fails"
    return f"{row['valid_days']} of {row['wear_days']} wear days count; {needed}: {verb} the protocol."
