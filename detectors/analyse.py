"""The one entry: samples of a recording in, beats, families, episodes, quality and findings out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import beats, chunks, classify, doubt, episodes, features, findings, quality, rhythm, signal
from detectors.families import FamilyBook
from detectors.p_waves import PWaveBook
from detectors.results import Analysis, Beats, Episodes, QualityWindows, Segment
from detectors.timing import Timing

DETECTOR_VERSION = "2"
BATCH_BEATS = 4096  # beats that are grouped into families at a time, wherever the chunks were cut
CHUNK_S = 3600.0


class Options(NamedTuple):
    """Conventions that a programme may set."""

    bigeminy_min_cycles: int = 3
    trigeminy_min_cycles: int = 3
    pause_ms: float = 2000
    full_pause_tolerance_pct: float = 8.0


class Books(NamedTuple):
    """What is learned while reading."""

    families: FamilyBook
    p_waves: PWaveBook


class Gathered(NamedTuple):
    """All that needed samples; what follows needs beats only."""

    found: beats.Kept
    sample: NDArray[np.int64]
    timing: Timing
    book: FamilyBook
    bad: QualityWindows
    suspect: QualityWindows  # wider: time that is not quiet
    lengths: NDArray[np.int64]  # samples per segment
    fs_hz: float


def analyse_signal(
    ecg_mv: NDArray[np.floating],
    *,
    fs_hz: float,
    bigeminy_min_cycles: int = 3,
    trigeminy_min_cycles: int = 3,
    pause_ms: float = 2000,
    full_pause_tolerance_pct: float = 8.0,
) -> Analysis:
    """Analyse one lead without a gap; the options and the result are those of `analyse_recording`.

    `ecg_mv` has shape (n_samples,), mV, any number type; NaN and infinities are missing samples. Values are rounded to
    1/32,000 of the largest. ValueError for a rate or an array that cannot be used.
    """
    counts, mv_per_count = signal.to_counts(signal.check_signal(ecg_mv))
    return analyse_recording(
        [Segment(counts.size, lambda begin, end: counts[begin:end])],
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
    chunk_s: float = CHUNK_S,
    progress: Callable[[int], None] | None = None,
) -> Analysis:
    """Find and classify the beats of one recording of one lead.

    Parameters
    ----------
    segments : gap-free stretches in time order; read piece by piece, `chunk_s` at a time
    fs_hz : samples per second, 100 to 4000
    mv_per_count, count_at_zero_mv : a stored count is (count - count_at_zero_mv) x mv_per_count millivolts
    rails : lowest and highest count that the recorder can store; None when unknown
    missing_count : count that stands for "no sample"; None when there is none
    bigeminy_min_cycles, trigeminy_min_cycles : shortest stretch that gets the name
    pause_ms : RR interval that counts as a pause
    full_pause_tolerance_pct : how far a full compensatory pause may fall short of two sinus cycles, % of one cycle
    chunk_s : length of the pieces in seconds; changes memory, never the answer
    progress : called with the samples done since the last call

    Raises ValueError when the rate or the scale cannot be used.
    """
    scale = chunks.Scale(signal.check_rate(fs_hz), mv_per_count, count_at_zero_mv, rails, missing_count)
    chunks.check_scale(scale)
    options = Options(bigeminy_min_cycles, trigeminy_min_cycles, pause_ms, full_pause_tolerance_pct)
    return conclude(gather(segments, scale, chunk_s, progress or (lambda n_samples: None)), options)


def gather(
    segments: Sequence[Segment], scale: chunks.Scale, chunk_s: float, progress: Callable[[int], None]
) -> Gathered:
    """Read all segments once: beats with their families, and the quality of the time around them."""
    books = Books(FamilyBook(), PWaveBook())
    table = beats.Growing()
    seen = [_read(segment, n, scale, chunk_s, books, table, progress) for n, segment in enumerate(segments)]
    bad, suspect = (quality.windows(seen, scale.fs_hz, noisy) for noisy in (quality.NOISY, quality.SUSPECT))
    lengths = np.array([one.n_samples for one in seen], dtype=np.int64)
    del seen
    every = table.since(0)
    artefact = beats.is_artefact(every, timing_of(every, bad, lengths, scale.fs_hz)[1])
    artefact |= np.append(books.p_waves.is_p_wave(books.families.shape_mv), False)[every.family]  # False for none
    found = every.keep(~artefact)
    return Gathered(
        found.kept, *timing_of(found, bad, lengths, scale.fs_hz), books.families, bad, suspect, lengths, scale.fs_hz
    )


def _read(
    segment: Segment,
    number: int,
    scale: chunks.Scale,
    chunk_s: float,
    books: Books,
    table: beats.Growing,
    progress: Callable[[int], None],
) -> quality.Seen:
    """Read a segment chunk by chunk: its beats go into `books` and `table`, what quality needs is returned."""
    waiting: list[chunks.ChunkBeats] = []
    blocks: list[chunks.Blocks] = []
    done, first_beat = 0, table.n_beats
    for begin, end in chunks.cuts(segment.n_samples, scale.fs_hz, chunk_s):
        found, quiet = chunks.read_chunk(segment, begin, end, scale)
        waiting = _enter_full_batches(books, table, number, [*waiting, found])
        blocks.append(quiet)
        now = min(round(end * scale.fs_hz / signal.WORKING_FS_HZ), segment.n_samples)
        progress(now - done)
        done = now
    progress(segment.n_samples - done)
    for rest in waiting:
        if rest.working.size:
            table.append(_enter(books, number, rest))
    mine = table.since(first_beat)
    return quality.look(segment.n_samples, chunks.join_blocks(blocks), mine.working, mine.likeness)


def _enter_full_batches(
    books: Books, table: beats.Growing, segment: int, waiting: list[chunks.ChunkBeats]
) -> list[chunks.ChunkBeats]:
    """Enter the waiting beats by whole batches and return the rest, so that batches do not depend on the cuts."""
    beats_now = chunks.join(waiting)
    while beats_now.working.size >= BATCH_BEATS:
        table.append(_enter(books, segment, beats_now.part(slice(BATCH_BEATS))))
        beats_now = beats_now.part(slice(BATCH_BEATS, None))
    return [beats_now]


def _enter(books: Books, segment: int, now: chunks.ChunkBeats) -> beats.Found:
    shape_mv = books.families.prepare(now.shape_mv)
    member = books.families.enter(shape_mv, now.is_clean)
    books.p_waves.enter(shape_mv, now.working, member.family, books.families.n_beats.size)
    return beats.Found(
        np.full(now.working.size, segment, dtype=np.int16),
        now.working,
        now.energy,
        *member,
        books.p_waves.marks(shape_mv, member.nearest, books.families.shape_mv),
        features.amplitude_mv(shape_mv),
        features.spread_ms(shape_mv),
    )


def conclude(gathered: Gathered, options: Options, models: classify.Models = classify.MODELS) -> Analysis:
    """Classes, episodes and findings of gathered beats, with the whole recording as context."""
    found, sample, timing, _, bad, suspect, lengths, fs_hz = gathered
    labels = classify.classify(timing, found.member, found.p_wave, found.spread_ms, gathered.book.shape_mv, models)
    bad = _with_doubtful_runs(bad, suspect, found, sample, timing, labels)
    is_analysable = quality.is_outside(bad, found.segment, sample)
    widths = features.qrs_width_ms(gathered.book.shape_mv)
    table = beats.beat_table(found, sample, timing, labels, widths, is_analysable, options.full_pause_tolerance_pct)
    analysable_s = quality.analysable_s(int(lengths.sum()), bad, fs_hz)
    groups = beats.family_table(table, gathered.book, labels.family_class, widths)
    del gathered, found, timing, labels  # what the table does not share goes before the next step needs room
    return Analysis(
        table,
        groups,
        episodes_of(table, fs_hz, options),
        bad,
        findings.findings(analysable_s, float(lengths.sum()) / fs_hz, table, groups),
        fs_hz,
        tuple(lengths.tolist()),
        analysable_s,
    )


def _with_doubtful_runs(
    bad: QualityWindows,
    suspect: QualityWindows,
    found: beats.Kept,
    sample: NDArray[np.int64],
    timing: Timing,
    labels: classify.Labels,
) -> QualityWindows:
    """The windows, and doubtful runs as noise: from half-way to the beat before to half-way to the beat after."""
    starts = np.isnan(timing.before_ms)
    is_analysable, is_quiet = (quality.is_outside(windows, found.segment, sample) for windows in (bad, suspect))
    runs = doubt.doubtful_runs(labels.beat_class == "V", starts, found.family, is_analysable, is_quiet)
    before, after = np.maximum(runs.first - 1, 0), np.minimum(runs.last, sample.size - 1)
    before = np.where(found.segment[before] == found.segment[runs.first], before, runs.first)
    after = np.where(found.segment[after] == found.segment[runs.first], after, runs.last - 1)
    first = (sample[before] + sample[runs.first]) // 2 + 1
    last = (sample[after] + sample[runs.last - 1]) // 2
    return quality.with_noise(bad, found.segment[runs.first], np.minimum(first, sample[runs.first]), last)


def timing_of(
    found: beats.Found, bad: QualityWindows, lengths: NDArray[np.int64], fs_hz: float
) -> tuple[NDArray[np.int64], Timing]:
    """Stored sample of every beat, and the intervals around it."""
    position = signal.working_to_sample(found.working, fs_hz)
    sample = np.rint(position).astype(np.int64)
    np.clip(sample, 0, lengths[found.segment] - 1, out=sample)
    gap = quality.has_gap_before(bad, found.segment, sample)
    before, after = rhythm.rr_intervals_ms(found.segment, position, fs_hz, gap)
    del position
    return sample, Timing(before, after, rhythm.usual_rr_ms(before, after))


def episodes_of(table: Beats, fs_hz: float, options: Options) -> Episodes:
    """All episodes of labelled beats; beats that are not analysable take no part and break the rhythm."""
    good = table.is_analysable
    follows_good = np.concatenate([[False], good[:-1]]) if good.size else good
    before_ms = table.rr_before_ms[good]
    before_ms[~follows_good[good]] = np.nan
    irregular = rhythm.irregularity(before_ms, table.beat_class[good] == "N")
    return episodes.find_episodes(
        episodes.Rhythm(table.segment[good], table.sample[good], table.beat_class[good], before_ms, irregular),
        fs_hz=fs_hz,
        bigeminy_min_cycles=options.bigeminy_min_cycles,
        trigeminy_min_cycles=options.trigeminy_min_cycles,
        pause_ms=options.pause_ms,
    )
