"""When beats come: marks of each beat, and how the run leans that a beat lies in."""

from __future__ import annotations

import numpy as np

from detectors import timing
from detectors.rhythm import usual_rr_ms


def chain(rr_ms: list[float]) -> timing.Timing:
    before = np.array(rr_ms, dtype=np.float32)
    after = np.append(before[1:], np.nan).astype(np.float32)
    return timing.Timing(before, after, usual_rr_ms(before, after))


def test_early_beat_with_a_pause_leans_and_one_on_time_does_not() -> None:
    """The lean is the log of the interval after over the one before; unknown neighbours say nothing."""
    marks = timing.marks(chain([800] * 20 + [500, 1100] + [800] * 20))
    assert np.flatnonzero(marks.early).tolist() == [20]
    np.testing.assert_allclose(marks.lean[20], np.log(1100 / 500), rtol=1e-6)
    assert marks.on_time[:19].all() and not marks.on_time[20]
    assert marks.lean[-1] == 0


def test_beats_of_a_run_share_the_lean_of_the_run() -> None:
    """A run begins early and ends with a pause, so all its beats lean; others keep their own lean."""
    rhythm = chain([800] * 20 + [450, 400, 400, 1200] + [800] * 20)
    is_odd = np.zeros(44, dtype=bool)
    is_odd[20:23] = True
    lean = timing.marks(rhythm).lean
    of_runs = timing.lean_of_stretches(rhythm, lean, is_odd)
    np.testing.assert_allclose(of_runs[20:23], np.log(1200 / 450), rtol=1e-6)
    np.testing.assert_array_equal(of_runs[~is_odd], lean[~is_odd])


def test_no_odd_beat_changes_nothing() -> None:
    """Without any odd beat, and with odd beats only, the lean is defined."""
    rhythm = chain([800, 800, 800])
    lean = timing.marks(rhythm).lean
    np.testing.assert_array_equal(timing.lean_of_stretches(rhythm, lean, np.zeros(3, dtype=bool)), lean)
    assert timing.lean_of_stretches(rhythm, lean, np.ones(3, dtype=bool)).tolist() == [0, 0, 0]
