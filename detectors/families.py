"""Shape families: beats that look alike, found by matrix products against few averaged shapes.

Beats come in batches. Each batch is matched with the families known so far; what is left may found new ones. A family
asks of its beats a correlation that depends on how little its own beats scatter, so that a clean recording separates
shapes that a noisy one must take for the same.
"""

from __future__ import annotations

from functools import cache
from typing import NamedTuple

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors.chunks import SHAPE_BEFORE, SHAPE_LENGTH

REACH = 4  # working samples, 32 ms: how far the R peaks of two beats of one shape may lie apart
LOOSEST = 0.90  # least correlation that a family asks of its beats
LOOSEST_WHEN_CLEAN = 0.94  # the same in a recording whose main family scatters little
MAIN_SCATTER_ALLOWED = 10.0  # times the median distance in the main family
TIGHTEST = 0.96  # correlation that a family asks whose beats scatter little
SCATTER_ALLOWED = 5.0  # times the median distance of a family's own beats
AMPLITUDE_LIMIT = 2.0  # sizes within this factor
MANY_FAMILIES = 64  # with every so many, a new family needs four times the beats
RIPPLE = 0.3  # of the QRS: less does no harm
RIPPLE_TONE = 3.1
RIPPLE_SAMPLES = 15  # 280 to 160 ms before the R peak
MOST_NEW_FAMILIES = 32  # in the first batch
MOST_LATER_FAMILIES = 8  # in each batch after it
SEED_SAMPLE = 128  # beats of which one becomes the seed of a family
SCATTER_SAMPLE = 512  # beats from which the scatter of a family is taken
MEAN_SAMPLE = 512  # beats of a batch from which the averaged shape learns
MEMORY_BEATS = 5000  # the averaged shape follows slow change over about so many beats of the family


class Membership(NamedTuple):
    """Family of each beat of a batch. Arrays of shape (n_beats,)."""

    family: NDArray[np.int16]  # number within the recording, -1 for none
    nearest: NDArray[np.int16]  # most similar family whatever the distance, -1 when there is none at all
    likeness: NDArray[np.float32]  # correlation with the nearest


class Stretch(NamedTuple):
    """Part of a shape that is compared, in working samples from the R peak."""

    before: int
    length: int

    def of(self, shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
        """The part of shapes (n, SHAPE_LENGTH), shape (n, length)."""
        begin = SHAPE_BEFORE - self.before
        return np.ascontiguousarray(shape_mv[:, begin : begin + self.length])

    def at_all_lags(self, shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
        """The part of shapes (n, SHAPE_LENGTH) at lags from -REACH to REACH, shape (n, 2 REACH + 1, length)."""
        begin = SHAPE_BEFORE - self.before
        return sliding_window_view(shape_mv, self.length, axis=-1)[:, begin - REACH : begin + REACH + 1]


QRS = Stretch(before=15, length=35)  # 120 ms before to 160 ms after the R peak
QRS_CENTRE = Stretch(before=6, length=13)  # 48 ms either side: free of a T wave before or after
P_WAVE = Stretch(before=30, length=19)  # 240 to 88 ms before the R peak


def unit(stretch_mv: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Stretches (..., length) without level and slope and of unit length, and their length before, shape (...), mV."""
    line = _line(stretch_mv.shape[-1])
    rest = stretch_mv - (stretch_mv @ line) @ line.T
    size = np.maximum(np.sqrt(np.einsum("...j,...j->...", rest, rest)), np.float32(1e-6))
    return rest / size[..., None], size


@cache
def _line(length: int) -> NDArray[np.float32]:
    """Level and slope as orthonormal columns, shape (length, 2)."""
    return np.linalg.qr(np.vander(np.linspace(-1, 1, length), 2))[0].astype(np.float32)


def likeness(shape_mv: NDArray[np.float32], stretch: Stretch = QRS) -> NDArray[np.float32]:
    """Best correlation over all lags of every shape with every other, shape (n, n), amplitude left aside."""
    in_place, shifted = unit(stretch.of(shape_mv))[0], unit(stretch.at_all_lags(shape_mv))[0]
    return np.einsum("ij,klj->ikl", in_place, shifted).max(axis=2, initial=-1)


def same_wave(
    shape_mv: NDArray[np.float32], model: int, stretch: Stretch
) -> tuple[NDArray[np.float32], NDArray[np.float32], float]:
    """How like a wave of every shape is to that of shape number `model`, at the best lag; level and slope aside.

    Returns likeness in shape and size (2 ab over aa + bb, 1 the same), the part of the model that a shape holds (ab
    over bb, which noise does not lower), both of shape (n,), and the root mean square of the model, mV.
    """
    direction, size = unit(stretch.at_all_lags(shape_mv))
    own_direction, own_size = (values[model, REACH] for values in (direction, size))
    part = (direction @ own_direction) * size / own_size
    like = 2 * part / (1 + (size / own_size) ** 2)
    return like.max(axis=1), part.max(axis=1), float(own_size) / stretch.length**0.5


def has_mains_ripple(shape_mv: NDArray[np.float32]) -> bool:
    """Whether the time before the P wave is filled by a tone near half the working rate, as 50 and 60 Hz are.

    The second difference of such a tone has 3.6 or 4 times the power of its first difference; of white noise 3 times.
    """
    quiet = shape_mv[:, :RIPPLE_SAMPLES]
    first, second = _power(np.diff(quiet)), _power(np.diff(quiet, 2))
    size = unit(QRS.of(shape_mv))[1] / np.float32(np.sqrt(QRS.length))
    is_large = np.median(np.sqrt(second) / size) > RIPPLE
    return bool(is_large and np.median(second) > RIPPLE_TONE * np.median(first))


def _power(rows: NDArray[np.float32]) -> NDArray[np.float32]:
    return np.einsum("ij,ij->i", rows, rows) / rows.shape[1]


def smoothed(shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Shapes with weights 1 2 1: a tenth of a 50-Hz ripple is left, of 60 Hz nothing."""
    out = shape_mv.copy()
    out[:, 1:-1] = (shape_mv[:, :-2] + shape_mv[:, 2:] + 2 * shape_mv[:, 1:-1]) / 4
    return out


class FamilyBook:
    """Families of the recording so far. The row number is the family number."""

    def __init__(self) -> None:
        self.shape_mv = np.empty((0, SHAPE_LENGTH), dtype=np.float32)
        self.limit = np.empty(0, dtype=np.float32)
        self.n_beats = np.empty(0, dtype=np.int64)
        self.loosest = LOOSEST
        self.is_smoothed: bool | None = None

    def prepare(self, shape_mv: NDArray[np.float32]) -> NDArray[np.float32]:
        """The shapes, smoothed when the first batch of the recording shows mains ripple."""
        if self.is_smoothed is None and shape_mv.shape[0]:
            self.is_smoothed = has_mains_ripple(shape_mv)
        return smoothed(shape_mv) if self.is_smoothed else shape_mv

    def enter(self, shape_mv: NDArray[np.float32], is_clean: NDArray[np.bool_]) -> Membership:
        """Assign one batch of beats, shape (n_beats, SHAPE_LENGTH); only clean beats found new families."""
        direction, size = unit(QRS.of(shape_mv))
        known = self.n_beats.size
        member = self._match(direction, size)
        left = np.flatnonzero(member.family < 0)
        self._grow(direction, size, shape_mv, left[is_clean[left]])
        if self.n_beats.size > known:
            again = self._match(direction[left], size[left])
            member.family[left], member.nearest[left], member.likeness[left] = again
        self._learn(shape_mv, member)
        return member

    def _match(self, direction: NDArray[np.float32], size: NDArray[np.float32]) -> Membership:
        """Match beats with the known families: all in place, then those that fit none at all lags."""
        n_beats = direction.shape[0]
        if self.n_beats.size == 0:
            none = np.full(n_beats, -1, dtype=np.int16)
            return Membership(none, none.copy(), np.zeros(n_beats, dtype=np.float32))
        own_direction, own_size = unit(QRS.of(self.shape_mv))
        match = direction @ own_direction.T
        nearest = match.argmax(axis=1)
        like = match[np.arange(n_beats), nearest]
        left = np.flatnonzero((like <= self.limit[nearest]) | ~_same_size(size, own_size[nearest]))
        if left.size:
            templates = unit(QRS.at_all_lags(self.shape_mv))[0].reshape(-1, QRS.length)
            shifted = (direction[left] @ templates.T).reshape(left.size, -1, 2 * REACH + 1)
            match = shifted.max(axis=2)
            match[~_same_size(size[left, None], own_size)] -= 1
            nearest[left] = match.argmax(axis=1)
            like[left] = match[np.arange(left.size), nearest[left]]
        family = np.where(like > self.limit[nearest], nearest, -1)
        return Membership(family.astype(np.int16), nearest.astype(np.int16), like)

    def _grow(
        self,
        direction: NDArray[np.float32],
        size: NDArray[np.float32],
        shape_mv: NDArray[np.float32],
        free: NDArray[np.int64],
    ) -> None:
        """Found families among free beats, the most common shape first, until no two beats are alike.

        The more families there are, the more beats a new one needs: a long recording must not fill up with rare noise
        and have no room left for a new focus.
        """
        direction, size = direction[free], size[free]
        for _ in range(MOST_NEW_FAMILIES if self.n_beats.size == 0 else MOST_LATER_FAMILIES):
            seed = _seed(direction)
            if seed < 0:
                break
            shape, scatter, is_member = _settle(direction, size, shape_mv, free, seed)
            if self.n_beats.size == 0:
                self.loosest = float(np.clip(1 - MAIN_SCATTER_ALLOWED * scatter, LOOSEST, LOOSEST_WHEN_CLEAN))
            if np.count_nonzero(is_member) >= _least_beats(self.n_beats.size):
                self.shape_mv = np.vstack([self.shape_mv, shape[None]])
                self.limit = np.append(self.limit, np.float32(max(_limit(scatter), self.loosest)))
                self.n_beats = np.append(self.n_beats, 0)
            is_member[seed] = True
            free, direction, size = free[~is_member], direction[~is_member], size[~is_member]

    def _learn(self, shape_mv: NDArray[np.float32], member: Membership) -> None:
        """Move every averaged shape towards the beats it was given."""
        count = np.bincount(member.family[member.family >= 0], minlength=self.n_beats.size)
        order = np.argsort(member.family, kind="stable")
        begin = np.searchsorted(member.family[order], np.arange(count.size))
        for family in np.flatnonzero(count):
            mine = order[begin[family] : begin[family] + count[family]]
            learned = mean_of(shape_mv, mine)
            self.shape_mv[family] += weight(int(self.n_beats[family]), int(count[family])) * (
                learned - self.shape_mv[family]
            )
        self.n_beats += count


def mean_of(rows: NDArray[np.float32], chosen: NDArray[np.int64]) -> NDArray[np.float32]:
    """Mean of an even sample of the chosen rows."""
    return rows[chosen[:: -(-chosen.size // MEAN_SAMPLE)]].mean(axis=0)


def weight(n_known: int, n_new: int) -> np.float32:
    """How much of what new beats show goes into an average that knows so many beats."""
    return np.float32(n_new / (min(n_known, MEMORY_BEATS) + n_new))


def _least_beats(n_families: int) -> int:
    """Beats that a family needs to be founded beside so many others: 1, 4, 16, ..."""
    return 4 ** (n_families // MANY_FAMILIES)


def _same_size(size: NDArray[np.float32], other: NDArray[np.float32]) -> NDArray[np.bool_]:
    return (size < AMPLITUDE_LIMIT * other) & (other < AMPLITUDE_LIMIT * size)


def _seed(direction: NDArray[np.float32]) -> int:
    """Row of the beat with most look-alikes among an even sample of beats; -1 when no two are alike."""
    step = max(1, -(-direction.shape[0] // SEED_SAMPLE))
    sample = direction[::step]
    friends = (sample @ sample.T > LOOSEST).sum(axis=0)
    best = int(friends.argmax()) if friends.size else 0
    return best * step if friends.size and friends[best] >= 2 else -1


def _settle(
    direction: NDArray[np.float32],
    size: NDArray[np.float32],
    shape_mv: NDArray[np.float32],
    free: NDArray[np.int64],
    seed: int,
) -> tuple[NDArray[np.float32], float, NDArray[np.bool_]]:
    """Averaged shape, scatter and members of the family that a seed founds; `free` are the beats' rows in `shape_mv`."""
    shape, scatter = shape_mv[free[seed]], _first_scatter(direction @ direction[seed])
    near = _same_size(size, size[seed])
    for _ in range(3):
        in_place = direction @ unit(QRS.of(shape[None]))[0][0]
        is_member = (in_place > _limit(scatter)) & near
        member = free[is_member]
        if member.size == 0:
            break
        shape = shape_mv[member[:: -(-member.size // MEAN_SAMPLE)]].mean(axis=0)
        scatter = _quantile(1 - in_place[is_member], 0.5)
    return shape, scatter, is_member


def _first_scatter(match: NDArray[np.float32]) -> float:
    """Scatter around a seed, from the nearer ones of its look-alikes: another shape among them must not widen it."""
    return _quantile(1 - match[match > LOOSEST], 0.25)


def _quantile(values: NDArray[np.float32], share: float) -> float:
    """Quantile of an even sample of the values: enough for a limit."""
    sample = values[:: -(-values.size // SCATTER_SAMPLE)]
    at = int(share * (sample.size - 1))
    return float(np.partition(sample, at)[at])


def _limit(scatter: float) -> float:
    return float(np.clip(1 - SCATTER_ALLOWED * scatter, LOOSEST, TIGHTEST))
