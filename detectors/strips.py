"""Choose the short stretches of ECG that a reader looks at before believing a number.

The rules are fixed; no chance is involved.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.results import Analysis

STRIP_S = 10.0
MAX_STRIPS = 24
FAMILIES_PER_CLASS = 3


class Strip(NamedTuple):
    """One chosen stretch: samples first_sample..first_sample + n_samples of a segment, and the rule that chose it."""

    segment: int
    first_sample: int
    n_samples: int
    beat_class: str
    strip_reason: str


def choose_strips(analysis: Analysis) -> list[Strip]:
    """Return at most MAX_STRIPS strips of STRIP_S seconds that do not overlap, most telling first.

    Order: longest and fastest run, longest pause, fastest couplet, longest bigeminy, then for V, S, F the typical and
    the least certain beat of the largest families, then one stretch around the middle normal beat.
    A strip is centred on its beat or begins one second before its episode, and is cut at the segment's ends.
    """
    chosen: list[Strip] = []
    for segment, sample, beat_class, reason in _candidates(analysis):
        strip = _around(analysis, segment, sample, beat_class, reason)
        if not any(_overlap(strip, other) for other in chosen):
            chosen.append(strip)
        if len(chosen) == MAX_STRIPS:
            break
    return chosen


def _around(analysis: Analysis, segment: int, sample: int, beat_class: str, reason: str) -> Strip:
    length = min(round(STRIP_S * analysis.fs_hz), analysis.segment_samples[segment])
    first = min(max(sample - length // 2, 0), analysis.segment_samples[segment] - length)
    return Strip(segment, first, length, beat_class, reason)


def _overlap(a: Strip, b: Strip) -> bool:
    return (
        a.segment == b.segment
        and a.first_sample < b.first_sample + b.n_samples
        and b.first_sample < a.first_sample + a.n_samples
    )


def _candidates(analysis: Analysis) -> Iterator[tuple[int, int, str, str]]:
    yield from _episode_candidates(analysis)
    for beat_class in ("V", "S", "F"):
        yield from _beat_candidates(analysis, beat_class)
    normal = np.flatnonzero(analysis.beats.is_analysable & (analysis.beats.beat_class == "N"))
    if len(normal):
        yield _beat(analysis, normal[len(normal) // 2], "N", "the normal beat in the middle of the recording")


def _episode_candidates(analysis: Analysis) -> Iterator[tuple[int, int, str, str]]:
    episodes = analysis.episodes
    for kind, measure, name, beat_class in (
        ("run", episodes.beat_count, "longest run", "V"),
        ("run", episodes.rate_bpm, "fastest run", "V"),
        ("pause", episodes.duration_s, "longest pause", "N"),
        ("couplet", episodes.rate_bpm, "fastest couplet", "V"),
        ("bigeminy", episodes.beat_count, "longest bigeminy", "V"),
        ("sv_run", episodes.beat_count, "longest supraventricular run", "S"),
        ("irregular", episodes.duration_s, "longest irregular stretch", "N"),
    ):
        rows = np.flatnonzero(episodes.episode_kind == kind)
        if len(rows):
            row = rows[np.argmax(np.nan_to_num(measure[rows]))]
            middle = round(4 * analysis.fs_hz)
            yield int(episodes.segment[row]), int(episodes.first_sample[row]) + middle, beat_class, name


def _beat_candidates(analysis: Analysis, beat_class: str) -> Iterator[tuple[int, int, str, str]]:
    beats = analysis.beats
    of_class = beats.is_analysable & (beats.beat_class == beat_class)
    numbers, sizes = np.unique(beats.family[of_class & (beats.family >= 0)], return_counts=True)
    for family in numbers[np.argsort(-sizes, kind="stable")][:FAMILIES_PER_CLASS]:
        rows = np.flatnonzero(of_class & (beats.family == family))
        by_certainty = rows[np.argsort(beats.class_probability[rows], kind="stable")]
        kinds = {"N": "normal", "S": "supraventricular", "V": "ventricular", "F": "fusion"}
        name = f"{kinds[beat_class]} beat of family {family}"
        yield _beat(analysis, by_certainty[len(rows) // 2], beat_class, f"typical {name}")
        yield _beat(analysis, by_certainty[0], beat_class, f"least certain {name}")


def _beat(analysis: Analysis, row: int, beat_class: str, reason: str) -> tuple[int, int, str, str]:
    return int(analysis.beats.segment[row]), int(analysis.beats.sample[row]), beat_class, reason


def beats_within(analysis: Analysis, strip: Strip) -> NDArray[np.intp]:
    """Return the rows of the beats whose R peak lies in the strip, shape (n,)."""
    beats = analysis.beats
    inside = (beats.segment == strip.segment) & (beats.sample >= strip.first_sample)
    return np.flatnonzero(inside & (beats.sample < strip.first_sample + strip.n_samples))
