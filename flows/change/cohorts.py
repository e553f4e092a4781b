"""The `cohort` table: what happened to all patients of one kind of therapy, per measure and success limit."""

from __future__ import annotations

from typing import Any

import polars as pl

from detectors.change import FELL, ROSE, TOO_LITTLE
from detectors.cohort import geometric_mean_ratio, wilson_share
from flows.change.measures import ECTOPY
from warehouse.parts import polars_type
from warehouse.schema import COLUMNS, PUBLISHED

LIMITS_PCT = (50.0, 70.0, 80.0, 90.0)
BEATS_IN_UPPER_END = 6  # half a beat for none: the upper end of a ratio of 0 stands for 3 beats (exact 95 % bound)


def cohort(compared: pl.DataFrame, therapies: pl.DataFrame, success_limit_pct: float) -> pl.DataFrame:
    """Rows of `schema.PUBLISHED["cohort"]`: every therapy kind, ectopy measure and limit, the programme's among them.

    Only the first therapy event of a kind counts for a patient. Events without a verdict are shown, never imputed.
    """
    kinds = therapies.select("therapy_id", "therapy_kind", "therapy_day")
    first = (
        compared.join(kinds, on="therapy_id")
        .sort("therapy_day", "therapy_id")
        .unique(["patient_code", "therapy_kind", "measure"], keep="first", maintain_order=True)
    )
    return cohort_rows("cohort", first, success_limit_pct)


def cohort_rows(table: str, compared: pl.DataFrame, success_limit_pct: float) -> pl.DataFrame:
    """Rows of the published `table`, whose key names the groups and the limit, from comparisons with those groups."""
    groups = [name for name in PUBLISHED[table].key if name != "limit_pct"]
    limits = sorted({*LIMITS_PCT, success_limit_pct})
    ectopy = compared.filter(pl.col("measure").is_in(ECTOPY)).sort(groups)
    rows = [
        dict(zip(groups, key, strict=True)) | _counts(of_group) | _spread(of_group) | _responders(of_group, limit)
        for key, of_group in ectopy.group_by(groups, maintain_order=True)
        for limit in limits
    ]
    types = {name: polars_type(COLUMNS[name].type) for name in PUBLISHED[table].columns}
    return pl.DataFrame({name: [row[name] for row in rows] for name in types}, schema=types)


def _judged(of_group: pl.DataFrame) -> pl.DataFrame:
    return of_group.filter((pl.col("verdict") != TOO_LITTLE) & pl.col("ratio").is_not_null())


def _counts(of_group: pl.DataFrame) -> dict[str, Any]:
    verdict = of_group["verdict"]
    return {
        "patients": of_group.height,
        "evaluable_patients": _judged(of_group).height,
        "fell_patients": (verdict == FELL).sum(),
        "rose_patients": (verdict == ROSE).sum(),
    }


def _spread(of_group: pl.DataFrame) -> dict[str, Any]:
    judged = _judged(of_group)
    of_none = pl.col("ratio_high") / BEATS_IN_UPPER_END
    ratios = judged.select(pl.when(pl.col("ratio") > 0).then("ratio").otherwise(of_none))["ratio"].to_numpy()
    mean = geometric_mean_ratio(ratios)
    named = {"mean_ratio": mean.ratio, "mean_ratio_low": mean.low, "mean_ratio_high": mean.high}
    return {name: None if value != value else value for name, value in named.items()}


def _responders(of_group: pl.DataFrame, limit_pct: float) -> dict[str, Any]:
    judged = _judged(of_group)
    count = int((judged["change_pct"] <= -limit_pct).sum())
    share = wilson_share(count, judged.height)
    named = {"responder_pct": share.share, "responder_pct_low": share.low, "responder_pct_high": share.high}
    known = {name: None if value != value else 100 * value for name, value in named.items()}
    return {"limit_pct": limit_pct, "responders": count} | known
