"""What the patients of a programme lend each other, and which rows the next publication may take over.

A row that answers "did it change?" follows from the days of its own patient, the settings, and what the programme lends:
how much days usually differ, and the usual baseline. A patient's `evidence` for that follows from his own days alone,
and what is lent is rounded. So as long as it stays, one patient's new days move his own rows only.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from importlib import resources
from importlib.metadata import version
from typing import NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors.change import Seen, usual_level
from detectors.spread import PRIOR_MEDIANS, nothing_lent, programme_weights
from detectors.variability import Usual, usual_of
from flows.change.measures import MEASURES
from flows.settings import ChangeSettings, WearSettings

KEYS = ("patient_code", "therapy_id", "measure")
EXPLAINED = pl.Array(pl.Float64, len(PRIOR_MEDIANS))
EVIDENCE: dict[str, pl.DataType | type[pl.DataType]] = {
    **dict.fromkeys(KEYS, pl.String), "log_level": pl.Float64, "error_variance": pl.Float64, "explained": EXPLAINED
}  # fmt: skip


class Lent(NamedTuple):
    """What the programme lends for one measure."""

    spread: NDArray[np.float64]  # weights of `spread.programme_weights`
    baseline: Usual


class Kept(NamedTuple):
    """Rows of the standing edition for patients of whom all that they follow from is the same."""

    patients: list[str]
    evidence: pl.DataFrame  # of all patients of the standing edition
    rows: Mapping[str, pl.DataFrame]  # of `patients`, by table


NOTHING_KEPT = Kept([], pl.DataFrame(schema=EVIDENCE), {})


def evidence_of(measure: str, events: pl.DataFrame, of: Seen) -> pl.DataFrame:
    """One row per event with the columns of EVIDENCE; `events` are those of `of`, in their order."""
    log_level, error_variance = usual_level(of, nothing_lent())
    return events.select(
        "patient_code",
        "therapy_id",
        measure=pl.lit(measure),
        log_level=pl.Series(log_level),
        error_variance=pl.Series(error_variance),
        explained=pl.Series(of.explained, dtype=EXPLAINED),
    )


def lent(evidence: pl.DataFrame) -> dict[str, Lent]:
    """What all evidence together lends, for every measure."""
    ordered = evidence.sort(KEYS)
    of_measure = {measure.name: ordered.filter(pl.col("measure") == measure.name) for measure in MEASURES}
    return {
        name: Lent(programme_weights(rows["explained"].to_numpy()), usual_of(rows["log_level"], rows["error_variance"]))
        for name, rows in of_measure.items()
    }


def is_same(one: Mapping[str, Lent], other: Mapping[str, Lent]) -> bool:
    """Whether two programmes lend the same."""
    return all(
        np.array_equal(one[name].spread, other[name].spread)
        and np.array_equal(one[name].baseline, other[name].baseline, equal_nan=True)
        for name in one
    )


def made_by(change: ChangeSettings, wear: WearSettings) -> str:
    """Hash of what the rows follow from beside patients: the settings, the source of the statistics, the libraries."""
    digest = hashlib.sha256(repr((change, wear, [version(name) for name in ("numpy", "scipy", "polars")])).encode())
    for room in ("detectors", "flows.change"):
        for file in sorted(resources.files(room).iterdir(), key=lambda file: file.name):
            if file.name.endswith(".py"):
                digest.update(file.read_bytes())
    return digest.hexdigest()
