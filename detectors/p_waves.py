"""Whether a beat has the P wave of the sinus beats of its family, told beat by beat while the samples are at hand.

Common practice, no source: a conducted beat that the sinus node did not begin has another P wave or none.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from detectors import families
from detectors.chunks import SHAPE_BEFORE
from detectors.families import P_WAVE, QRS

# Marks of a beat: nothing can be told, its family's P wave, in doubt, another or none.
HIDDEN, SAME, NEITHER, OTHER = range(4)
LAGS = (-3, 0, 3)  # working samples: with the rate a P wave moves by 24 ms
SEEN = 0.03  # size of a P wave over its QRS, root mean squares: less is no P wave
HELD = 0.6  # part of the P wave in a beat that has it, where
HELD_REST = 0.8  # what else there is is smaller than this share of the P wave
LOST = 0.35  # part of the P wave in a beat that has another one or none, where
LOST_REST = 1.3  # what else there is is little larger than the P wave
SHORTENS = 0.88  # interval after a beat over the one before it
ALONE_LAG = 8  # working samples: how far the steepest bend of a P wave lies from the middle of the stretch
ALONE_LIKE = 0.9  # correlation with the main P wave, and
ALONE_SIZE = 0.5  # log of the size over its size, either side, and
ALONE_SMALL = 0.5  # of the main QRS at most
LAST_BEATS = 16  # that many tell a P wave from noise


class PWaveBook:
    """The sinus P wave of every family so far; the row number is the family number."""

    def __init__(self) -> None:
        self.wave_mv = np.zeros((0, P_WAVE.length), dtype=np.float32)
        self.n_beats = np.zeros(0, dtype=np.int64)

    def enter(
        self, shape_mv: NDArray[np.float32], working: NDArray[np.float64], family: NDArray[np.int16], n_families: int
    ) -> None:
        """Learn from one batch of beats in order of time, shapes (n_beats, SHAPE_LENGTH); family -1 is left out."""
        n_new = n_families - self.n_beats.size
        self.wave_mv = np.pad(self.wave_mv, ((0, n_new), (0, 0)))
        known = np.pad(self.n_beats, (0, n_new))
        count = np.bincount(family[family >= 0], minlength=n_families)
        wave_mv, is_last = P_WAVE.of(shape_mv), _precedes_early_beat(working)
        for row in np.flatnonzero(count):
            mine = np.flatnonzero(family == row)
            last = mine[is_last[mine]]
            learned = families.mean_of(wave_mv, last if last.size >= LAST_BEATS else mine)
            self.wave_mv[row] += families.weight(int(known[row]), int(count[row])) * (learned - self.wave_mv[row])
        self.n_beats = known + count

    def is_p_wave(self, family_shape_mv: NDArray[np.float32]) -> NDArray[np.bool_]:
        """Families whose beats are P waves that no QRS follows, shape (n_families,): the largest family's, alone in a gap."""
        if self.n_beats.size == 0:
            return np.zeros(0, dtype=bool)
        main = int(self.n_beats.argmax())
        wave, size = families.unit(self.wave_mv[main])
        begin = SHAPE_BEFORE - P_WAVE.length // 2
        stretches = sliding_window_view(family_shape_mv, P_WAVE.length, axis=1)
        direction, own_size = families.unit(stretches[:, begin - ALONE_LAG : begin + ALONE_LAG + 1])
        is_alike = (direction @ wave > ALONE_LIKE) & (np.abs(np.log(own_size / size)) < ALONE_SIZE)
        qrs_size = families.unit(QRS.of(family_shape_mv))[1]
        return is_alike.any(axis=1) & (qrs_size < ALONE_SMALL * qrs_size[main])

    def marks(
        self, shape_mv: NDArray[np.float32], family: NDArray[np.int16], family_shape_mv: NDArray[np.float32]
    ) -> NDArray[np.int8]:
        """Marks of beats of a family each, shape (n_beats,).

        HIDDEN where the family's P wave cannot be seen, NEITHER where noise or the T wave before may hide the beat's own.
        """
        if self.n_beats.size == 0:
            return np.full(family.size, HIDDEN, dtype=np.int8)
        wave, size = families.unit(self.wave_mv)
        qrs_size = families.unit(QRS.of(family_shape_mv))[1] * np.float32((P_WAVE.length / QRS.length) ** 0.5)
        own = (wave / size[:, None])[family]
        part = np.full(family.size, -np.inf, dtype=np.float32)
        for lag in LAGS:
            shifted = P_WAVE._replace(before=P_WAVE.before - lag).of(shape_mv)
            np.maximum(part, np.einsum("ij,ij->i", shifted, own), out=part)
        whole = families.unit(P_WAVE.of(shape_mv))[1] / size[family]
        rest = np.sqrt(np.maximum(whole * whole - part * part, 0))
        is_same = (part > HELD) & (rest < HELD_REST)
        is_other = (part < LOST) & (rest < LOST_REST)
        mark = np.select([(size <= SEEN * qrs_size)[family], is_same, is_other], [HIDDEN, SAME, OTHER], NEITHER)
        return mark.astype(np.int8)


def _precedes_early_beat(working: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Beats after which the interval shortens at once, shape (n_beats,): the last sinus beats before ectopic ones.

    From them a family learns its sinus P wave even where ectopic beats of the same shape outnumber the sinus beats.
    """
    rr = np.diff(working, prepend=np.nan, append=np.nan)
    return rr[1:] < SHORTENS * rr[:-1]
