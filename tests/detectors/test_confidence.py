"""How likely a label is right."""

from __future__ import annotations

import numpy as np

from detectors.confidence import probability


def stated(beat_class: str, odds: float = 0.0, before: float = 1.0) -> float:
    return float(probability(np.array([beat_class]), np.array([odds]), np.array([before], dtype=np.float32))[0])


def test_probability_grows_with_the_evidence() -> None:
    """The further the odds are on a label's side, or the earlier a supraventricular beat, the likelier the label."""
    assert stated("V", 6.0) > stated("V", 0.5) > 0.5
    assert stated("N", -5.0) > stated("N", -0.5) > 0.5
    assert stated("S", before=0.7) > stated("S", before=0.87) > 0.5


def test_probability_is_always_a_number() -> None:
    """Every class, also with unknown intervals, gets a number between 0 and 1."""
    for beat_class in "NSVFQ":
        for before in (0.5, np.nan):
            assert 0 < stated(beat_class, 3.0, before) < 1
