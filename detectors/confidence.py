"""How likely a label is right, from figures of the reference recordings (development figures, not a promise).

Fitted on the pooled beats of the 22 reference records in analysable time, each classified with weights refitted
without it and in many ways in which it could have come; the accuracy report shows the reliability table.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

VENTRICULAR = (1.1, 0.6)  # log odds of being right: constant, slope on the log odds of being ventricular
NORMAL = (0.1, 0.94)  # the same, slope on the log odds of not being ventricular
CLEARLY_EARLY = 0.82  # of the usual interval
IN_A_STRETCH = 0.90  # a supraventricular beat later than this continues a fast stretch
SUPRAVENTRICULAR = 0.90  # clearly early, or in a stretch
BARELY_EARLY = 0.60
FUSION = 0.80  # one record only: our judgement


def probability(
    beat_class: NDArray[np.str_], odds: NDArray[np.floating], before: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Estimated probability that each class is right, shape (n_beats,).

    `odds` are log odds of being ventricular, `before` the RR interval before over the usual one, NaN after a gap.
    """
    out = np.full(beat_class.size, 0.5, dtype=np.float32)
    is_v, is_n, is_s = (beat_class == name for name in "VNS")
    out[is_v] = _logistic(VENTRICULAR[0] + VENTRICULAR[1] * odds[is_v])
    out[is_n] = _logistic(NORMAL[0] - NORMAL[1] * odds[is_n])
    is_sure = (before[is_s] < CLEARLY_EARLY) | (before[is_s] > IN_A_STRETCH)
    out[is_s] = np.where(is_sure, SUPRAVENTRICULAR, BARELY_EARLY)
    out[beat_class == "F"] = FUSION
    return out


def _logistic(log_odds: NDArray[np.floating]) -> NDArray[np.floating]:
    return 1 / (1 + np.exp(-log_odds))
