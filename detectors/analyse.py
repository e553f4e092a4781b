"""The one entry: samples of a recording in, beats, families, episodes, quality and findings out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import chunks, classify, episodes, families, features, qrs, quality, rhythm, signal
from detectors.results import Analysis, Beats, Families, Finding, Segment

DETECTOR_VERSION = "1"
BATCH_BEATS = 4096
RARE = 3  # beats of a family that may be an artefact


class _Batch(NamedTuple):
    """What stays of one batch of beats once its shapes are gone. Arrays of shape (n_beats,)."""

    segment: NDArray[np.int16]
    working: NDArray[np.float64]
    energy: NDArray[np.float32]
    family: NDArray[np.int64]
    nearest: NDArray[np.int64]
    likeness: NDArray[np.float32]
    features: features.Features


def analyse_signal(
    ecg_mv: NDArray[np.floating],
    *,
    fs_hz: float,
    bigeminy_min_cycles: int = 3,
    trigeminy_min_cycles: int = 3,
    pause_ms: float = 2000,
    full_pause_tolerance_pct: float = 8.0,
) -> Analysis:
    """Analyse one lead without a gap; see `analyse_recording`.

    `ecg_mv` has shape (n_samples,), mV, any number type; NaN and infinities are missing samples. Amplitudes are kept to
    1/32,000 of the largest one.
    """
    ecg_mv = signal.check_signal(ecg_mv)
    counts, mv_per_count = signal.to_counts(ecg_mv)
    segment = Segment(counts.size, lambda a, b: counts[a:b])
    return analyse_recording(
        [segment],
        fs_hz=fs_hz,
        mv_per_count=mv_per_count,
        missing_count=signal.MISSING_COUNT,
        bigeminy_min_cycles=bigeminy_min_cycles,
        trigeminy_min_cycles=trigeminy_min_cycles,
        pause_ms=pause_ms,
        full_pause_tolerance_pct=full_pause_tolerance_pct,
    )


def analyse_recording(
    segments: Sequence[Segment],
    *,
    fs_hz: float,
    mv_per_count: float,
    count_at_zero_mv: float = 0.0,
    rails: tuple[int, int] | None = None,
    missing_count: int | None = None,
    bigeminy_min_cycles: int = 3,
    trigeminy_min_cycles: int = 3,
    pause_ms: float = 2000,
    full_pause_tolerance_pct: float = 8.0,
    chunk_s: float = 3600.0,
    progress: Callable[[int], None] | None = None,
) -> Analysis:
    """Find and classify the beats of one recording of one lead.

    Parameters
    ----------
    segments : gap-free stretches in time order; read piece by piece, `chunk_s` at a time
    fs_hz : samples per second, 100 to 4000
    mv_per_count, count_at_zero_mv : millivolts of a stored count are (count - count_at_zero_mv) x mv_per_count
    rails : lowest and highest count that the recorder can store; None when unknown
    missing_count : count that stands for "no sample"; None when there is none
    bigeminy_min_cycles, trigeminy_min_cycles : shortest stretch that gets the name
    pause_ms : RR interval that counts as a pause
    full_pause_tolerance_pct : how far a full compensatory pause may fall short of two sinus cycles, % of one cycle
    chunk_s : length of the pieces; changes memory, never the answer
    progress : called with the samples done since the last call

    Raises ValueError when the rate or the scale is not usable.
    """
    scale = chunks.Scale(signal.check_rate(fs_hz), _check_scale(mv_per_count), count_at_zero_mv, rails, missing_count)
    book = families.FamilyBook()
    batches: list[_Batch] = []
    judged: list[quality.SegmentBlocks] = []
    for number, segment in enumerate(segments):
        waiting: list[chunks.ChunkBeats] = []
        blocks: list[chunks.Blocks] = []
        for begin, end in chunks.cuts(segment.n_samples, scale.fs_hz, chunk_s):
            found, seen = chunks.read_chunk(segment, begin, end, scale)
            blocks.append(seen)
            waiting = _drain(book, batches, number, [*waiting, found], BATCH_BEATS)
            if progress:
                progress(_stored(end, segment, scale) - _stored(begin, segment, scale))
        _drain(book, batches, number, waiting, 1)
        judged.append(quality.judge(quality.join(blocks), segment.n_samples))
    return _finish(
        segments,
        scale.fs_hz,
        book,
        batches,
        judged,
        _Options(bigeminy_min_cycles, trigeminy_min_cycles, pause_ms, full_pause_tolerance_pct),
    )


class _Options(NamedTuple):
    bigeminy_min_cycles: int
    trigeminy_min_cycles: int
    pause_ms: float
    full_pause_tolerance_pct: float


def _check_scale(mv_per_count: float) -> float:
    if not (np.isfinite(mv_per_count) and mv_per_count != 0):
        raise ValueError(f"mv_per_count is {mv_per_count!r}; expected the millivolts of one count, finite and not zero")
    return float(mv_per_count)


def _stored(working: int, segment: Segment, scale: chunks.Scale) -> int:
    if working >= signal.working_length(segment.n_samples, scale.fs_hz):
        return segment.n_samples
    return round(working * scale.fs_hz / signal.WORKING_FS_HZ)


def _drain(
    book: families.FamilyBook, batches: list[_Batch], segment: int, waiting: list[chunks.ChunkBeats], enough: int
) -> list[chunks.ChunkBeats]:
    """Turn waiting beats into full batches; returns what is left. Batches have a fixed size wherever the chunks were cut."""
    beats = chunks.ChunkBeats(*(np.concatenate(column) for column in zip(*waiting, strict=True))) if waiting else None
    while beats is not None and beats.working.size >= enough:
        now = chunks.ChunkBeats(*(column[:BATCH_BEATS] for column in beats))
        beats = chunks.ChunkBeats(*(column[BATCH_BEATS:] for column in beats))
        local = families.cluster(now.shape_mv)
        number = np.append(book.enter(local), -1)
        batches.append(
            _Batch(
                np.full(now.working.size, segment, dtype=np.int16),
                now.working,
                now.energy,
                number[local.family],
                number[local.nearest],
                local.likeness,
                features.describe(now.shape_mv),
            )
        )
        if enough == 1 and beats.working.size == 0:
            break
    return [beats] if beats is not None else []


def _finish(
    segments: Sequence[Segment],
    fs_hz: float,
    book: families.FamilyBook,
    batches: list[_Batch],
    judged: list[quality.SegmentBlocks],
    options: _Options,
) -> Analysis:
    bad = quality.windows(judged, fs_hz)
    lengths = np.array([s.n_samples for s in segments], dtype=np.int64)
    joined = _join(batches)
    for is_last in (False, True):
        position = signal.working_to_sample(joined.working, fs_hz)
        sample = np.clip(np.rint(position).astype(np.int64), 0, np.maximum(lengths[joined.segment] - 1, 0))
        gap = quality.has_gap_before(bad, joined.segment, sample)
        before, after = rhythm.rr_intervals_ms(joined.segment, position, fs_hz, gap)
        usual = rhythm.usual_rr_ms(before, after)
        if not is_last:
            count = np.append(np.bincount(joined.family[joined.family >= 0], minlength=book.count.size), 0)
            drop = qrs.is_interloper(joined.energy, before, after, usual, count[joined.family] <= RARE)
            joined = _Batch(*(c[~drop] for c in joined[:-1]), features.Features(*(c[~drop] for c in joined.features)))
    is_good = quality.is_outside(bad, joined.segment, sample)
    labels = classify.classify(
        classify.Timing(before, after, usual),
        classify.Match(joined.family, joined.nearest, joined.likeness),
        book.shape_mv,
    )
    beats = _beats(joined, sample, before, after, usual, labels, book, is_good, options)
    table = _families(beats, book, labels)
    irregular = rhythm.irregularity(before, (beats.beat_class == "N") & is_good)
    good = np.flatnonzero(is_good)
    neighbour = np.diff(good, prepend=-2) == 1
    found = episodes.find_episodes(
        episodes.Rhythm(
            joined.segment[good],
            sample[good],
            beats.beat_class[good],
            np.where(neighbour, before[good], np.nan).astype(np.float32),
            irregular[good],
        ),
        fs_hz=fs_hz,
        bigeminy_min_cycles=options.bigeminy_min_cycles,
        trigeminy_min_cycles=options.trigeminy_min_cycles,
        pause_ms=options.pause_ms,
    )
    analysable_s = quality.analysable_s(judged, bad, fs_hz)
    return Analysis(
        beats,
        table,
        found,
        bad,
        _findings(analysable_s, beats),
        fs_hz,
        tuple(s.n_samples for s in segments),
        analysable_s,
    )


def _join(batches: list[_Batch]) -> _Batch:
    if not batches:
        none = np.zeros(0, dtype=np.int64)
        real = none.astype(np.float32)
        return _Batch(
            none.astype(np.int16),
            none.astype(np.float64),
            real,
            none,
            none,
            real,
            features.Features(real, real, real, real),
        )
    columns = list(zip(*(batch[:-1] for batch in batches), strict=True))
    described = features.Features(
        *(np.concatenate(c) for c in zip(*(batch.features for batch in batches), strict=True))
    )
    return _Batch(*(np.concatenate(column) for column in columns), described)


def _beats(
    joined: _Batch,
    sample: NDArray[np.int64],
    before: NDArray[np.float32],
    after: NDArray[np.float32],
    usual: NDArray[np.float32],
    labels: classify.Labels,
    book: families.FamilyBook,
    is_good: NDArray[np.bool_],
    options: _Options,
) -> Beats:
    early = np.nan_to_num(100 * (1 - before / usual), nan=0.0)
    is_ectopic = np.isin(labels.beat_class, ("V", "S"))
    is_premature = is_ectopic & (early > 100 * (1 - classify.EARLY))
    coupling = np.where(is_premature, before, np.float32(np.nan)).astype(np.float32)
    widths = np.append(features.qrs_width_ms(book.shape_mv), np.float32(0))
    in_family = joined.family >= 0
    return Beats(
        segment=joined.segment,
        sample=sample,
        rr_before_ms=before,
        rr_after_ms=after,
        beat_class=labels.beat_class,
        class_probability=labels.probability,
        family=joined.family.astype(np.int16),
        qrs_width_ms=np.where(in_family, widths[joined.family], joined.features.spread_ms).astype(np.float32),
        amplitude_mv=joined.features.amplitude_mv,
        polarity=np.where(joined.features.amplitude_mv < 0, -1, 1).astype(np.int8),
        coupling_ms=coupling,
        prematurity_pct=(100 * (1 - before / usual)).astype(np.float32),
        pause_kind=rhythm.pause_kinds(before, after, usual, is_premature, options.full_pause_tolerance_pct),
        r_on_t_index=rhythm.r_on_t_index(coupling, usual),
        is_escape=(labels.beat_class == "V") & (before > rhythm.ESCAPE_LIMIT * usual),
        is_analysable=is_good,
    )


def _families(beats: Beats, book: families.FamilyBook, labels: classify.Labels) -> Families:
    n_families = book.count.size
    n_good = max(int(beats.is_analysable.sum()), 1)
    rows = []
    for row in range(n_families):
        mine = beats.family == row
        coupling = beats.coupling_ms[mine & ~np.isnan(beats.coupling_ms)]
        spread = np.subtract(*np.percentile(coupling, [90, 10])) if coupling.size > 1 else np.nan
        mean = coupling.mean() if coupling.size else np.nan
        amplitude = np.median(beats.amplitude_mv[mine]) if mine.any() else np.nan
        rows.append((mine.sum(), 100 * (mine & beats.is_analysable).sum() / n_good, amplitude, mean, spread))
    table = np.array(rows, dtype=np.float64).reshape(n_families, 5)
    shapes = book.shape_mv
    return Families(
        labels.family_class,
        table[:, 0].astype(np.int64),
        table[:, 1],
        features.qrs_width_ms(shapes),
        table[:, 2].astype(np.float32),
        table[:, 3].astype(np.float32),
        table[:, 4].astype(np.float32),
        shapes,
    )


def _findings(analysable_s: float, beats: Beats) -> tuple[Finding, ...]:
    if analysable_s <= 0 or not beats.is_analysable.any():
        return (Finding("no_analysable_time", "no stretch of the recording is clean enough to find beats"),)
    return ()
