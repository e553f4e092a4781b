"""Run the detector over a folder of labelled WFDB records and score it as ANSI/AAMI EC57 asks.

One record is scored in flows/scoring/score_record.py; how a report looks stands in flows/scoring/score_report.py and dashboards/.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from detectors.analyse import DETECTOR_VERSION
from detectors.annotations import CLASSES, beat_classes
from detectors.noise_stress import with_noise
from detectors.scoring import LEARNING_S
from flows.readers.codes import Refused
from flows.readers.recording import Opened
from flows.readers.wfdb_annotations import AnnotationError
from flows.scoring.score_record import Labelled, ScoreError, open_labelled, open_signal, score_record
from flows.scoring.score_report import NoiseScore, Options, RecordScore, Report, write_page

__all__ = ["NOISE_LEVELS_DB", "ScoreError", "score_folder", "write_page"]

NOISE_LEVELS_DB = (24, 18, 12, 6)


def score_folder(
    folder: Path,
    *,
    escape_as: str = "S",
    learning_s: float = LEARNING_S,
    channel: int = 0,
    noise_folder: Path | None = None,
    noise_records: Sequence[str] = (),
    say: Callable[[str], None] = lambda text: None,
) -> Report:
    """Score every record of `folder` that has a header, signals and expert labels (NAME.hea, NAME.atr).

    `escape_as` is the class of supraventricular escape beats in the labels; the first `learning_s` are not scored;
    `channel` counts the signals of a record from 0. With `noise_folder` the noise records there are added to the
    records (or to `noise_records` only) at several signal-to-noise ratios. Records that cannot be read are named in the
    report with the reason. Raises ScoreError when no record is left.
    """
    options = Options(escape_as, learning_s, channel, DETECTOR_VERSION)
    scores: list[RecordScore] = []
    left_out: list[tuple[str, str]] = []
    for header in sorted(folder.glob("*.hea")):
        say(f"scoring {header.stem}")
        try:
            scores.append(score_record(open_labelled(header, options.channel), options))
        except (Refused, AnnotationError, ScoreError) as problem:
            left_out.append((header.stem, str(problem)))
    if not scores:
        told = "".join(f"; {name}: {reason}" for name, reason in left_out)
        raise ScoreError(
            f"{folder}: no record can be scored; expected NAME.hea with its signal file and labels in NAME.atr{told}"
        )
    noise = _stress(_chosen(folder, noise_records, scores), noise_folder, options, say) if noise_folder else ()
    return Report(options, tuple(scores), tuple(left_out), noise)


def _chosen(folder: Path, names: Sequence[str], scores: Sequence[RecordScore]) -> list[Path]:
    """Headers of the named records, or of all that were scored."""
    scored = [score.record for score in scores]
    unknown = [name for name in names if name not in scored]
    if unknown:
        raise ScoreError(f"noise was asked for records {', '.join(unknown)}; scored were {', '.join(scored)}")
    return [folder / f"{name}.hea" for name in names or scored]


def _stress(
    headers: Sequence[Path], noise_folder: Path, options: Options, say: Callable[[str], None]
) -> tuple[NoiseScore, ...]:
    """Score records with each noise of a folder added at each level, the records of a level counted together."""
    records = [open_labelled(header, options.channel) for header in headers]
    noises = {header.stem: open_signal(header, 0) for header in sorted(noise_folder.glob("*.hea"))}
    if not noises:
        raise ScoreError(f"{noise_folder}: no noise record; expected NAME.hea with its signal file")
    rows = []
    for name, noise in noises.items():
        for snr_db in NOISE_LEVELS_DB:
            say(f"noise {name} at {snr_db} dB")
            scores = [score_record(_stressed(record, noise, snr_db), options) for record in records]
            rows.append(NoiseScore(name, snr_db, tuple(scores)))
    return tuple(rows)


def _stressed(record: Labelled, noise: Opened, snr_db: int) -> Labelled:
    """The record with noise added, stored on a wide range so that the noise does not meet a rail."""
    opened, labels = record.signal, record.labels
    fs_hz = float(opened.rate)
    clean_mv, noise_mv = _millivolts(opened), _millivolts(noise)
    at_rate = np.arange(int(len(noise_mv) * fs_hz / float(noise.rate))) * float(noise.rate) / fs_hz
    normal = labels.sample[beat_classes(labels.symbol) == CLASSES.index("N")]
    with_noise_mv = with_noise(
        clean_mv, np.interp(at_rate, np.arange(len(noise_mv)), noise_mv), normal, fs_hz=fs_hz, snr_db=snr_db
    )
    counts = np.clip(np.rint(with_noise_mv / opened.mv_per_count + opened.count_at_zero_mv), -32767, 32767)
    signal = replace(opened, read=lambda a, b: counts[a:b].astype(np.int16), rails=(-32768, 32767))
    return record._replace(signal=signal)


def _millivolts(opened: Opened) -> NDArray[np.float64]:
    return (opened.read(0, opened.n_samples).astype(np.float64) - opened.count_at_zero_mv) * opened.mv_per_count
