"""The one entry, on small made-up signals."""

from __future__ import annotations

import numpy as np
import pytest

from detectors import analyse_signal


def test_refuses_a_rate_it_is_not_defined_for() -> None:
    """A rate outside 100 to 4000 Hz is refused with argument, value and what was expected."""
    with pytest.raises(ValueError, match=r"fs_hz is 50; expected samples per second from 100 to 4000 Hz"):
        analyse_signal(np.zeros(1000), fs_hz=50)


@pytest.mark.parametrize("n_samples", [0, 1, 3, 250, 5000])
def test_says_when_nothing_is_analysable(n_samples: int) -> None:
    """A constant signal of any length yields no beats and the finding that no time is analysable."""
    analysis = analyse_signal(np.zeros(n_samples), fs_hz=250)
    assert analysis.beats.sample.size == 0
    assert [finding.code for finding in analysis.findings] == ["no_analysable_time"]
