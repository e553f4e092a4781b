"""Beats of a recording: what stays of each once its samples are gone, and the table that analysis returns."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import confidence, qrs, rhythm
from detectors.classify import Labels
from detectors.families import FamilyBook, Membership
from detectors.results import Beats, Families
from detectors.timing import S_EARLY, Timing

FIRST_ROOM = 4096  # beats
RARE = 3  # beats of a family that may be an artefact


class Found(NamedTuple):
    """Detected beats with their family and the shape features that survive. Arrays of shape (n_beats,)."""

    segment: NDArray[np.int16]
    working: NDArray[np.float64]  # position in working samples within the segment
    energy: NDArray[np.float32]
    family: NDArray[np.int16]
    nearest: NDArray[np.int16]
    likeness: NDArray[np.float32]
    p_wave: NDArray[np.int8]  # marks of p_waves
    amplitude_mv: NDArray[np.float32]
    spread_ms: NDArray[np.float32]

    @property
    def kept(self) -> Kept:
        """The columns that are needed once instants and intervals are known."""
        return Kept(*(getattr(self, name) for name in Kept._fields))

    def keep(self, chosen: NDArray[np.bool_]) -> Found:
        """The chosen beats only; the columns are closed up in place, which spares a second table."""
        rows = np.flatnonzero(chosen)
        for column in self:
            column[: rows.size] = column[rows]
        return Found._make(column[: rows.size] for column in self)


class Kept(NamedTuple):
    """What stays of found beats beside their samples and intervals. Arrays of shape (n_beats,)."""

    segment: NDArray[np.int16]
    family: NDArray[np.int16]
    nearest: NDArray[np.int16]
    likeness: NDArray[np.float32]
    p_wave: NDArray[np.int8]  # marks of p_waves
    amplitude_mv: NDArray[np.float32]
    spread_ms: NDArray[np.float32]

    @property
    def member(self) -> Membership:
        """Family of each beat."""
        return Membership(self.family, self.nearest, self.likeness)


class Growing:
    """Found beats batch by batch, in columns that double when they are full; no batch is kept beside them."""

    def __init__(self) -> None:
        kinds = ("int16", "float64", "float32", "int16", "int16", "float32", "int8", "float32", "float32")
        self.n_beats = 0
        self._columns = [np.empty(FIRST_ROOM, dtype=kind) for kind in kinds]

    def append(self, batch: Found) -> None:
        """Copy a batch behind the beats so far."""
        begin, self.n_beats = self.n_beats, self.n_beats + batch.working.size
        for number, values in enumerate(batch):
            if self.n_beats > self._columns[number].size:
                larger = np.empty(2 * self.n_beats, dtype=self._columns[number].dtype)
                larger[:begin] = self._columns[number][:begin]
                self._columns[number] = larger
            self._columns[number][begin : self.n_beats] = values

    def since(self, first: int) -> Found:
        """All beats from number `first` on, as views that the next batch may leave behind."""
        return Found._make(column[first : self.n_beats] for column in self._columns)


def is_artefact(found: Found, timing: Timing) -> NDArray[np.bool_]:
    """Detections that are no QRS, shape (n_beats,): T waves of wide beats, and what is of rare shape."""
    in_family = np.bincount(found.family.astype(np.int64) + 1, minlength=1)
    in_family[0] = 0
    is_rare = in_family[found.family + 1] <= RARE
    is_stray = qrs.is_interloper(found.energy, timing.before_ms, timing.after_ms, timing.usual_ms, is_rare)
    return is_stray | qrs.is_t_wave(found.energy, timing.before_ms)


def beat_table(
    found: Kept,
    sample: NDArray[np.int64],
    timing: Timing,
    labels: Labels,
    family_width_ms: NDArray[np.float32],
    is_analysable: NDArray[np.bool_],
    full_pause_tolerance_pct: float,
) -> Beats:
    """The table of beats that analysis returns."""
    is_ectopic = (labels.beat_class == "V") | (labels.beat_class == "S")
    timing = timing._replace(usual_ms=rhythm.usual_rr_outside_ms(*timing, is_ectopic))
    is_premature = is_ectopic & (timing.before < S_EARLY)
    follows_ectopic = np.concatenate([[False], is_ectopic[:-1]]) if is_ectopic.size else is_ectopic
    coupling = np.where(is_premature & ~follows_ectopic, timing.before_ms, np.float32(np.nan))
    widths = np.append(family_width_ms, np.float32(0))
    return Beats(
        segment=found.segment,
        sample=sample,
        rr_before_ms=timing.before_ms,
        rr_after_ms=timing.after_ms,
        beat_class=labels.beat_class,
        class_probability=confidence.probability(labels.beat_class, labels.odds, timing.before),
        family=found.family,
        qrs_width_ms=np.where(found.family >= 0, widths[found.family], found.spread_ms).astype(np.float32),
        amplitude_mv=found.amplitude_mv,
        polarity=np.where(found.amplitude_mv < 0, -1, 1).astype(np.int8),
        coupling_ms=coupling,
        prematurity_pct=(100 * (1 - timing.before)).astype(np.float32),
        pause_kind=rhythm.pause_kinds(
            timing.before_ms,
            timing.after_ms,
            timing.usual_ms,
            _is_alone(is_ectopic, is_premature),
            full_pause_tolerance_pct,
        ),
        r_on_t_index=rhythm.r_on_t_index(coupling, timing.usual_ms),
        is_escape=(labels.beat_class == "V") & (timing.before > rhythm.ESCAPE_LIMIT),
        is_analysable=is_analysable,
    )


def _is_alone(is_ectopic: NDArray[np.bool_], is_premature: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Premature beats between two that are not ectopic: only those have a pause of their own."""
    around = np.concatenate([[False], is_ectopic, [False]])
    return is_premature & ~around[:-2] & ~around[2:]


def family_table(
    beats: Beats, book: FamilyBook, family_class: NDArray[np.str_], family_width_ms: NDArray[np.float32]
) -> Families:
    """The table of families that analysis returns."""
    n_families = book.n_beats.size
    rows = np.full((n_families, 5), np.nan)
    for row in range(n_families):
        mine = beats.family == row
        coupling = beats.coupling_ms[mine]
        coupling = coupling[~np.isnan(coupling)]
        rows[row, :2] = np.count_nonzero(mine), np.count_nonzero(beats.is_analysable & mine)
        if rows[row, 0]:
            rows[row, 2] = np.median(beats.amplitude_mv[mine])
        if coupling.size:
            rows[row, 3:] = coupling.mean(), np.subtract(*np.percentile(coupling, [90, 10]))
    return Families(
        family_class=family_class,
        beat_count=rows[:, 0].astype(np.int64),
        share_pct=100 * rows[:, 1] / max(np.count_nonzero(beats.is_analysable), 1),
        qrs_width_ms=family_width_ms,
        amplitude_mv=rows[:, 2].astype(np.float32),
        mean_coupling_ms=rows[:, 3].astype(np.float32),
        coupling_spread_ms=rows[:, 4].astype(np.float32),
        shape_mv=book.shape_mv,
    )
