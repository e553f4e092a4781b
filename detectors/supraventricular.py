"""Supraventricular beats: early beats of normal shape, by rules."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors import timing
from detectors.timing import Timing


def supraventricular(beat_timing: Timing, is_v: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Early beats that are not ventricular, and the fast rhythms that such a beat begins, shape (n_beats,).

    Early means against the intervals near by or those of 12 beats ago, and at once: not a rate that rises beat by beat,
    not the beat after a ventricular one, and not where the rhythm is irregular as in atrial fibrillation.
    """
    follows_v = np.concatenate([is_v[:1], is_v[:-1]])
    return timing.fast(beat_timing, ~is_v, ~is_v & ~follows_v & timing.is_early(beat_timing), ~is_v)
