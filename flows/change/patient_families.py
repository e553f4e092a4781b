"""Families of each patient's recordings under one numbering, so that a focus can be followed from before to after."""

from __future__ import annotations

import numpy as np
import polars as pl

from detectors.matching import match_families
from warehouse.parts import empty_frame, frame_schema
from warehouse.schema import PUBLISHED


def patient_families(family_shapes: pl.DataFrame) -> pl.DataFrame:
    """The published table of that name, from rows of the model `family_shapes`."""
    described = PUBLISHED["patient_families"]
    ordered = family_shapes.sort("patient_code", "start_utc", "recording_id", "family")
    of_patient = [_numbered(rows) for rows in ordered.partition_by("patient_code", maintain_order=True)]
    return pl.concat([empty_frame(described), *of_patient])


def _numbered(families: pl.DataFrame) -> pl.DataFrame:
    """Families of one patient, ordered by time, with their number in the patient."""
    found = match_families(
        families["recording_id"].rle_id().to_numpy(),
        families["family_class"].to_numpy(),
        np.array(families["shape_mv"].to_list(), dtype=np.float32),
        families["beat_count"].to_numpy(),
    )
    numbers = pl.Series("patient_family", found.patient_family), pl.Series("likeness", found.likeness).fill_nan(None)
    types = frame_schema(PUBLISHED["patient_families"])
    return families.with_columns(numbers).select(pl.col(name).cast(kind) for name, kind in types.items())
