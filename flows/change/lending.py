"""What the patients of a programme lend each other, and which rows the next publication may take over.

A row that answers "did it change?" follows from the days of its own patient, the settings, and what the programme lends:
how much days usually differ, and the usual baseline. A patient's `evidence` for that follows from his own days alone,
and what is lent is rounded. So as long as it stays, one patient's new days move his own rows only.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
import polars as pl

from detectors.change import Seen, usual_level
from detectors.spread import GRID, UsualSpread, nothing_lent, programme_spread
from detectors.variability import UsualLevel, usual_of
from flows.change.measures import MEASURES, Measure
from warehouse.schema import PUBLISHED

KEYS = ("patient_code", "therapy_id", "measure")
FIT = pl.Array(pl.Float64, len(GRID))
EVIDENCE: dict[str, pl.DataType | type[pl.DataType]] = {
    **dict.fromkeys(KEYS, pl.String), "log_level": pl.Float64, "error_variance": pl.Float64, "fit": FIT
}  # fmt: skip


class Lent(NamedTuple):
    """What the programme lends for one measure."""

    spread: UsualSpread
    baseline: UsualLevel


class Kept(NamedTuple):
    """Rows of the standing edition for patients of whom all that they follow from is the same."""

    patients: list[str]
    evidence: pl.DataFrame  # of all patients of the standing edition
    rows: Mapping[str, pl.DataFrame]  # of `patients`, by table


NOTHING_KEPT = Kept([], pl.DataFrame(schema=EVIDENCE), {})


def evidence_of(measure: str, events: pl.DataFrame, of: Seen) -> pl.DataFrame:
    """One row per event with the columns of EVIDENCE; `events` are those of `of`, in their order."""
    log_level, error_variance = usual_level(of, nothing_lent(of.typical_sd))
    return events.select(
        "patient_code",
        "therapy_id",
        measure=pl.lit(measure),
        log_level=pl.Series(log_level),
        error_variance=pl.Series(error_variance),
        fit=pl.Series(of.fit, dtype=FIT),
    )


def all_evidence(kept: Kept, fresh: pl.DataFrame) -> pl.DataFrame:
    """Evidence of kept patients and of those that were looked at."""
    return pl.concat([kept.evidence.filter(pl.col("patient_code").is_in(kept.patients)), fresh])


def with_kept(kept: Kept, table: str, fresh: pl.DataFrame) -> pl.DataFrame:
    """Rows of a published table of kept patients and of those that were looked at, in the order of its key."""
    rows = [kept.rows[table], fresh] if kept.patients else [fresh]
    return pl.concat(rows).sort(PUBLISHED[table].key)


def lent(evidence: pl.DataFrame) -> dict[str, Lent]:
    """What all evidence together lends, for every measure."""
    ordered = evidence.sort(KEYS)
    return {measure.name: _lent_of(measure, ordered.filter(pl.col("measure") == measure.name)) for measure in MEASURES}


def _lent_of(measure: Measure, evidence: pl.DataFrame) -> Lent:
    spread = programme_spread(evidence["fit"].to_numpy(), GRID * measure.day_sd, measure.day_sd)
    return Lent(spread, usual_of(evidence["log_level"], evidence["error_variance"]))


def is_same(one: Mapping[str, Lent], other: Mapping[str, Lent]) -> bool:
    """Whether two programmes lend the same."""
    return all(
        np.array_equal([*one[name].spread, *one[name].baseline], [*other[name].spread, *other[name].baseline], True)
        for name in one
    )
