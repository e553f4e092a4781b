"""P waves: whether a beat has the one of the sinus beats of its family."""

from __future__ import annotations

import numpy as np
import pytest

from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH
from detectors.p_waves import HIDDEN, OTHER, SAME, PWaveBook

T = (np.arange(SHAPE_LENGTH) - SHAPE_BEFORE) * 8.0


def wave(at_ms: float, width_ms: float, mv: float) -> np.ndarray:
    return mv * np.exp(-0.5 * ((T - at_ms) / width_ms) ** 2)


QRS = wave(0, 12, 1.0)
SINUS = QRS + wave(-165, 20, 0.12)
LONGER_PR = QRS + wave(-185, 20, 0.12)
ATRIAL = QRS + wave(-125, 16, -0.10)
LOW_ATRIAL = QRS + wave(-160, 20, -0.10)
NO_P = QRS
NOISE_MV = 0.01


def marks(shapes: list[np.ndarray], rr_ms: list[float]) -> np.ndarray:
    """Marks of beats of one family that come in one batch with the given intervals before them."""
    noise = NOISE_MV * np.random.default_rng(1).standard_normal((len(shapes), SHAPE_LENGTH))
    shape_mv = (np.stack(shapes) + noise).astype(np.float32)
    family = np.zeros(len(shapes), dtype=np.int16)
    book = PWaveBook()
    book.enter(shape_mv, np.cumsum(rr_ms) / 8, family, 1)
    return book.marks(shape_mv, family, shape_mv.mean(axis=0, keepdims=True))


@pytest.mark.parametrize(
    ("shape", "mark"),
    [(SINUS, SAME), (LONGER_PR, SAME), (LOW_ATRIAL, OTHER), (NO_P, OTHER)],
    ids=["sinus", "PR", "A", "J"],
)
def test_p_wave_is_told_beat_by_beat(shape: np.ndarray, mark: int) -> None:
    """A beat has the sinus P wave, a little earlier or not, or another one or none."""
    found = marks([*[SINUS] * 9, shape] * 20, [800] * 200)
    assert np.mean(found[9::10] == mark) > 0.9
    assert np.mean(found.reshape(-1, 10)[:, :9] == SAME) > 0.95


def test_sinus_p_wave_is_learned_where_ectopic_beats_outnumber_it() -> None:
    """The beats before a sudden shortening are the sinus ones, however few they are."""
    found = marks([SINUS, *[ATRIAL] * 7] * 30, [1500, *[700] * 7] * 30).reshape(-1, 8)
    assert np.mean(found[:, 0] == SAME) > 0.9
    assert not np.any(found[:, 1:] == SAME)


def test_nothing_is_told_without_a_p_wave_or_in_noise() -> None:
    """Where the family has no P wave, as in fibrillation, and where noise hides it, nothing is told."""
    assert set(marks([NO_P] * 200, [800] * 200)) == {HIDDEN}
    noisy = [SINUS + 0.1 * np.random.default_rng(n).standard_normal(SHAPE_LENGTH) for n in range(200)]
    assert np.mean(marks(noisy, [800] * 200) == OTHER) < 0.03


def test_book_goes_on_learning_and_takes_new_families() -> None:
    """A family founded in a later batch has its own P wave; a batch without any family says nothing."""
    book, working = PWaveBook(), np.arange(100) * 100.0
    none, one = np.full(100, -1, dtype=np.int16), np.full(100, 1, dtype=np.int16)
    sinus = np.tile(SINUS, (100, 1)).astype(np.float32)
    book.enter(sinus, working, none, 0)
    assert set(book.marks(sinus, none, sinus[:0])) == {HIDDEN}
    book.enter(sinus, working, none + 1, 1)
    late = np.tile(LONGER_PR, (100, 1)).astype(np.float32)
    book.enter(late, working, one, 2)
    assert set(book.marks(late, one, np.stack([sinus[0], late[0]]))) == {SAME}
    assert book.n_beats.tolist() == [100, 100]


def test_family_of_p_waves_alone_is_told_from_small_beats() -> None:
    """A family that is the P wave of the others without a QRS is no family of beats; a small QRS is one."""
    book = PWaveBook()
    family = np.array([0] * 30 + [1] * 5 + [2] * 5, dtype=np.int16)
    means = np.stack([SINUS, wave(20, 20, 0.12), wave(0, 12, 0.3)]).astype(np.float32)
    book.enter(means[family], np.arange(40) * 100.0, family, 3)
    assert book.is_p_wave(means).tolist() == [False, True, False]
    assert PWaveBook().is_p_wave(means[:0]).size == 0
