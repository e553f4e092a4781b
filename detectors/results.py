"""The values that detectors return: named tuples of equally long arrays, column names as in the published tables.

Nothing here computes. A missing number is NaN; flows turn it into NULL when it lands.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

BEAT_CLASSES = ("N", "S", "V", "F", "Q")
PAUSE_KINDS = ("", "full", "reset", "interpolated")
EPISODE_KINDS = ("couplet", "run", "sv_run", "bigeminy", "trigeminy", "pause", "irregular")
QUALITY_REASONS = ("flat", "rail", "noise", "lead_off", "missing")

SHAPE_FS_HZ = 125.0
SHAPE_BEFORE_MS = 280.0
SHAPE_AFTER_MS = 440.0


class Segment(NamedTuple):
    """A gap-free stretch of samples that can be read piece by piece.

    `read(a, b)` returns samples a (included) to b (excluded) as int16 counts, shape (b - a,).
    """

    n_samples: int
    read: Callable[[int, int], NDArray[np.int16]]


class Beats(NamedTuple):
    """One entry per detected QRS, ordered by segment and sample. All arrays have shape (n_beats,)."""

    segment: NDArray[np.int16]
    sample: NDArray[np.int64]  # R peak, index within the segment
    rr_before_ms: NDArray[np.float32]  # NaN after a gap
    rr_after_ms: NDArray[np.float32]  # NaN before a gap
    beat_class: NDArray[np.str_]  # dtype '<U1', one of BEAT_CLASSES
    class_probability: NDArray[np.float32]
    family: NDArray[np.int16]  # row in Families, -1 for none
    qrs_width_ms: NDArray[np.float32]
    amplitude_mv: NDArray[np.float32]
    polarity: NDArray[np.int8]
    coupling_ms: NDArray[np.float32]  # RR before, for premature beats after one that is not ectopic; NaN for others
    prematurity_pct: NDArray[np.float32]
    pause_kind: NDArray[np.int8]  # index into PAUSE_KINDS
    r_on_t_index: NDArray[np.float32]
    is_escape: NDArray[np.bool_]
    is_analysable: NDArray[np.bool_]


class Families(NamedTuple):
    """One entry per shape family; the row number is the family number. Arrays have shape (n_families,)."""

    family_class: NDArray[np.str_]
    beat_count: NDArray[np.int64]
    share_pct: NDArray[np.float64]
    qrs_width_ms: NDArray[np.float32]
    amplitude_mv: NDArray[np.float32]
    mean_coupling_ms: NDArray[np.float32]
    coupling_spread_ms: NDArray[np.float32]
    shape_mv: NDArray[np.float32]  # shape (n_families, 90): SHAPE_BEFORE_MS..SHAPE_AFTER_MS at SHAPE_FS_HZ


class Episodes(NamedTuple):
    """One entry per episode, ordered by segment and first sample. Arrays have shape (n_episodes,)."""

    episode_kind: NDArray[np.str_]  # one of EPISODE_KINDS
    segment: NDArray[np.int16]
    first_sample: NDArray[np.int64]
    last_sample: NDArray[np.int64]
    beat_count: NDArray[np.int64]
    duration_s: NDArray[np.float64]
    rate_bpm: NDArray[np.float32]


class QualityWindows(NamedTuple):
    """One entry per stretch that is not analysable, disjoint and ordered. Arrays have shape (n_windows,)."""

    segment: NDArray[np.int16]
    first_sample: NDArray[np.int64]
    last_sample: NDArray[np.int64]  # the last sample that belongs to the window
    quality_reason: NDArray[np.str_]  # one of QUALITY_REASONS


class Finding(NamedTuple):
    """Something about the whole recording that a reader of its numbers must know."""

    code: str  # lead_not_limb_like, lead_upside_down, low_amplitude, mostly_noise or no_analysable_time
    detail: str


class Analysis(NamedTuple):
    """Everything that one recording yields."""

    beats: Beats
    families: Families
    episodes: Episodes
    quality: QualityWindows
    findings: tuple[Finding, ...]
    fs_hz: float
    segment_samples: tuple[int, ...]  # length of each segment
    analysable_s: float
