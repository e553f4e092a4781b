"""Accuracy on annotated records: with the shipped weights, and with weights refitted without the record that is scored.

Run from the checkout: python -m tests.benchmarks.accuracy [FOLDER] [--print-weights] Only the weights of the family
model are fitted; the limits of the rules were set on the same records and are the same in both columns, so even the
second is a development figure.
"""

from __future__ import annotations

import argparse
import os
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import chunks, classify
from detectors.analyse import CHUNK_S, Gathered, Options, conclude, gather
from detectors.annotations import beat_annotations, beat_classes
from detectors.results import Segment
from detectors.scoring import CLASSES, compare_beats, gross, match_beats, match_window, statistics
from flows.scoring.score_record import Labelled, open_labelled

ROOT = Path(__file__).parents[2]
DEFAULT = Path(os.environ.get("BURDENLINE_REFERENCE_ECG", ROOT.parent / "shared" / "reference-ecg")) / "mitdb"
PACED = ("102", "104", "107", "217")
RIDGE = 1.0
WEIGHT_CAP = 60  # beats after which a family weighs no more
FIGURES = ("qrs_se", "qrs_ppv", "veb_se", "veb_ppv", "sveb_se", "sveb_ppv")


class Record(NamedTuple):
    """One record, read once."""

    labelled: Labelled
    gathered: Gathered
    terms: NDArray[np.float64]  # shape (n_families, n_terms)
    is_judged: NDArray[np.bool_]  # shape (n_families,), the model decides
    ventricular: NDArray[np.float64]  # shape (n_families,), beats that experts call V
    other: NDArray[np.float64]  # N and Q; S and F are left out, they may look like either


def read(header: Path) -> Record:
    labelled = open_labelled(header, 0)
    opened = labelled.signal
    scale = chunks.Scale(
        float(opened.rate), opened.mv_per_count, opened.count_at_zero_mv, opened.rails, opened.missing_count
    )
    gathered = gather([Segment(opened.n_samples, opened.read)], scale, CHUNK_S, lambda n_samples: None)
    sample, timing = gathered.sample, gathered.timing
    n_families = gathered.book.n_beats.size
    habits = classify.family_habits(timing, gathered.found.member, n_families)
    shapes = classify.compare_shapes(habits, gathered.book.shape_mv)
    terms = classify.family_terms(habits, shapes)
    truth = _true_classes(labelled, sample)
    family = gathered.found.family
    count = {name: np.bincount(family[(family >= 0) & (truth == name)], minlength=n_families) for name in "NVQ"}
    is_judged = ~classify.is_never_ventricular(terms, habits, shapes) | np.isin(
        np.arange(n_families), shapes.normal[1:]
    )
    return Record(
        labelled, gathered, terms, is_judged, count["V"].astype(float), (count["N"] + count["Q"]).astype(float)
    )


def _true_classes(labelled: Labelled, sample: NDArray[np.int64]) -> NDArray[np.str_]:
    classes = beat_classes(labelled.labels.symbol)
    is_beat = classes >= 0
    match = match_beats(labelled.labels.sample[is_beat], sample, window=match_window(float(labelled.signal.rate)))
    both = (match.reference >= 0) & (match.test >= 0)
    truth = np.full(sample.size, "-")
    truth[match.test[both]] = np.array(list(CLASSES))[classes[is_beat][match.reference[both]]]
    return truth


def fit(records: list[Record]) -> NDArray[np.float64]:
    """Ridge logistic regression on families; big families weigh little more than small ones, both classes alike."""
    x, y, weight = [], [], []
    for record in records:
        total = record.ventricular + record.other
        chosen = np.flatnonzero((total > 0) & record.is_judged)
        share = np.sqrt(np.minimum(total[chosen], WEIGHT_CAP)) / total[chosen]
        for label, beats in ((1.0, record.ventricular), (0.0, record.other)):
            x.append(record.terms[chosen])
            y.append(np.full(chosen.size, label))
            weight.append(share * beats[chosen])
    return _ridge_logistic(np.vstack(x), np.concatenate(y), np.concatenate(weight))


def _ridge_logistic(x: NDArray[np.float64], y: NDArray[np.float64], weight: NDArray[np.float64]) -> NDArray[np.float64]:
    weight = np.where(y == 1, weight * weight[y == 0].sum() / weight[y == 1].sum(), weight)
    penalty = RIDGE * np.eye(x.shape[1])
    penalty[0, 0] = 1e-3
    beta = np.zeros(x.shape[1])
    for _ in range(50):
        p = 1 / (1 + np.exp(-np.clip(x @ beta, -30, 30)))
        gradient = x.T @ (weight * (y - p)) - penalty @ beta
        beta += np.linalg.solve((x.T * (weight * p * (1 - p))) @ x + penalty, gradient)
    return beta


def score(record: Record, weights: NDArray[np.float64]) -> tuple[NDArray[np.int64], float]:
    """Comparison matrix in analysable time, and the error of the ventricular share in percentage points."""
    analysis = conclude(record.gathered, Options(), weights)
    beats, bad, opened = analysis.beats, analysis.quality, record.labelled.signal
    result = compare_beats(
        record.labelled.labels,
        beat_annotations(beats.sample, beats.beat_class),
        fs_hz=float(opened.rate),
        n_samples=opened.n_samples,
        left_out=np.stack([bad.first_sample, bad.last_sample], axis=1),
    )
    matrix = result.matrix
    true_pct = 100 * matrix[2, :5].sum() / matrix[:5, :5].sum()
    found_pct = 100 * matrix[:, 2].sum() / matrix[:, :5].sum()
    return matrix, float(found_pct - true_pct)


def main() -> None:
    """Print one line per record and the gross figures, refitted without the record and as shipped."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path, nargs="?", default=DEFAULT)
    parser.add_argument("--print-weights", action="store_true", help="print weights fitted on all records and stop")
    options = parser.parse_args()
    records = [read(header) for header in sorted(options.folder.glob("*.hea")) if header.stem not in PACED]
    if options.print_weights:
        print(dict(zip(classify.TERMS, fit(records).round(2).tolist(), strict=True)))
        return
    refitted = [fit([r for r in records if r is not record]) for record in records]
    for title, weights in (("left out", refitted), ("as shipped", [classify.WEIGHTS] * len(records))):
        scored = [score(record, w) for record, w in zip(records, weights, strict=True)]
        print(f"\n{title:12}", *(f"{name:>9}" for name in FIGURES), "V error, points")
        for record, (matrix, error) in zip(records, scored, strict=True):
            figures = statistics(matrix)
            print(f"{record.labelled.name:12}", *(f"{figures[name].pct:9.2f}" for name in FIGURES), f"{error:8.2f}")
        total = gross([matrix for matrix, _ in scored])
        errors = np.abs([error for _, error in scored])
        print(f"{'gross':12}", *(f"{total[name]:9.2f}" for name in FIGURES), end=" ")
        print(f"median {np.median(errors):.2f}, 90 % {np.percentile(errors, 90):.2f}, max {errors.max():.2f}")


if __name__ == "__main__":
    main()
