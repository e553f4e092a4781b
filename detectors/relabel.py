"""An analysis with the classes that somebody decided: what is no beat leaves, intervals join, episodes are found anew."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors.analyse import Options, episodes_of
from detectors.results import Analysis, Beats


def relabelled(
    analysis: Analysis, beat_class: NDArray[np.str_], is_beat: NDArray[np.bool_], options: Options
) -> Analysis:
    """Return the analysis as if its beats had been found with these classes.

    `beat_class` has shape (n_beats,), dtype '<U1'; `is_beat` has shape (n_beats,), False for what is noise: such a beat
    leaves, and the intervals on its two sides become one. Beats, intervals and episodes are new; families, quality and
    what was measured on a beat's shape stay. With nothing changed the analysis is the same to the last bit.
    """
    beats = analysis.beats._replace(beat_class=beat_class)
    kept = Beats._make(column[is_beat] for column in beats)
    before_ms = _joined_ms(beats.rr_before_ms, is_beat)
    after_ms = np.append(before_ms[1:], np.float32(np.nan)) if before_ms.size else before_ms
    kept = kept._replace(rr_before_ms=before_ms, rr_after_ms=after_ms)
    return analysis._replace(beats=kept, episodes=episodes_of(kept, analysis.fs_hz, options))


def _joined_ms(before_ms: NDArray[np.float32], is_beat: NDArray[np.bool_]) -> NDArray[np.float32]:
    """Interval from each beat that stays to the one before it; NaN where one of the joined intervals is."""
    last = np.flatnonzero(is_beat)
    if not last.size:
        return before_ms[:0]
    first = np.append(0, last[:-1] + 1)
    return np.add.reduceat(before_ms[: last[-1] + 1].astype(np.float64), first).astype(np.float32)
