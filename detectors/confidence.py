"""How likely a label is right, from figures of the reference recordings (development figures, not a promise).

Fitted on the pooled beats of the 22 reference records in analysable time; the accuracy report shows the reliability
table.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

VENTRICULAR = (2.4, 0.15)  # log odds of being right: constant, slope on the log odds of being ventricular
NORMAL = (1.5, 0.69)  # the same, slope on the log odds of not being ventricular
CLEARLY_EARLY = 0.82  # of the usual interval
IN_A_STRETCH = 0.90  # a supraventricular beat later than this continues a fast stretch
SUPRAVENTRICULAR = 0.90  # clearly early, or in a stretch
BARELY_EARLY = 0.60
FUSION = 0.70  # one record only: our judgement


def probability(
    beat_class: NDArray[np.str_], odds: NDArray[np.float64], before: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Estimated probability that each class is right, shape (n_beats,).

    `odds` are log odds of being ventricular, `before` the RR interval before over the usual one, NaN after a gap.
    """
    is_sure = (before < CLEARLY_EARLY) | (before > IN_A_STRETCH)
    return np.select(
        [beat_class == "V", beat_class == "N", beat_class == "S", beat_class == "F"],
        [
            _logistic(VENTRICULAR[0] + VENTRICULAR[1] * odds),
            _logistic(NORMAL[0] - NORMAL[1] * odds),
            np.where(is_sure, SUPRAVENTRICULAR, BARELY_EARLY),
            FUSION,
        ],
        0.5,
    ).astype(np.float32)


def _logistic(log_odds: NDArray[np.float64]) -> NDArray[np.float64]:
    return 1 / (1 + np.exp(-log_odds))
