"""Shape families: beats that look alike, found in batches by matrix products and merged over the recording."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH

CORE_BEFORE = 15  # working samples, 120 ms
CORE_AFTER = 20  # working samples, 160 ms
LAGS = tuple(range(-4, 5))  # working samples, 32 ms either way
LOOSEST = 0.90  # correlation that a family asks of its beats when they scatter much
TIGHTEST = 0.97  # and when they scatter little
SCATTER_ALLOWED = 4.0  # times the median distance of a family's own beats
SAME_PROTOTYPE = 0.97
AMPLITUDE_LIMIT = 2.0
MOST_FAMILIES = 32
SEED_SAMPLE = 256


class LocalFamilies(NamedTuple):
    """Families of one batch of beats."""

    family: NDArray[np.int64]  # shape (n_beats,), row of `shape_mv`, -1 for none
    lag: NDArray[np.int64]  # shape (n_beats,), working samples by which the beat lies later than its family
    likeness: NDArray[np.float32]  # shape (n_beats,), correlation with the family, or the nearest one
    nearest: NDArray[np.int64]  # shape (n_beats,), most similar family whatever the distance, -1 for none
    count: NDArray[np.int64]  # shape (n_families,)
    shape_mv: NDArray[np.float32]  # shape (n_families, SHAPE_LENGTH)


def core(shape_mv: NDArray[np.float32], lag: int = 0) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """QRS stretch of shapes (n, SHAPE_LENGTH), without mean and of unit length, and its length in mV."""
    cut = shape_mv[:, SHAPE_BEFORE - CORE_BEFORE + lag : SHAPE_BEFORE + CORE_AFTER + lag]
    cut = cut - cut.mean(axis=1, keepdims=True)
    size = np.sqrt(np.einsum("ij,ij->i", cut, cut))
    return cut / np.maximum(size, 1e-6)[:, None], size


def likeness(
    unit: NDArray[np.float32], size: NDArray[np.float32], prototypes_mv: NDArray[np.float32]
) -> tuple[NDArray[np.float32], NDArray[np.int64]]:
    """Best correlation over all lags of beats with prototypes, shapes (n_beats, n_prototypes), and the lag that gave it."""
    best = np.full((unit.shape[0], prototypes_mv.shape[0]), -1.0, dtype=np.float32)
    lag_of = np.zeros(best.shape, dtype=np.int64)
    for lag in LAGS:
        template, template_size = core(prototypes_mv, -lag)
        now = unit @ template.T
        if lag == LAGS[0]:
            own_size = template_size
        better = now > best
        best[better] = now[better]
        lag_of[better] = lag
    ratio = size[:, None] / np.maximum(own_size, 1e-6)[None, :]
    best[(ratio > AMPLITUDE_LIMIT) | (ratio < 1 / AMPLITUDE_LIMIT)] -= 1.0
    return best, lag_of


def cluster(shape_mv: NDArray[np.float32]) -> LocalFamilies:
    """Group one batch of beats, shape (n_beats, SHAPE_LENGTH), into at most MOST_FAMILIES families, biggest first."""
    unit, size = core(shape_mv)
    prototypes = np.empty((0, shape_mv.shape[1]), dtype=np.float32)
    limits: list[float] = []
    free = np.arange(shape_mv.shape[0])
    while free.size >= 2 and prototypes.shape[0] < MOST_FAMILIES:
        seed = _seed(unit, size, shape_mv, free)
        if seed is None:
            break
        limit = LOOSEST
        for _ in range(3):
            match, lag = likeness(unit[free], size[free], seed[None])
            is_member = match[:, 0] > limit
            if not is_member.any():
                break
            seed = _mean_shape(shape_mv, free[is_member], lag[is_member, 0])
            limit = _limit(match[is_member, 0])
        is_member[np.flatnonzero(free == free[0])] |= not is_member.any()
        prototypes = np.vstack([prototypes, seed[None]])
        limits.append(limit)
        free = free[~is_member]
    return _assign(shape_mv, unit, size, prototypes, np.array(limits, dtype=np.float32))


def _limit(match: NDArray[np.float32]) -> float:
    """Correlation that a family asks of its beats, from how much they scatter."""
    return float(np.clip(1 - SCATTER_ALLOWED * np.median(1 - match), LOOSEST, TIGHTEST))


def _seed(
    unit: NDArray[np.float32], size: NDArray[np.float32], shape_mv: NDArray[np.float32], free: NDArray[np.int64]
) -> NDArray[np.float32] | None:
    """The free beat with most look-alikes among an even sample of the free beats; None when there is none."""
    sample = free[:: max(1, free.size // SEED_SAMPLE)]
    match, _ = likeness(unit[sample], size[sample], shape_mv[sample])
    friends = (match > LOOSEST).sum(axis=0)
    best = int(friends.argmax())
    return shape_mv[sample[best]] if friends[best] >= 2 else None


def _mean_shape(
    shape_mv: NDArray[np.float32], member: NDArray[np.int64], lag: NDArray[np.int64]
) -> NDArray[np.float32]:
    total = np.zeros(shape_mv.shape[1], dtype=np.float64)
    for step in LAGS:
        total += np.roll(shape_mv[member[lag == step]].sum(axis=0, dtype=np.float64), -step)
    return (total / max(member.size, 1)).astype(np.float32)


def _assign(
    shape_mv: NDArray[np.float32],
    unit: NDArray[np.float32],
    size: NDArray[np.float32],
    prototypes: NDArray[np.float32],
    limits: NDArray[np.float32],
) -> LocalFamilies:
    n_beats = shape_mv.shape[0]
    if prototypes.shape[0] == 0:
        none = np.full(n_beats, -1, dtype=np.int64)
        zero = np.zeros(n_beats, dtype=np.int64)
        return LocalFamilies(none, zero, zero.astype(np.float32), none, none[:0], prototypes)
    match, lag_of = likeness(unit, size, prototypes)
    nearest = match.argmax(axis=1)
    row = np.arange(n_beats)
    like, lag = match[row, nearest], lag_of[row, nearest]
    family = np.where(like > limits[nearest], nearest, -1)
    used = np.unique(family[family >= 0])
    shapes = np.array([_mean_shape(shape_mv, np.flatnonzero(family == f), lag[family == f]) for f in used])
    count = np.array([(family == f).sum() for f in used], dtype=np.int64)
    order = np.argsort(-count, kind="stable")
    renumber = np.full(prototypes.shape[0] + 1, -1, dtype=np.int64)
    renumber[used[order]] = np.arange(used.size)
    return LocalFamilies(
        renumber[family], lag, like, renumber[nearest], count[order], shapes.reshape(-1, shape_mv.shape[1])[order]
    )


def likeness_of_shapes(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Best correlation over all lags of every shape with every other, shape (n, n), amplitude left aside."""
    unit, _ = core(shape_mv)
    return np.max([unit @ core(shape_mv, -lag)[0].T for lag in LAGS], axis=0)


class FamilyBook:
    """Families of the whole recording, built from the local families of one batch after the other."""

    def __init__(self) -> None:
        self.shape_mv = np.empty((0, SHAPE_LENGTH), dtype=np.float32)
        self.count = np.zeros(0, dtype=np.int64)

    def enter(self, local: LocalFamilies) -> NDArray[np.int64]:
        """Match local families with those of the recording; returns the recording-wide number of each, shape (n_local,)."""
        number = np.full(local.count.size, -1, dtype=np.int64)
        for row in range(local.count.size):
            number[row] = self._number(local.shape_mv[row], int(local.count[row]))
        return number

    def _number(self, shape: NDArray[np.float32], count: int) -> int:
        if self.count.size:
            match, _ = likeness(*core(shape[None]), self.shape_mv)
            best = int(match[0].argmax())
            if match[0, best] > SAME_PROTOTYPE:
                weight = count / (self.count[best] + count)
                self.shape_mv[best] += np.float32(weight) * (shape - self.shape_mv[best])
                self.count[best] += count
                return best
        self.shape_mv = np.vstack([self.shape_mv, shape[None]])
        self.count = np.append(self.count, count)
        return self.count.size - 1
