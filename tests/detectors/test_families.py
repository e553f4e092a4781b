"""Shape families and fusion."""

from __future__ import annotations

import numpy as np

from detectors import families, fusion
from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH

T = (np.arange(SHAPE_LENGTH) - SHAPE_BEFORE) * 8.0
NARROW = np.exp(-0.5 * (T / 12) ** 2)
WIDE = 1.3 * np.exp(-0.5 * (T / 34) ** 2) - 0.5 * np.exp(-0.5 * ((T - 70) / 25) ** 2)


def noisy(shape: np.ndarray, n_beats: int, noise_mv: float, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return (shape + noise_mv * rng.standard_normal((n_beats, SHAPE_LENGTH))).astype(np.float32)


def entered(*batches: np.ndarray) -> tuple[families.FamilyBook, list[families.Membership]]:
    book = families.FamilyBook()
    return book, [book.enter(batch, np.ones(len(batch), dtype=bool)) for batch in batches]


def test_two_shapes_make_two_families() -> None:
    """Beats of two shapes fall into two families, each pure, however they are mixed."""
    beats = np.concatenate([noisy(NARROW, 300, 0.02, 1), noisy(WIDE, 40, 0.02, 2)])
    order = np.random.default_rng(3).permutation(340)
    book, (member,) = entered(beats[order])
    assert book.n_beats.tolist() == [300, 40]
    assert len({(bool(is_wide), int(f)) for is_wide, f in zip(order >= 300, member.family, strict=True)}) == 2


def test_families_go_on_in_the_next_batch() -> None:
    """Beats of a known shape join its family in later batches, and slow change is followed."""
    grown = [noisy(NARROW * (1 + 0.02 * step), 200, 0.02, step) for step in range(20)]
    book, members = entered(*grown)
    assert book.n_beats.tolist() == [4000]
    assert all((member.family == 0).all() for member in members)


def test_a_lone_shape_has_no_family() -> None:
    """One beat unlike all others founds no family and keeps its nearest."""
    book, (member,) = entered(np.concatenate([noisy(NARROW, 100, 0.02, 1), noisy(WIDE, 1, 0.02, 2)]))
    assert member.family[-1] == -1 and member.nearest[-1] == 0 and book.n_beats.size == 1


def test_unclean_beats_found_no_family() -> None:
    """Beats in noise may join a family but not found one."""
    book = families.FamilyBook()
    beats = np.concatenate([noisy(NARROW, 50, 0.02, 1), noisy(WIDE, 10, 0.02, 2)])
    member = book.enter(beats, np.arange(60) < 50)
    assert book.n_beats.size == 1 and (member.family[50:] == -1).all()


def test_shapes_are_compared_without_level_slope_and_size() -> None:
    """Offset, a straight drift and size do not change the likeness of two shapes."""
    changed = 0.3 + 0.002 * T + 1.7 * NARROW
    alike = families.likeness(np.stack([NARROW, changed, WIDE]).astype(np.float32))
    assert alike[0, 1] > 0.999 and alike[0, 2] < 0.9


def test_fusion_is_a_sum_of_both_parents() -> None:
    """The mean of a normal and a ventricular shape is a fusion; either parent or a third shape is not."""
    parents = WIDE[None].astype(np.float32)
    third = -np.exp(-0.5 * ((T - 30) / 20) ** 2)
    assert fusion.is_fusion((NARROW + WIDE) / 2, NARROW, parents)
    for shape in (NARROW, WIDE, third):
        assert not fusion.is_fusion(shape, NARROW, parents)


def test_mains_ripple_is_smoothed_away() -> None:
    """Shapes with strong 50-Hz or 60-Hz ripple are smoothed before they are compared; clean and rough ones are not."""
    clean, rough = noisy(NARROW, 200, 0.01, 1), noisy(NARROW, 200, 0.15, 1)
    for unharmed in (clean, rough):
        assert families.FamilyBook().prepare(unharmed) is unharmed
    for mains_hz in (50, 60):
        phase = np.random.default_rng(2).uniform(0, 6.28, (200, 1))
        hummed = (clean + 0.2 * np.sin(2 * np.pi * mains_hz * T / 1000 + phase)).astype(np.float32)
        prepared = families.FamilyBook().prepare(hummed)
        assert np.abs(prepared - clean)[:, 1:15].max() < 0.04


def test_a_new_focus_finds_room_beside_many_rare_families() -> None:
    """After far more rare shapes than families are kept, a shape that repeats often still founds its family."""
    rng = np.random.default_rng(6)
    rare = [noisy(np.cumsum(rng.standard_normal(SHAPE_LENGTH)), 2, 0.01, seed) for seed in range(200)]
    batches = [np.concatenate([noisy(NARROW, 100, 0.02, i), *rare[i * 25 : i * 25 + 25]]) for i in range(8)]
    book, _ = entered(*batches)
    assert book.n_beats.size < 150
    member = book.enter(noisy(WIDE, 40, 0.02, 99), np.ones(40, dtype=bool))
    assert np.unique(member.family).tolist() == [book.n_beats.size - 1]
