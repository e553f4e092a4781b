"""Slices: the rows of a group of patients, so that a publication writes only the groups of which something changed.

A large table (`schema.SLICED`) lies in one Parquet file per slice. The number of slices grows with the programme, so
that a slice holds about as many patients in a small one as in a large one.
"""

from __future__ import annotations

import zlib

_MOST_PATIENTS = 16  # a slice of this many 14-day recordings is written in tens of milliseconds


def slice_count(patients: int) -> int:
    """Number of slices of a programme, a power of two: 1 up to 16 patients, 2 up to 32, 4 up to 64."""
    return 1 << (max(patients - 1, 0) // _MOST_PATIENTS).bit_length()


def slice_of(patient_code: str, count: int) -> int:
    """Slice of a patient out of `count`: by a checksum of the code, so that no other patient moves it."""
    return zlib.crc32(patient_code.encode()) % count
