"""A lead whose samples may be wider than 16 bit or not be counts at all, and its fit into int16 counts."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from flows.readers.recording import Finding, Stretch, finding

MISSING = -32768  # stored for a missing sample of a fitted lead
_LARGEST = 32767
_BLOCK = 2**18


class Wide(NamedTuple):
    """Samples of any number type with their scale; missing samples are NaN or `missing_count`."""

    read: Callable[[int, int], NDArray[Any]]
    stretches: tuple[Stretch, ...]
    mv_per_count: float
    count_at_zero_mv: float
    rails: tuple[int, int]
    missing_count: int | None


def fitted(lead: Wide) -> tuple[Wide, tuple[Finding, ...]]:
    """The lead in int16 counts: shifted by whole counts and divided by a power of two only as far as it must be.

    One pass over the samples finds their range. Whole numbers that fit stay as they are.
    """
    low, high, n_missing = _range(lead)
    findings = [finding("missing_samples", f"{n_missing} samples")] if n_missing else []
    shift = 0 if low >= -_LARGEST and high <= _LARGEST else round((low + high) / 2)
    divisor = 1
    while max(high - shift, shift - low) / divisor > _LARGEST:
        divisor *= 2
    if divisor > 1:
        findings.append(finding("resolution_reduced", f"{divisor} counts of the file make one"))

    def read(a: int, b: int) -> NDArray[np.int16]:
        counts = np.empty(b - a, np.int16)
        for first in range(a, b, _BLOCK):
            raw = lead.read(first, min(first + _BLOCK, b))
            missing = _missing(raw, lead.missing_count)
            scaled = np.rint((np.where(missing, 0, raw).astype(np.float64) - shift) / divisor)
            counts[first - a : first - a + raw.size] = np.where(missing, MISSING, scaled)
        return counts

    def rail(count: int) -> int:
        return int(np.clip(round((count - shift) / divisor), -_LARGEST, _LARGEST))

    fit = Wide(
        read,
        lead.stretches,
        lead.mv_per_count * divisor,
        (lead.count_at_zero_mv - shift) / divisor,
        (rail(lead.rails[0]), rail(lead.rails[1])),
        MISSING,
    )
    return fit, tuple(findings)


def _missing(raw: NDArray[Any], missing_count: int | None) -> NDArray[np.bool_]:
    if np.issubdtype(raw.dtype, np.floating):
        return ~np.isfinite(raw)
    return raw == missing_count if missing_count is not None else np.zeros(raw.shape, np.bool_)


def _range(lead: Wide) -> tuple[float, float, int]:
    """Lowest and highest sample that is not missing, and how many are missing."""
    low, high, n_missing = np.inf, -np.inf, 0
    total = sum(stretch.n_samples for stretch in lead.stretches)
    for a in range(0, total, _BLOCK):
        raw = lead.read(a, min(a + _BLOCK, total))
        present = raw[~_missing(raw, lead.missing_count)]
        n_missing += raw.size - present.size
        if present.size:
            low, high = min(low, float(present.min())), max(high, float(present.max()))
    return (low, high, n_missing) if np.isfinite(low) else (0.0, 0.0, n_missing)
