"""Synthetic beats: their shapes, and when they come in a heart with ectopy, over days and nights. No samples here.

Drawing the beats and adding noise is the work of detectors/synthetic.py, which also names the source of the wave model.
Timing is ours: an ectopic beat leaves the sinus node alone (full pause), resets it, or is interpolated.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray


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
BLOCK = Shape(
    (_P_WAVE, Wave(-28, 16, 0.55), Wave(5, 22, 0.95), Wave(48, 18, 0.35)), Wave(310, 50, -0.30)
)  # left bundle
VENTRICULAR = (
    Shape((Wave(-34, 16, 0.35), Wave(0, 25, 1.45), Wave(52, 22, -0.45)), Wave(300, 60, -0.48)),
    Shape((Wave(-42, 18, 0.22), Wave(0, 30, -1.35), Wave(58, 20, 0.25)), Wave(310, 62, 0.50)),
    Shape((Wave(-44, 13, 0.60), Wave(0, 14, 1.05), Wave(44, 17, 0.45)), Wave(300, 58, -0.38)),  # notched
    Shape((Wave(-50, 17, 0.70), Wave(0, 22, 0.95), Wave(48, 24, 0.40)), Wave(300, 58, -0.38)),  # slurred: hard to find
)

# Kinds of beats as drawn: what the truth calls them, and their shape.
KINDS: tuple[tuple[str, Shape], ...] = (
    ("N", NORMAL),
    ("S", ATRIAL),
    *(("V", shape) for shape in VENTRICULAR),
    ("N", WITHOUT_P),
    ("N", BLOCK),
)
NORMAL_KIND, ATRIAL_KIND, FIRST_VENTRICULAR_KIND = 0, 1, 2
WITHOUT_P_KIND = FIRST_VENTRICULAR_KIND + len(VENTRICULAR)
BLOCK_KIND = WITHOUT_P_KIND + 1
FIRST_FUSION_KIND = len(KINDS)  # a fusion of the normal beat with a ventricular family


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
    coupling_ms: tuple[float, ...] = (480.0, 520.0, 450.0, 450.0)  # per ventricular family, at 72/min
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


def no_beats() -> TrueBeats:
    """An empty beat list."""
    return TrueBeats(np.zeros(0, np.int64), np.zeros(0, "U1"), np.zeros(0, np.int64))


def select(beats: TrueBeats, chosen: NDArray[np.bool_] | slice) -> TrueBeats:
    """Some of the beats."""
    return TrueBeats(beats.sample[chosen], beats.beat_class[chosen], beats.kind[chosen])


def exact_beats(rhythm_s: list[tuple[str, float]], *, fs_hz: int = 250, first_s: float = 0.5) -> TrueBeats:
    """Beats from (kind, seconds since the beat before); the first interval counts from `first_s`.

    Kinds: N, B (conducted with bundle branch block, class N), S, V or V0 to V3 (ventricular family), F or F0 to F3
    (fusion of a normal beat with that family).
    """
    names = [name for name, _ in rhythm_s]
    kinds = np.array([_kind(name) for name in names], dtype=np.int64)
    at_s = first_s + np.cumsum([interval_s for _, interval_s in rhythm_s])
    beat_class = np.array(["N" if name == "B" else name[0] for name in names])
    return TrueBeats(np.round(at_s * fs_hz).astype(np.int64), beat_class, kinds)


def _kind(name: str) -> int:
    family = int(name[1:] or 0)
    plain = {"N": NORMAL_KIND, "S": ATRIAL_KIND, "B": BLOCK_KIND}
    if name in plain:
        return plain[name]
    if name[0] in "VF" and family < len(VENTRICULAR):
        return family + (FIRST_VENTRICULAR_KIND if name[0] == "V" else FIRST_FUSION_KIND)
    raise ValueError(f"kind {name!r}; expected N, B, S, V0 to V{len(VENTRICULAR) - 1} or F0 to F{len(VENTRICULAR) - 1}")


def ventricular_share(rhythm: Rhythm, clock_h: float, seed: int, rng: np.random.Generator) -> float:
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


def beats_until(
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
    kind = np.concatenate([[WITHOUT_P_KIND if rhythm.atrial_fibrillation else NORMAL_KIND], kind])
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
    normal = WITHOUT_P_KIND if rhythm.atrial_fibrillation else NORMAL_KIND
    between_s = rng.uniform(0.36, 0.52, n)
    return _Units(
        np.where(some & ~fused, length, 0), FIRST_VENTRICULAR_KIND + family, coupling_s, between_s, closing_s,
        np.where(fused, FIRST_FUSION_KIND + family, normal),
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
    atrial = (units.ectopics == 0) & (units.closing_kind == NORMAL_KIND) & (rng.random(n) < share / (1 - share))
    length = np.where(rng.random(n) < 0.03, rng.integers(3, 13, n), 1)
    return units._replace(
        ectopics=np.where(atrial, length, units.ectopics),
        kind=np.where(atrial, ATRIAL_KIND, units.kind),
        coupling_s=np.where(atrial, rr_s * rng.uniform(0.58, 0.74, n), units.coupling_s),
        between_s=np.where(atrial, rr_s * rng.uniform(0.5, 0.65, n), units.between_s),
        closing_s=np.where(atrial, rr_s * 1.08, units.closing_s),
    )
