"""Accuracy on annotated records: with the shipped weights, and with weights refitted without the record that is scored.

Run from the checkout: python -m tests.benchmarks.accuracy [FOLDER] [--print-weights] [--all-ways]
Both models are fitted on the records in all the WAYS in which they could have come, so that a weight does not hang on
chance. The limits of the rules were set on the same records and are the same in both columns, so even the second is a
development figure.
"""

from __future__ import annotations

import argparse
import os
from collections.abc import Iterable
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import chunks, classify, timing, ventricular
from detectors.analyse import CHUNK_S, Gathered, Options, conclude, gather
from detectors.annotations import beat_annotations, beat_classes
from detectors.classify import Models
from detectors.results import Segment
from detectors.scoring import CLASSES, compare_beats, gross, match_beats, match_window, statistics
from flows.scoring.score_record import Labelled
from tests.benchmarks.ways import WAYS, open_in

ROOT = Path(__file__).parents[2]
DEFAULT = Path(os.environ.get("BURDENLINE_REFERENCE_ECG", ROOT.parent / "shared" / "reference-ecg")) / "mitdb"
PACED = ("102", "104", "107", "217")
RIDGE = 14.0
WEIGHT_CAP = 60  # beats after which a family weighs no more
LOOSE_LIKE = 50  # beats: a beat of no family weighs like one of such a family
VENTRICULAR_WEIGHT = 1.65  # of ventricular families over the others, set for as many misses as false finds
FIGURES = ("qrs_se", "qrs_ppv", "veb_se", "veb_ppv", "sveb_se", "sveb_ppv")
Rows = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]  # terms, 1 for ventricular, weight


class Reading(NamedTuple):
    """One record in one way, read once."""

    name: str
    way: str
    labelled: Labelled
    gathered: Gathered
    marks: timing.Marks
    judged: ventricular.Judged
    truth: NDArray[np.str_]  # shape (n_beats,), class that experts gave, "-" where there is none


def read(header: Path, way: str) -> Reading:
    labelled = open_in(way, header)
    opened = labelled.signal
    scale = chunks.Scale(
        float(opened.rate), opened.mv_per_count, opened.count_at_zero_mv, opened.rails, opened.missing_count
    )
    gathered = gather([Segment(opened.n_samples, opened.read)], scale, CHUNK_S, lambda n_samples: None)
    marks = timing.marks(gathered.timing)
    judged = ventricular.judge(gathered.timing, marks, gathered.found.member, gathered.book.shape_mv)
    return Reading(header.stem, way, labelled, gathered, marks, judged, _true_classes(labelled, gathered.sample))


def _true_classes(labelled: Labelled, sample: NDArray[np.int64]) -> NDArray[np.str_]:
    classes = beat_classes(labelled.labels.symbol)
    is_beat = classes >= 0
    match = match_beats(labelled.labels.sample[is_beat], sample, window=match_window(float(labelled.signal.rate)))
    both = (match.reference >= 0) & (match.test >= 0)
    truth = np.full(sample.size, "-")
    truth[match.test[both]] = np.array(list(CLASSES))[classes[is_beat][match.reference[both]]]
    return truth


def fit(readings: list[Reading]) -> Models:
    """Ridge logistic regressions on families, then on beats; S and F are left out, they may look like either."""
    rows = _joined(_family_rows(reading) for reading in readings)
    family = _ridge_logistic(*rows, VENTRICULAR_WEIGHT)
    return Models(family, _ridge_logistic(*_joined(_beat_rows(reading, family) for reading in readings), 1.0))


def _joined(parts: Iterable[Rows]) -> Rows:
    terms, label, weight = (np.concatenate(column) for column in zip(*parts, strict=True))
    return terms, label, weight


def _family_rows(reading: Reading) -> Rows:
    """Each family twice, as ventricular and not; big families weigh little more than small ones."""
    judged, family = reading.judged, reading.gathered.found.family
    counts = [np.bincount(family[(family >= 0) & is_true], minlength=judged.odds.size) for is_true in _is(reading)]
    total = np.sum(counts, axis=0)
    chosen = np.flatnonzero((total > 0) & ~judged.is_exempt)
    share = np.sqrt(np.minimum(total[chosen], WEIGHT_CAP)) / total[chosen]
    terms = judged.terms[chosen]
    labels = np.repeat([1.0, 0.0], chosen.size)
    return np.vstack([terms, terms]), labels, np.concatenate([share * count[chosen] for count in counts])


def _beat_rows(reading: Reading, family_weights: NDArray[np.float64]) -> Rows:
    """Beats of families that the first model leaves in doubt, and of none."""
    judged = reading.judged._replace(evidence=reading.judged.terms @ family_weights)
    member = reading.gathered.found.member
    terms = np.column_stack(list(classify.beat_terms(reading.marks, member, judged))).astype(np.float64)
    is_v, is_other = _is(reading)
    in_doubt = np.abs(terms[:, classify.BEAT_TERMS.index("family")]) < ventricular.SURE
    chosen = np.flatnonzero((is_v | is_other) & in_doubt)
    size = np.where(member.family < 0, LOOSE_LIKE, judged.habits.n_beats[member.family])[chosen]
    return terms[chosen], is_v[chosen].astype(np.float64), np.sqrt(np.minimum(size, WEIGHT_CAP)) / size


def _is(reading: Reading) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Ventricular beats, and beats that are surely not."""
    return reading.truth == "V", np.isin(reading.truth, ("N", "Q"))


def _ridge_logistic(
    x: NDArray[np.float64], y: NDArray[np.float64], weight: NDArray[np.float64], ventricular_weight: float
) -> NDArray[np.float64]:
    balance = ventricular_weight * weight[y == 0].sum() / weight[y == 1].sum()
    weight = np.where(y == 1, weight * balance, weight)
    penalty = RIDGE * np.eye(x.shape[1])
    penalty[0, 0] = 1e-3
    beta = np.zeros(x.shape[1])
    for _ in range(50):
        p = 1 / (1 + np.exp(-np.clip(x @ beta, -30, 30)))
        gradient = x.T @ (weight * (y - p)) - penalty @ beta
        beta += np.linalg.solve((x.T * (weight * p * (1 - p))) @ x + penalty, gradient)
    return beta


def score(reading: Reading, models: Models) -> tuple[NDArray[np.int64], float]:
    """Comparison matrix in analysable time, and the error of the ventricular share in percentage points."""
    analysis = conclude(reading.gathered, Options(), models)
    beats, bad, opened = analysis.beats, analysis.quality, reading.labelled.signal
    result = compare_beats(
        reading.labelled.labels,
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
    parser.add_argument("--all-ways", action="store_true", help="score the records in all ways, not only as they are")
    options = parser.parse_args()
    headers = [header for header in sorted(options.folder.glob("*.hea")) if header.stem not in PACED]
    if not headers:
        parser.error(f"no annotated records (.hea) in {options.folder}")
    readings = [read(header, way) for way in WAYS for header in headers]
    if options.print_weights:
        models = fit(readings)
        print("family", dict(zip(ventricular.TERMS, models.family.round(2).tolist(), strict=True)))
        print("beat", dict(zip(classify.BEAT_TERMS, models.beat.round(2).tolist(), strict=True)))
        return
    without = {header.stem: fit([r for r in readings if r.name != header.stem]) for header in headers}
    as_they_are = [reading for reading in readings if reading.way == "as they are"]
    for title, models_of in (("left out", without), ("as shipped", dict.fromkeys(without, classify.MODELS))):
        print(f"\n{title:22}", *(f"{name:>9}" for name in FIGURES), "V error, points")
        scored = [score(reading, models_of[reading.name]) for reading in as_they_are]
        for reading, (matrix, error) in zip(as_they_are, scored, strict=True):
            figures = statistics(matrix)
            print(f"{reading.name:22}", *(f"{figures[name].pct:9.2f}" for name in FIGURES), f"{error:8.2f}")
        _print_gross("gross", scored)
        for way in WAYS if options.all_ways else ():
            mine = [reading for reading in readings if reading.way == way]
            _print_gross(way, [score(reading, models_of[reading.name]) for reading in mine])


def _print_gross(title: str, scored: list[tuple[NDArray[np.int64], float]]) -> None:
    total = gross([matrix for matrix, _ in scored])
    errors = np.abs([error for _, error in scored])
    print(f"{title:22}", *(f"{total[name]:9.2f}" for name in FIGURES), end=" ")
    print(f"median {np.median(errors):.2f}, 90 % {np.percentile(errors, 90):.2f}, max {errors.max():.2f}")


if __name__ == "__main__":
    main()
