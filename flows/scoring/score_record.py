"""One labelled WFDB record: its signal, the expert's labels, and how the detector compares with them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.analyse import analyse_recording
from detectors.annotations import CLASSES, Annotations, beat_annotations, beat_classes, inside, sorted_out
from detectors.results import Analysis, Segment
from detectors.scoring import BeatScore, compare_beats
from detectors.scoring_runs import compare_runs
from flows.readers.identify import open_delivery
from flows.readers.recording import NO_SITE, Opened, Site
from flows.readers.wfdb import names_in_header
from flows.readers.wfdb_annotations import read_annotations
from flows.readers.wfdb_header import read_header
from flows.scoring.score_report import Judged, Options, RecordScore

_V = CLASSES.index("V")


class ScoreError(ValueError):
    """Something cannot be scored; the message says what was found and expected."""


class Labelled(NamedTuple):
    """A record with its labels."""

    name: str
    signal: Opened
    labels: Annotations  # samples counted at the signal's own rate
    has_af: bool


def open_labelled(header: Path, channel: int) -> Labelled:
    """Open a record and its labels; raises Refused, AnnotationError or ScoreError."""
    labels_path = header.with_suffix(".atr")
    if not labels_path.is_file():
        raise ScoreError(f"no labels; expected {labels_path.name} beside the header")
    signal = open_signal(header, channel)
    found = read_annotations(labels_path)
    samples_per_frame = int(signal.rate / read_header(header.read_bytes()).fs_hz)
    in_time = np.argsort(found.sample, kind="stable")  # an edited label file may step back in time
    labels = Annotations(
        found.sample[in_time] * samples_per_frame, found.symbol[in_time], found.subtype[in_time], found.aux[in_time]
    )
    return Labelled(header.stem, signal, labels, bool(np.char.startswith(found.aux.astype(str), "(AF").any()))


def open_signal(header: Path, channel: int) -> Opened:
    """Open one signal of a record, counted from 0; raises Refused or ScoreError."""
    files = [header, *(header.parent / name for name in names_in_header(header))]
    signals = read_header(header.read_bytes()).signals
    if not signals:  # the signals of a record in pieces are described in the headers of its pieces
        return open_delivery(files, NO_SITE)
    if channel >= len(signals):
        raise ScoreError(f"channel {channel} was asked for; the record has {len(signals)}, counted from 0")
    return open_delivery(files, Site(ecg_channel=f"#{channel + 1}"))


def _analyse(opened: Opened) -> Analysis:
    def reader(first: int) -> Callable[[int, int], NDArray[np.int16]]:
        return lambda a, b: opened.read(first + a, first + b)

    return analyse_recording(
        [Segment(stretch.n_samples, reader(stretch.first_sample)) for stretch in opened.stretches],
        fs_hz=float(opened.rate),
        mv_per_count=opened.mv_per_count,
        count_at_zero_mv=opened.count_at_zero_mv,
        rails=opened.rails,
        missing_count=opened.missing_count,
    )


def score_record(record: Labelled, options: Options) -> RecordScore:
    """Run the detector over a record and compare its beats with the labels."""
    opened, labels = record.signal, record.labels
    analysis = _analyse(opened)
    firsts = np.array([round(s.offset_ns * opened.rate / 1_000_000_000) for s in opened.stretches], np.int64)
    n_samples = int(firsts[-1] + opened.stretches[-1].n_samples)
    beats, quality = analysis.beats, analysis.quality
    test = beat_annotations(firsts[beats.segment] + beats.sample, beats.beat_class)
    bad = np.stack([firsts[quality.segment] + s for s in (quality.first_sample, quality.last_sample)], axis=1)

    how: dict[str, Any] = {
        "fs_hz": float(opened.rate),
        "n_samples": n_samples,
        "learning_s": options.learning_s,
        "escape_as": options.escape_as,
    }
    everything = compare_beats(labels, test, **how)
    halves = tuple(_outside(bad, half, n_samples) for half in ((0, n_samples // 2), (n_samples // 2, n_samples)))
    truth = sorted_out(labels, n_samples, options.escape_as)
    # experts label no single beats within ventricular flutter or fibrillation, so nothing there can be compared
    comparable = beats.is_analysable & ~inside(test.sample, truth.fibrillation)
    return RecordScore(
        record=record.name,
        lead=opened.lead,
        has_af=record.has_af,
        beats=everything,
        beats_analysable=compare_beats(labels, test, left_out=bad, **how),
        halves=tuple(compare_beats(labels, test, left_out=spans, **how | {"learning_s": 0.0}) for spans in halves),
        runs={ectopy: compare_runs(labels, test, ectopy=ectopy, **how) for ectopy in "VS"},
        found_v_burden_pct=_v_burden_pct(test.symbol[comparable] == "V"),
        true_v_burden_pct=_v_burden_pct(truth.beat_class == _V),
        analysable_share_pct=100.0 * analysis.analysable_s * float(opened.rate) / opened.n_samples,
        judged=_judged(everything, analysis),
        findings=tuple(finding.code for finding in analysis.findings),
    )


def _outside(bad: NDArray[np.int64], part: tuple[int, int], n_samples: int) -> NDArray[np.int64]:
    """Ordered spans, first to last sample, of all that is bad or lies outside `part`."""
    first, end = part
    within = np.clip(bad[(bad[:, 1] >= first) & (bad[:, 0] < end)], first, end - 1)
    return np.concatenate([[[-1, first - 1]], within, [[end, n_samples]]]).astype(np.int64)


def _v_burden_pct(is_v: NDArray[np.bool_]) -> float:
    return 100.0 * float(is_v.mean()) if len(is_v) else float("nan")


def _judged(score: BeatScore, analysis: Analysis) -> Judged:
    """Stated probability and outcome of every scored beat."""
    scored = score.true_class >= 0
    found = beat_classes(analysis.beats.beat_class)
    return Judged(
        analysis.beats.class_probability[scored].astype(float), (score.true_class == found)[scored], found[scored]
    )
