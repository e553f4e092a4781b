"""Synthetic single-lead ECG with a known beat list, for the demo programme, the tests and the benchmarks.

Method: the wave model of McSharry et al., IEEE Trans Biomed Eng 2003;50:289, DOI 10.1109/TBME.2003.808805: a beat is
a sum of Gaussian waves, the T wave moving with the square root of the RR interval.
Differs from the paper: the waves are summed directly and not integrated as a differential equation (the sum is that
equation's steady solution, hundreds of times faster); QRS waves have fixed widths in milliseconds and are narrower, so
that the normal QRS is under 100 ms; ectopic shapes, their timing, the day pattern, noise and lead-off are ours.
The same seed gives the same bytes. Memory is flat: an hour is made at a time.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

MV_PER_COUNT = 0.0025
RAIL_COUNT = 32767
HOUR_S = 3600

_BEFORE_S, _AFTER_S = 0.26, 0.60  # a beat's waves lie within these distances of its R peak
_QT_STEPS = 24
_RR_RANGE_S = (0.3, 1.6)  # T waves move with RR within this range


class Wave(NamedTuple):
    """One Gaussian wave of a beat."""

    at_ms: float  # distance from the R peak
    width_ms: float  # standard deviation
    mv: float


class Shape(NamedTuple):
    """One beat shape: waves at fixed distances, and a T wave given for an RR interval of 1 s."""

    fixed: tuple[Wave, ...]
    t_wave: Wave


_P_WAVE = Wave(-165, 20, 0.12)
_NORMAL_QRS = (Wave(-25, 8, -0.10), Wave(0, 9.5, 1.15), Wave(25, 9, -0.22))
_NORMAL_T = Wave(290, 42, 0.30)
NORMAL = Shape((_P_WAVE, *_NORMAL_QRS), _NORMAL_T)
WITHOUT_P = Shape(_NORMAL_QRS, _NORMAL_T)
ATRIAL = Shape((Wave(-125, 16, -0.10), *_NORMAL_QRS), _NORMAL_T)
VENTRICULAR = (
    Shape((Wave(-34, 16, 0.35), Wave(0, 25, 1.45), Wave(52, 22, -0.45)), Wave(300, 60, -0.48)),
    Shape((Wave(-42, 18, 0.22), Wave(0, 30, -1.35), Wave(58, 20, 0.25)), Wave(310, 62, 0.50)),
    Shape((Wave(-50, 17, 0.70), Wave(0, 22, 0.95), Wave(48, 24, 0.40)), Wave(300, 58, -0.38)),
)

# Kinds of beats as drawn: what the truth calls them, and their shape.
KINDS: tuple[tuple[str, Shape], ...] = (
    ("N", NORMAL),
    ("S", ATRIAL),
    *(("V", shape) for shape in VENTRICULAR),
    ("N", WITHOUT_P),
)
_N, _S, _V, _N_WITHOUT_P = 0, 1, 2, 5  # first index of each class in KINDS; fusion beats are _FUSION + family
_FUSION = len(KINDS)


class TrueBeats(NamedTuple):
    """What was drawn, ordered by sample. All arrays have shape (n_beats,)."""

    sample: NDArray[np.int64]
    beat_class: NDArray[np.str_]  # N, S, V or F
    kind: NDArray[np.int64]  # index into KINDS; from len(KINDS) on a fusion with ventricular family kind - len(KINDS)


class Rhythm(NamedTuple):
    """What a heart does over days. Shares are of all beats; the day pattern and chance move them."""

    rate_bpm: float = 72.0
    day_night_swing: float = 0.15  # rate falls and rises by this share over the day, highest at 15:00
    v_share_pct: float = 0.0
    v_family_weights: tuple[float, ...] = (1.0,)
    coupling_ms: tuple[float, ...] = (480.0, 520.0, 450.0)  # per ventricular family, at 72/min
    coupling_spread_ms: float = 14.0
    interpolated_share: float = 0.05  # of single ventricular beats
    reset_share: float = 0.1  # of single ventricular beats
    couplet_share: float = 0.06  # of ventricular units
    run_share: float = 0.01  # of ventricular units; runs of 3 to 8 beats
    bigeminy_share: float = 0.2  # of ventricular units that stand in stretches of bigeminy
    fusion_share: float = 0.01  # of ventricular units
    s_share_pct: float = 0.3
    v_day_swing: float = 0.35  # log ventricular share moves by this much over the day, highest at 14:00
    v_day_sd: float = 0.25  # standard deviation from day to day, natural log
    v_hour_sd: float = 0.25  # standard deviation from hour to hour, natural log
    atrial_fibrillation: bool = False


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
    waiting, at_s = _no_beats(), 0.5
    for number, first in enumerate(range(0, n_samples, per_hour)):
        end = min(first + per_hour, n_samples)
        clock_h = start_clock_h + number
        rng = np.random.default_rng([seed, round(clock_h * HOUR_S)])
        share = _ventricular_share(rhythm, clock_h, seed, rng)
        made, at_s = _beats_until(rhythm, share, clock_h, at_s, end / fs_hz + 1.0, fs_hz, rng)
        known = TrueBeats(*(np.concatenate(pair) for pair in zip(waiting, made, strict=True)))
        signal_mv = draw(known, first_sample=first, n_samples=end - first, fs_hz=fs_hz)
        counts = _with_noise(signal_mv, noise, fs_hz, rng)
        yield Hour(counts, _select(known, (known.sample >= first) & (known.sample < end)))
        reaches_on = int(np.searchsorted(known.sample, end - round(_AFTER_S * fs_hz)))
        waiting = _select(known, slice(max(reaches_on - 1, 0), None))  # one more: the RR before sets the T wave


def exact_beats(rhythm_s: list[tuple[str, float]], *, fs_hz: int = 250, first_s: float = 0.5) -> TrueBeats:
    """Beats from (kind, seconds since the beat before); the first interval counts from `first_s`.

    Kinds: N, S, V or V0, V1, V2 (ventricular family), F or F0, F1, F2 (fusion of a normal beat with that family).
    """
    names = [name for name, _ in rhythm_s]
    kinds = np.array([_kind(name) for name in names], dtype=np.int64)
    at_s = first_s + np.cumsum([interval_s for _, interval_s in rhythm_s])
    return TrueBeats(np.round(at_s * fs_hz).astype(np.int64), np.array([name[0] for name in names]), kinds)


def _kind(name: str) -> int:
    family = int(name[1:] or 0)
    if name[0] in "NS" and name in ("N", "S"):
        return {"N": _N, "S": _S}[name]
    if name[0] in "VF" and family < len(VENTRICULAR):
        return family + (_V if name[0] == "V" else _FUSION)
    raise ValueError(f"kind {name!r}; expected N, S, V0 to V{len(VENTRICULAR) - 1} or F0 to F{len(VENTRICULAR) - 1}")


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


def _templates(fs_hz: int, before: int, after: int) -> NDArray[np.float32]:
    """Drawn beats, shape (n_kinds, _QT_STEPS, before + after)."""
    t_ms = np.arange(-before, after) * 1000.0 / fs_hz
    rr_s = np.linspace(*_RR_RANGE_S, _QT_STEPS)
    drawn = [np.stack([_beat(shape, rr, t_ms) for rr in rr_s]) for _, shape in KINDS]
    fusions = [0.5 * (drawn[_N] + drawn[_V + family]) for family in range(len(VENTRICULAR))]
    return np.stack([*drawn, *fusions]).astype(np.float32)


def _beat(shape: Shape, rr_s: float, t_ms: NDArray[np.float64]) -> NDArray[np.float64]:
    stretch = np.sqrt(min(rr_s, 1.2))
    t_wave = shape.t_wave._replace(at_ms=shape.t_wave.at_ms * stretch, width_ms=shape.t_wave.width_ms * stretch)
    return np.sum([w.mv * np.exp(-0.5 * ((t_ms - w.at_ms) / w.width_ms) ** 2) for w in (*shape.fixed, t_wave)], axis=0)


def _no_beats() -> TrueBeats:
    return TrueBeats(np.zeros(0, np.int64), np.zeros(0, "U1"), np.zeros(0, np.int64))


def _select(beats: TrueBeats, chosen: NDArray[np.bool_] | slice) -> TrueBeats:
    return TrueBeats(beats.sample[chosen], beats.beat_class[chosen], beats.kind[chosen])


def _ventricular_share(rhythm: Rhythm, clock_h: float, seed: int, rng: np.random.Generator) -> float:
    """Share of ventricular beats that this hour aims at: day pattern times day chance times hour chance."""
    of_day = np.random.default_rng([seed, 1_000_000 + int(clock_h // 24)]).normal(0, rhythm.v_day_sd)
    swing = rhythm.v_day_swing * np.cos(2 * np.pi * (clock_h - 14.0) / 24)
    centre = -0.5 * (rhythm.v_day_sd**2 + rhythm.v_hour_sd**2 + 0.5 * rhythm.v_day_swing**2)  # keeps the mean
    share = rhythm.v_share_pct / 100 * np.exp(centre + swing + of_day + rng.normal(0, rhythm.v_hour_sd))
    return float(min(share, 0.48))


class _Units(NamedTuple):
    """What follows each sinus beat: some ectopic beats or none, then a beat that closes the unit."""

    ectopics: NDArray[np.int64]
    kind: NDArray[np.int64]
    coupling_s: NDArray[np.float64]
    between_s: NDArray[np.float64]  # between the ectopic beats of a couplet or run
    closing_s: NDArray[np.float64]
    closing_kind: NDArray[np.int64]


def _beats_until(
    rhythm: Rhythm, share: float, clock_h: float, at_s: float, end_s: float, fs_hz: int, rng: np.random.Generator
) -> tuple[TrueBeats, float]:
    """Beats from the sinus beat at `at_s` on until `end_s` is passed, and where the next sinus beat is due."""
    rate_bpm = rhythm.rate_bpm * (1 + rhythm.day_night_swing * np.cos(2 * np.pi * (clock_h - 15.0) / 24))
    n_units = int((end_s - at_s) * rate_bpm / 60 * 1.1) + 20
    rr_s = _sinus_rr_s(rhythm, 60.0 / rate_bpm, n_units, rng)
    units = _with_supraventricular(rhythm, _ventricular_units(rhythm, share, rr_s, rng), rr_s, rng)
    unit, place = _unfold(units.ectopics + 1)
    closes = place == units.ectopics[unit]
    interval_s = np.where(place == 0, units.coupling_s[unit], units.between_s[unit])
    interval_s = np.where(closes, units.closing_s[unit], interval_s)
    kind = np.where(closes, units.closing_kind[unit], units.kind[unit])
    time_s = at_s + np.concatenate([[0.0], np.cumsum(interval_s)])
    kind = np.concatenate([[_N_WITHOUT_P if rhythm.atrial_fibrillation else _N], kind])
    ends = np.concatenate([[True], closes])
    last = int(np.flatnonzero(ends & (time_s >= end_s))[0])
    made = slice(0, last)  # the beat at `last` is the first of the next call
    classes = np.array([*(name for name, _ in KINDS), *["F"] * len(VENTRICULAR)])
    return (
        TrueBeats(np.round(time_s[made] * fs_hz).astype(np.int64), classes[kind[made]], kind[made]),
        float(time_s[last]),
    )


def _unfold(lengths: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """For units of the given lengths: the unit of each member, and its place within the unit."""
    unit = np.repeat(np.arange(len(lengths)), lengths)
    return unit, np.arange(len(unit)) - np.repeat(np.cumsum(lengths) - lengths, lengths)


def _sinus_rr_s(rhythm: Rhythm, mean_s: float, n: int, rng: np.random.Generator) -> NDArray[np.float64]:
    if rhythm.atrial_fibrillation:
        return mean_s * np.clip(1 + 0.22 * rng.standard_normal(n), 0.5, 1.9)
    breathing = 0.025 * np.sin(2 * np.pi * 0.25 * mean_s * np.arange(n) + rng.uniform(0, 6))
    slow = np.convolve(rng.standard_normal(n + 39), np.ones(40) / np.sqrt(40), mode="valid")
    return mean_s * (1 + breathing + 0.025 * slow + 0.006 * rng.standard_normal(n))


def _ventricular_units(rhythm: Rhythm, share: float, rr_s: NDArray[np.float64], rng: np.random.Generator) -> _Units:
    n = len(rr_s)
    chance = rng.random(n)
    runs, pairs = chance < rhythm.run_share, chance < rhythm.run_share + rhythm.couplet_share
    length = np.where(runs, rng.integers(3, 9, n), np.where(pairs, 2, 1))
    mean_length = 1 + rhythm.couplet_share + 4.5 * rhythm.run_share
    some = _where_units_stand(rhythm, share / (mean_length * (1 - share)), n, rng)
    single = some & (length == 1)
    fused = single & (rng.random(n) < rhythm.fusion_share)
    weights = np.array(rhythm.v_family_weights) / sum(rhythm.v_family_weights)
    family = rng.choice(len(weights), n, p=weights)
    scale = np.sqrt(rr_s / (60 / 72))
    jitter_s = rng.normal(0, rhythm.coupling_spread_ms / 1000, n)
    coupling_s = np.clip(np.array(rhythm.coupling_ms)[family] / 1000 * scale + jitter_s, 0.28, 0.85 * rr_s)
    pause = rng.random(n)
    interpolated = single & (pause < rhythm.interpolated_share) & (rr_s > 0.85)
    reset = single & (pause > 1 - rhythm.reset_share)
    closing_s = np.select(
        [~some | fused, interpolated, reset, single],
        [rr_s, rr_s - coupling_s, 1.05 * rr_s, 2 * rr_s - coupling_s],
        1.2 * rr_s,
    )
    normal = _N_WITHOUT_P if rhythm.atrial_fibrillation else _N
    between_s = rng.uniform(0.36, 0.52, n)
    return _Units(
        np.where(some & ~fused, length, 0), _V + family, coupling_s, between_s, closing_s,
        np.where(fused, _FUSION + family, normal),
    )  # fmt: skip


def _where_units_stand(rhythm: Rhythm, chance: float, n: int, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Which sinus beats an ectopic unit follows: some alone, some in stretches of bigeminy of 6 to 30 beats."""
    chance = min(chance, 0.98)
    in_stretches = chance * rhythm.bigeminy_share
    alone = rng.random(n) < (chance - in_stretches) / max(1 - in_stretches, 1e-9)
    begins = np.flatnonzero(rng.random(n) < in_stretches / 18)
    stretch, place = _unfold(rng.integers(6, 31, len(begins)))
    alone[np.minimum(begins[stretch] + place, n - 1)] = True
    return alone


def _with_supraventricular(
    rhythm: Rhythm, units: _Units, rr_s: NDArray[np.float64], rng: np.random.Generator
) -> _Units:
    """Give some of the units without ectopy one early atrial beat, rarely a run of 3 to 12, with a reset pause."""
    n, share = len(rr_s), rhythm.s_share_pct / 100
    atrial = (units.ectopics == 0) & (units.closing_kind == _N) & (rng.random(n) < share / (1 - share))
    length = np.where(rng.random(n) < 0.03, rng.integers(3, 13, n), 1)
    return units._replace(
        ectopics=np.where(atrial, length, units.ectopics),
        kind=np.where(atrial, _S, units.kind),
        coupling_s=np.where(atrial, rr_s * rng.uniform(0.58, 0.74, n), units.coupling_s),
        between_s=np.where(atrial, rr_s * rng.uniform(0.5, 0.65, n), units.between_s),
        closing_s=np.where(atrial, rr_s * 1.08, units.closing_s),
    )


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
