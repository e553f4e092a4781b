"""One scale for all parts of a recording: exporters that set every file's range by its own extremes write a new one
each time, often for the same counts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from flows.readers.codes import Refused
from flows.readers.recording import Opened, finding

_LARGEST_FACTOR = 64.0  # beyond this one of the two scales is wrong or too coarse
_LARGEST_CLIP = 1.01  # how far samples may pass 16 bit and be held there: a converter's rail, rounded otherwise
_LOWEST, _HIGHEST = -32768, 32767


class Scale(NamedTuple):
    """The scale of a recording's first part."""

    lead: str
    mv_per_count: float
    count_at_zero_mv: float
    missing_count: int | None

    @classmethod
    def of(cls, piece: Mapping[str, Any]) -> Scale:
        """From a row of `pieces`."""
        return cls(*(piece[name] for name in cls._fields))


def scaled_like(opened: Opened, scale: Scale) -> Opened:
    """The opened lead in the counts of an earlier part, to the nearest count, with a finding.

    Unchanged where the scales are equal, and where they are too far apart or the lead is another (then joining refuses).
    Reading raises Refused where the samples do not fit into 16 bit.
    """
    same = (opened.mv_per_count, opened.count_at_zero_mv) == (scale.mv_per_count, scale.count_at_zero_mv)
    factor = opened.mv_per_count / scale.mv_per_count
    if same or opened.lead != scale.lead or not 1 / _LARGEST_FACTOR <= factor <= _LARGEST_FACTOR:
        return opened

    def counts(old: NDArray[np.int16]) -> NDArray[np.float64]:
        new: NDArray[np.float64] = np.rint((old - opened.count_at_zero_mv) * factor + scale.count_at_zero_mv)
        return new

    low, high = sorted(counts(np.array(opened.rails)))
    missing = opened.missing_count
    if missing is not None and scale.missing_count is not None:
        missing = scale.missing_count

    def read(a: int, b: int) -> NDArray[np.int16]:
        old = opened.read(a, b)
        is_missing = old == opened.missing_count if missing is not None else np.zeros(old.shape, np.bool_)
        new = np.where(is_missing, missing or 0, counts(old))
        if (np.abs(new) > _HIGHEST * _LARGEST_CLIP).any():
            raise Refused(
                "does_not_fit_recording",
                f"samples at {opened.mv_per_count:g} mV a count pass the range of the wear's first part, "
                f"{scale.mv_per_count:g} mV a count. Export all parts of a wear with one scale.",
            )
        return np.clip(new, _LOWEST, _HIGHEST).astype(np.int16)

    return replace(
        opened,
        mv_per_count=scale.mv_per_count,
        count_at_zero_mv=scale.count_at_zero_mv,
        rails=(int(max(low, _LOWEST)), int(min(high, _HIGHEST))),
        missing_count=missing,
        read=read,
        findings=(*opened.findings, finding("rescaled_to_recording", f"1 count was {opened.mv_per_count:g} mV")),
    )
