"""What a reader of the numbers must know about the recording as a whole."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE
from detectors.results import Beats, Families, Finding

MOSTLY_NOISE = 0.5  # of the recorded time not analysable
SMALL_R = 0.65  # R over S of a QRS that points down
CONCORDANT_T = 0.1  # T over the main deflection, same direction: a limb-like lead worn upside down
SMALL_QRS_MV = 0.3  # peak to peak; usual lower limit of low voltage is 0.5 mV in limb leads (from memory)


def findings(analysable_s: float, recorded_s: float, beats: Beats, families: Families) -> tuple[Finding, ...]:
    """Findings of a recording, each code at most once.

    The lead rule is ours: in lead V1 the QRS points down and the T wave does not follow it; in a limb-like lead the QRS
    points up, or down with its T wave when the electrodes are reversed. The validated case is limb-like.
    """
    if analysable_s <= 0 or not beats.is_analysable.any():
        return (Finding("no_analysable_time", "no stretch of the recording is clean enough to find beats"),)
    found = []
    share = analysable_s / recorded_s
    if share < MOSTLY_NOISE:
        found.append(Finding("mostly_noise", f"only {100 * share:.0f} % of the recorded time is analysable"))
    is_normal = families.family_class == "N"
    if is_normal.any():
        main = int(np.argmax(families.beat_count * is_normal))
        found += _lead_findings(families.shape_mv[main])
    return tuple(found)


def _lead_findings(shape_mv: NDArray[np.float32]) -> list[Finding]:
    """Findings from the averaged normal beat, shape (SHAPE_LENGTH,)."""
    baseline = float(np.median(shape_mv[SHAPE_BEFORE - 14 : SHAPE_BEFORE - 8]))
    qrs = shape_mv[SHAPE_BEFORE - 10 : SHAPE_BEFORE + 14] - baseline
    t_wave = shape_mv[SHAPE_BEFORE + 20 : SHAPE_BEFORE + 50] - baseline
    up, down = float(qrs.max()), float(-qrs.min())
    t_peak = float(t_wave[np.abs(t_wave).argmax()])
    found = []
    if up < SMALL_R * down:
        if -t_peak > CONCORDANT_T * down:
            found.append(
                Finding("lead_upside_down", "QRS and T wave point down: electrodes reversed; classes unaffected")
            )
        else:
            found.append(
                Finding(
                    "lead_not_limb_like",
                    f"the normal QRS points down (R {up:.2f} mV, S {down:.2f} mV) and its T wave does not: not like a "
                    "limb lead, for which the classes are validated; low confidence",
                )
            )
    if up + down < SMALL_QRS_MV:
        found.append(Finding("low_amplitude", f"the normal QRS spans {up + down:.2f} mV: beats may be missed"))
    return found
