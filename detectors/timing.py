"""When beats come: the intervals around each, which are early, on time, before a pause, and in a fast rhythm."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import rhythm

EARLY = 0.87  # of the usual interval: a family of such beats is early
ON_TIME = 0.10  # either side of the usual interval
S_EARLY = 0.885  # of the usual interval
S_EARLY_AFTER_CHANGE = 0.85  # of the usual interval of 12 beats ago
S_SUDDEN = 0.90  # of the interval before
AF_IRREGULARITY = 0.55
LEAN_CAP = 1.0


class Timing(NamedTuple):
    """RR around each beat; arrays of shape (n_beats,)."""

    before_ms: NDArray[np.float32]  # NaN after a gap
    after_ms: NDArray[np.float32]  # NaN before a gap
    usual_ms: NDArray[np.float32]

    @property
    def before(self) -> NDArray[np.float32]:
        """RR before over the usual interval."""
        return self.before_ms / self.usual_ms

    @property
    def after(self) -> NDArray[np.float32]:
        """RR after over the usual interval."""
        return self.after_ms / self.usual_ms


class Marks(NamedTuple):
    """What the timing says about each beat, whatever its shape; arrays of shape (n_beats,)."""

    early: NDArray[np.bool_]  # after a short interval or in a fast stretch that began at once
    on_time: NDArray[np.bool_]  # on both sides
    lean: NDArray[np.float32]  # log of RR after over RR before: above 0 early with a pause, below 0 late


def marks(timing: Timing) -> Marks:
    """Early, on time, and how a beat leans."""
    everything = np.ones(timing.before_ms.size, dtype=bool)
    in_fast = fast(timing, is_regular(timing, everything), is_early(timing), everything)
    return Marks(
        (timing.before < EARLY) | in_fast, keeps_time(timing) & ~in_fast, _lean(timing.before_ms, timing.after_ms)
    )


def keeps_time(timing: Timing) -> NDArray[np.bool_]:
    """Beats with usual intervals on both sides, shape (n_beats,)."""
    return (np.abs(timing.before - 1) < ON_TIME) & (np.abs(timing.after - 1) < ON_TIME)


def _lean(before_ms: NDArray[np.float32], after_ms: NDArray[np.float32]) -> NDArray[np.float32]:
    return np.clip(np.nan_to_num(np.log(after_ms / before_ms)), -LEAN_CAP, LEAN_CAP)


def lean_of_stretches(timing: Timing, lean: NDArray[np.float32], is_odd: NDArray[np.bool_]) -> NDArray[np.float32]:
    """How the whole stretch of odd beats that each odd beat lies in leans, shape (n_beats,); its own lean for others.

    A run begins early and ends with a pause; the beats within it need not.
    """
    around = np.concatenate([[False], is_odd, [False]])
    first = np.flatnonzero(is_odd & ~around[:-2])
    last = np.flatnonzero(is_odd & ~around[2:])
    out = lean.copy()
    out[is_odd] = np.repeat(_lean(timing.before_ms[first], timing.after_ms[last]), last - first + 1)
    return out


def fast(
    timing: Timing, regular: NDArray[np.bool_], may_begin: NDArray[np.bool_], may_be: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Beats of stretches of short intervals that begin at once, in regular rhythm; one beat is a stretch."""
    last_ms = np.concatenate([timing.before_ms[:1], timing.before_ms[:-1]])
    onset = may_begin & regular & (timing.before_ms < S_SUDDEN * last_ms)
    reference_ms = np.maximum(timing.usual_ms, rhythm.earlier_rr_ms(timing.usual_ms))
    return rhythm.fast_stretches(timing.before_ms, reference_ms, onset) & may_be & regular


def is_regular(timing: Timing, is_plain: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Where the intervals between plain beats are not as irregular as in fibrillation, shape (n_beats,)."""
    return rhythm.irregularity(timing.before_ms, is_plain) < AF_IRREGULARITY


def is_early(timing: Timing) -> NDArray[np.bool_]:
    """Early against the intervals near by or those of 12 beats ago, shape (n_beats,)."""
    earlier_ms = rhythm.earlier_rr_ms(timing.usual_ms)
    near, past = S_EARLY * timing.usual_ms, S_EARLY_AFTER_CHANGE * earlier_ms
    return (timing.before_ms < near) | (timing.before_ms < past)
