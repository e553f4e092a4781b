"""Synthetic single-lead ECG with a known beat list, for the demo programme, the tests and the benchmarks.

Method: the wave model of McSharry et al., IEEE Trans Biomed Eng 2003;50:289, DOI 10.1109/TBME.2003.808805: a beat is
a sum of Gaussian waves, the T wave moving with the square root of the RR interval.
Differs from the paper: the waves are summed directly and not integrated as a differential equation (close to
its steady solution and hundreds of times faster); QRS waves have fixed widths in milliseconds and are narrower, so
that the normal QRS is under 100 ms; ectopic shapes, noise and lead-off are ours.
Which beats come when is the matter of detectors/synthetic_beats.py.
The same seed gives the same bytes. Memory is flat: an hour is made at a time.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.synthetic_beats import (
    FIRST_VENTRICULAR_KIND,
    KINDS,
    NORMAL_KIND,
    VENTRICULAR,
    Rhythm,
    Shape,
    TrueBeats,
    beats_until,
    no_beats,
    select,
    ventricular_share,
)

MV_PER_COUNT = 0.0025
RAIL_COUNT = 32767
HOUR_S = 3600

_BEFORE_S, _AFTER_S = 0.26, 0.60  # a beat's waves lie within these distances of its R peak
_QT_STEPS = 24
_RR_RANGE_S = (0.3, 1.6)  # T waves move with RR within this range


class Noise(NamedTuple):
    """What the patch adds. Events come at random with the given rates."""

    white_mv: float = 0.008
    wander_mv: float = 0.10
    muscle_mv: float = 0.05
    muscle_share: float = 0.10  # of 10-s windows
    motion_per_h: float = 1.5
    motion_mv: float = 1.0
    lead_off_per_h: float = 0.0
    lead_off_s: float = 90.0


class Hour(NamedTuple):
    """One piece of a synthetic recording."""

    counts: NDArray[np.int16]  # MV_PER_COUNT each, shape (n_samples,)
    beats: TrueBeats  # samples counted from the recording's first sample


CALM = Rhythm()
WORN = Noise()
QUIET = Noise(0.0, 0.0, 0.0, 0.0, 0.0, 0.0)


def recording(
    rhythm: Rhythm = CALM,
    noise: Noise = WORN,
    *,
    fs_hz: int = 250,
    hours: float = 1.0,
    start_clock_h: float = 0.0,
    seed: int = 0,
) -> Iterator[Hour]:
    """Yield a recording hour by hour, the last piece shorter when `hours` is not whole.

    `start_clock_h` is the local time of the first sample in hours since some midnight; it places the day pattern, and
    with the seed it settles chance: pieces of one wear share their day's chance and differ in all else.
    """
    n_samples = round(hours * HOUR_S * fs_hz)
    if n_samples < 1:
        raise ValueError(f"hours = {hours} at fs_hz = {fs_hz} gives no sample; expected at least one")
    per_hour = HOUR_S * fs_hz
    waiting, at_s = no_beats(), 0.5
    for number, first in enumerate(range(0, n_samples, per_hour)):
        end = min(first + per_hour, n_samples)
        clock_h = start_clock_h + number
        rng = np.random.default_rng([seed, round(clock_h * HOUR_S)])
        share = ventricular_share(rhythm, clock_h, seed, rng)
        made, at_s = beats_until(rhythm, share, clock_h, at_s, end / fs_hz + 1.0, fs_hz, rng)
        known = TrueBeats(*(np.concatenate(pair) for pair in zip(waiting, made, strict=True)))
        signal_mv = draw(known, first_sample=first, n_samples=end - first, fs_hz=fs_hz)
        counts = _with_noise(signal_mv, noise, fs_hz, rng)
        yield Hour(counts, select(known, (known.sample >= first) & (known.sample < end)))
        reaches_on = int(np.searchsorted(known.sample, end - round(_AFTER_S * fs_hz)))
        waiting = select(known, slice(max(reaches_on - 1, 0), None))  # one more: the RR before sets the T wave


def draw(beats: TrueBeats, *, n_samples: int, fs_hz: int, first_sample: int = 0) -> NDArray[np.float32]:
    """Noise-free ECG in mV of the beats that reach into the samples first_sample .. first_sample + n_samples."""
    before, after = round(_BEFORE_S * fs_hz), round(_AFTER_S * fs_hz)
    margin = before + after
    out = np.zeros(n_samples + 2 * margin, np.float32)
    templates = _templates(fs_hz, before, after)
    rr_s = np.diff(beats.sample, prepend=beats.sample[:1] - fs_hz) / fs_hz
    step = np.clip((rr_s - _RR_RANGE_S[0]) / (_RR_RANGE_S[1] - _RR_RANGE_S[0]), 0, 1) * (_QT_STEPS - 1)
    left = beats.sample - first_sample - before + margin
    reaches = (left >= 0) & (left <= n_samples + margin)
    left, kind, step = left[reaches], beats.kind[reaches], np.round(step[reaches]).astype(np.int64)
    nearest = int(np.diff(left).min()) if len(left) > 1 else margin
    turns = -(-margin // max(nearest, 1))  # so many beats may overlap; beats of one turn never do
    for turn in range(turns):
        mine = slice(turn, None, turns)
        where = left[mine, None] + np.arange(margin)
        out[where] += templates[kind[mine], step[mine]]
    return out[margin : margin + n_samples]


@cache
def _templates(fs_hz: int, before: int, after: int) -> NDArray[np.float32]:
    """Drawn beats, shape (n_kinds, _QT_STEPS, before + after)."""
    t_ms = np.arange(-before, after) * 1000.0 / fs_hz
    rr_s = np.linspace(*_RR_RANGE_S, _QT_STEPS)
    drawn = [np.stack([_beat(shape, rr, t_ms) for rr in rr_s]) for _, shape in KINDS]
    fusions = [
        0.5 * (drawn[NORMAL_KIND] + drawn[FIRST_VENTRICULAR_KIND + family]) for family in range(len(VENTRICULAR))
    ]
    return np.stack([*drawn, *fusions]).astype(np.float32)


def _beat(shape: Shape, rr_s: float, t_ms: NDArray[np.float64]) -> NDArray[np.float64]:
    stretch = np.sqrt(min(rr_s, 1.2))
    t_wave = shape.t_wave._replace(at_ms=shape.t_wave.at_ms * stretch, width_ms=shape.t_wave.width_ms * stretch)
    return np.sum([w.mv * np.exp(-0.5 * ((t_ms - w.at_ms) / w.width_ms) ** 2) for w in (*shape.fixed, t_wave)], axis=0)


def as_counts(signal_mv: NDArray[np.floating]) -> NDArray[np.int16]:
    """Millivolts as stored counts of MV_PER_COUNT, cut off at the rails."""
    return np.clip(np.rint(signal_mv / MV_PER_COUNT), -32768, RAIL_COUNT).astype(np.int16)


def _with_noise(
    signal_mv: NDArray[np.float32], noise: Noise, fs_hz: int, rng: np.random.Generator
) -> NDArray[np.int16]:
    """Counts of the signal with wander, white noise, bursts of muscle and electrode motion, and lead-off."""
    n, seconds = len(signal_mv), len(signal_mv) / fs_hz
    if noise.wander_mv:
        signal_mv += noise.wander_mv * _slow_noise(n, fs_hz, 0.4, rng)
    if noise.white_mv:
        signal_mv += np.float32(noise.white_mv) * rng.standard_normal(n, dtype=np.float32)
    for start in np.flatnonzero(rng.random(int(seconds / 10)) < noise.muscle_share) * 10 * fs_hz:
        white = rng.standard_normal(10 * fs_hz + 1, dtype=np.float32)
        signal_mv[start : start + 10 * fs_hz] += np.float32(noise.muscle_mv / np.sqrt(2)) * np.diff(white)
    for begin, length in _spells(n, noise.motion_per_h, (3.0, 12.0), fs_hz, rng):
        swing = np.hanning(length) * _slow_noise(length, fs_hz, 6.0, rng)
        signal_mv[begin : begin + length] += (noise.motion_mv * swing).astype(np.float32)
    counts = as_counts(signal_mv)
    for begin, length in _spells(n, noise.lead_off_per_h, (0.3 * noise.lead_off_s, 1.7 * noise.lead_off_s), fs_hz, rng):
        counts[begin : begin + length] = RAIL_COUNT
    return counts


def _slow_noise(n: int, fs_hz: int, highest_hz: float, rng: np.random.Generator) -> NDArray[np.float32]:
    """Noise of standard deviation near 1 below about `highest_hz`: random knots joined by lines."""
    knots = int(n / fs_hz * 2 * highest_hz) + 3
    at = np.arange(n) * (2 * highest_hz / fs_hz)
    return np.interp(at, np.arange(knots), 1.2 * rng.standard_normal(knots)).astype(np.float32)


def _spells(
    n: int, per_h: float, range_s: tuple[float, float], fs_hz: int, rng: np.random.Generator
) -> list[tuple[int, int]]:
    """Begin and length in samples of events that come at random and end within the piece."""
    count = rng.poisson(per_h * n / fs_hz / HOUR_S)
    begins = rng.integers(0, n, count)
    lengths = (rng.uniform(*range_s, count) * fs_hz).astype(np.int64)
    return [(int(begin), int(min(length, n - begin))) for begin, length in zip(begins, lengths, strict=True)]
