"""Families matched across the recordings of a patient."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from detectors import synthetic
from detectors.analyse import analyse_signal
from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH
from detectors.matching import Matched, match_families
from detectors.results import Families
from detectors.synthetic_beats import Rhythm

T = (np.arange(SHAPE_LENGTH) - SHAPE_BEFORE) * 8.0
NARROW = np.exp(-0.5 * (T / 12) ** 2)
WIDE = 1.3 * np.exp(-0.5 * (T / 34) ** 2) - 0.5 * np.exp(-0.5 * ((T - 70) / 25) ** 2)
DOWN = -1.2 * np.exp(-0.5 * (T / 30) ** 2) + 0.3 * np.exp(-0.5 * ((T + 40) / 15) ** 2)


def recorded(focus: int, seed: int) -> Families:
    """Families of half an hour with a fifth of the beats from one focus."""
    weights = tuple(float(number == focus) for number in range(4))
    rhythm = Rhythm(v_share_pct=20.0, v_family_weights=weights, run_share=0.0)
    (hour,) = synthetic.recording(rhythm, fs_hz=125, hours=0.5, seed=seed)
    return analyse_signal(hour.counts * synthetic.MV_PER_COUNT, fs_hz=125).families


def matched(*recordings: Families) -> list[list[int]]:
    """Patient-wide family of each family, a list per recording."""
    place = np.repeat(np.arange(len(recordings)), [len(one.beat_count) for one in recordings])
    columns = zip(*((one.family_class, one.shape_mv, one.beat_count) for one in recordings), strict=True)
    found = match_families(place, *(np.concatenate(column) for column in columns)).patient_family
    return [found[place == number].tolist() for number in range(len(recordings))]


def of_focus(families: Families, numbers: list[int]) -> int:
    """Patient-wide number of the largest ventricular family."""
    is_v = families.family_class == "V"
    return numbers[int(np.argmax(np.where(is_v, families.beat_count, -1)))]


def test_a_focus_keeps_its_number_in_the_next_recording() -> None:
    """Two recordings of one focus share its number; a third with another focus has a new one; normal beats keep theirs."""
    recordings = [recorded(0, 1), recorded(0, 2), recorded(1, 3)]
    numbers = matched(*recordings)
    first, again, other = (of_focus(*pair) for pair in zip(recordings, numbers, strict=True))
    assert first == again != other
    assert [one[0] for one in numbers] == [0, 0, 0]


def test_a_later_recording_changes_no_number() -> None:
    """What a recording's families were called stays when another recording comes."""
    recordings = [recorded(0, 1), recorded(2, 2), recorded(1, 3)]
    assert matched(*recordings)[:2] == matched(*recordings[:2])


def test_a_peak_found_elsewhere_and_another_gain_do_not_part_a_family() -> None:
    """A shape that lies 24 ms later and is 1.8 times as large has the same number; one 3 times as large has not."""
    shapes = np.stack([WIDE, 1.8 * np.roll(WIDE, 3), 3 * 1.8 * WIDE])
    found = match_families(np.arange(3), np.array(["V", "V", "V"]), shapes, np.array([9, 9, 9]))
    assert found.patient_family.tolist() == [0, 0, 1]
    assert np.isnan(found.likeness[[0, 2]]).all() and found.likeness[1] > 0.999


def test_ventricular_and_normal_beats_never_share_a_number() -> None:
    """A ventricular or fusion family of a normal family's shape stays apart; a supraventricular one joins it."""
    found = match_families(np.arange(4), np.array(["N", "V", "S", "F"]), np.stack([NARROW] * 4), np.array([9, 9, 9, 9]))
    assert found.patient_family.tolist() == [0, 1, 0, 2]


@given(st.permutations(range(6)))
def test_the_order_of_rows_changes_no_number(order: list[int]) -> None:
    """Families in any order of rows get the same numbers."""
    columns = (
        np.array([0, 0, 0, 1, 1, 1]), np.array(["N", "V", "V", "N", "V", "V"]),
        np.stack([NARROW, WIDE, DOWN, 0.8 * NARROW, DOWN, WIDE]), np.array([900, 50, 20, 800, 60, 10]),
    )  # fmt: skip
    assert match_families(*columns).patient_family.tolist() == [0, 1, 2, 0, 2, 1]
    mixed: Matched = match_families(*(column[order] for column in columns))
    assert mixed.patient_family.tolist() == [[0, 1, 2, 0, 2, 1][row] for row in order]


def test_arrays_of_different_length_are_refused() -> None:
    """Columns that do not belong together are a ValueError with their lengths."""
    with pytest.raises(ValueError, match="are 2, 1, 1 and 1"):
        match_families(np.arange(2), np.array(["N"]), NARROW[None], np.array([1]))
