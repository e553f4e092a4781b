"""Beat-by-beat scoring against expert labels, as ANSI/AAMI EC57 asks.

The rules follow the behaviour of the standard's reference comparator for beats; every figure that it prints for the
cases in tests/oracle_cases.json is reproduced. Nothing here reads a file or knows how the test beats were made.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.annotations import CLASSES, Annotations, Labels, inside, sorted_out

REFERENCE_ROWS = (*CLASSES, "O", "X")  # O: no reference beat, X: none because the reference was shut down
TEST_COLUMNS = ("n", "s", "v", "f", "q", "o", "x")
MATCH_WINDOW_S = 0.15
LEARNING_S = 300.0

_N, _S, _V, _F, _Q, _NONE, _SHUT = range(7)
_NOTHING = np.zeros((0, 2), np.int64)


class Ratio(NamedTuple):
    """Part over whole, both counts."""

    part: int
    whole: int

    @property
    def pct(self) -> float:
        """The ratio in per cent, NaN when the whole is 0."""
        return 100.0 * self.part / self.whole if self.whole else float("nan")


class BeatScore(NamedTuple):
    """Outcome of a beat-by-beat comparison."""

    matrix: NDArray[np.int64]  # shape (7, 7), REFERENCE_ROWS by TEST_COLUMNS
    rms_rr_error_ms: float
    shutdown_s: float  # scored time in which the test labelling was shut down
    true_class: NDArray[np.int64]  # per test beat: index into REFERENCE_ROWS of what it met, -1 when not scored


class Match(NamedTuple):
    """Which beat belongs to which: indices into the two beat lists, -1 where there is none, in time order."""

    reference: NDArray[np.int64]
    test: NDArray[np.int64]


def compare_beats(
    reference: Annotations,
    test: Annotations,
    *,
    fs_hz: float,
    n_samples: int,
    learning_s: float = LEARNING_S,
    escape_as: str = "S",
    left_out: NDArray[np.int64] | None = None,
) -> BeatScore:
    """Count which test beat stands for which reference beat, class by class.

    The first `learning_s` are not scored, nor is what lies in the spans `left_out`, shape (n, 2), first to last sample.
    A pair lies where its reference beat lies. Source of the method: ANSI/AAMI EC57, beat-by-beat comparison.
    The RR error is taken at every decision, unmatched beats included, as the standard's comparator does.
    """
    truth, found = sorted_out(reference, n_samples, escape_as), sorted_out(test, n_samples, escape_as)
    start = round(learning_s * fs_hz)
    true_rr, found_rr = _rr(truth), _rr(found)
    said = ~inside(found.sample, truth.fibrillation)  # beats within marked fibrillation say nothing about the test
    found = found._replace(sample=found.sample[said], beat_class=found.beat_class[said])
    match = match_beats(truth.sample, found.sample, window=match_window(fs_hz))
    where = _where(match, truth.sample, found.sample)
    scored = (where >= start) & ~inside(where, _NOTHING if left_out is None else left_out)
    shut = np.clip(found.shutdown, start, n_samples)
    return BeatScore(
        _matrix(match, scored, truth, found),
        _rms_difference(match, scored, true_rr, found_rr[said]) * 1000.0 / fs_hz,
        float((shut[:, 1] - shut[:, 0]).sum() / fs_hz),
        _true_class(match, scored, truth, found, said),
    )


def match_window(fs_hz: float) -> int:
    """The largest distance of two matching beats, in samples."""
    return int(MATCH_WINDOW_S * fs_hz + 0.5)


def match_beats(reference: NDArray[np.int64], test: NDArray[np.int64], *, window: int) -> Match:
    """Pair two ordered beat lists one to one, scanning in time order.

    The earlier of the two current beats takes the other as its partner when they are at most `window` samples apart
    and either no beat after it would be nearer to the later one, or the two beats that follow suit each other better.
    """
    far = int(max(reference[-1:].max(initial=0), test[-1:].max(initial=0))) + 4 * (window + 1)
    truth, found = [*reference.tolist(), far, far], [*test.tolist(), far, far]
    n_truth, n_found = len(reference), len(test)
    i = j = 0
    pairs: list[tuple[int, int]] = []
    while i < n_truth or j < n_found:
        test_is_earlier = found[j] < truth[i]
        rival = abs(truth[i] - found[j + 1]) if test_is_earlier else abs(found[j] - truth[i + 1])
        apart = abs(truth[i] - found[j])
        if apart <= window and (apart < rival or abs(truth[i + 1] - found[j + 1]) < rival):
            pairs.append((i, j))
            i, j = i + 1, j + 1
        elif test_is_earlier:
            pairs.append((-1, j))
            j += 1
        else:
            pairs.append((i, -1))
            i += 1
    columns = np.array(pairs, dtype=np.int64).reshape(-1, 2)
    return Match(columns[:, 0], columns[:, 1])


def statistics(matrix: NDArray[np.int64]) -> dict[str, Ratio]:
    """The EC57 ratios of a comparison matrix of shape (7, 7), in the order in which they are reported.

    Q beats called ectopic, and for ventricular beats F beats called ventricular, are neither right nor wrong.
    """
    found = matrix[:_NONE, :_NONE]
    total = matrix[:_NONE].sum(axis=1)
    return {
        "qrs_se": Ratio(int(found.sum()), int(total.sum())),
        "qrs_ppv": Ratio(int(found.sum()), int(matrix[:, :_NONE].sum())),
        "veb_se": Ratio(int(matrix[_V, _V]), int(total[_V])),
        "veb_ppv": Ratio(int(matrix[_V, _V]), int(matrix[[_N, _S, _V, _NONE, _SHUT], _V].sum())),
        "sveb_se": Ratio(int(matrix[_S, _S]), int(total[_S])),
        "sveb_ppv": Ratio(int(matrix[_S, _S]), int(matrix[[_N, _S, _V, _F, _NONE, _SHUT], _S].sum())),
        "veb_fpr": _ventricular_false_positive_rate(matrix),
        "missed_in_shutdown": Ratio(int(matrix[:_NONE, _SHUT].sum()), int(total.sum())),
    }


def _ventricular_false_positive_rate(matrix: NDArray[np.int64]) -> Ratio:
    others = matrix[[_N, _S, _F, _Q, _NONE, _SHUT], :_NONE]  # missed beats were not called anything
    not_called = int(others.sum() - others[:, _V].sum())
    called = int(matrix[[_N, _S, _NONE, _SHUT], _V].sum())
    return Ratio(called, called + not_called)


def gross(matrices: Sequence[NDArray[np.int64]]) -> dict[str, float]:
    """Statistics in per cent of the summed counts of several recordings."""
    return {name: ratio.pct for name, ratio in statistics(np.sum(matrices, axis=0)).items()}


def average(matrices: Sequence[NDArray[np.int64]]) -> dict[str, float]:
    """Unweighted mean in per cent of each recording's statistics, over the recordings for which it is defined."""
    each = [statistics(matrix) for matrix in matrices]
    names = each[0] if each else {}
    return {name: _mean_defined([ratios[name] for ratios in each]) for name in names}


def _mean_defined(ratios: list[Ratio]) -> float:
    defined = [ratio.pct for ratio in ratios if ratio.whole]
    return sum(defined) / len(defined) if defined else float("nan")


def _rr(labels: Labels) -> NDArray[np.float64]:
    """Samples since the beat before, NaN for the first beat and across fibrillation or shutdown."""
    rr = np.diff(labels.sample.astype(np.float64), prepend=np.nan)
    for begin, _ in [*labels.fibrillation, *labels.shutdown]:
        after = np.searchsorted(labels.sample, begin)
        rr[after : after + 1] = np.nan
    return rr


def _where(match: Match, truth_at: NDArray[np.int64], found_at: NDArray[np.int64]) -> NDArray[np.int64]:
    """Sample of each decision: of its reference beat, or of the test beat that has none."""
    lone = match.reference < 0
    where = np.empty(lone.shape, np.int64)
    where[lone] = found_at[match.test[lone]]
    where[~lone] = truth_at[match.reference[~lone]]
    return where


def _rows(reference: NDArray[np.int64], test: NDArray[np.int64], truth: Labels, found: Labels) -> NDArray[np.int64]:
    """Row of the matrix for each decision: the reference beat's class, or why there is none."""
    extra = reference < 0
    row = np.empty(extra.shape, np.int64)
    row[~extra] = truth.beat_class[reference[~extra]]
    row[extra] = np.where(inside(found.sample[test[extra]], truth.shutdown), _SHUT, _NONE)
    return row


def _true_class(
    match: Match, scored: NDArray[np.bool_], truth: Labels, found: Labels, said: NDArray[np.bool_]
) -> NDArray[np.int64]:
    with_test = scored & (match.test >= 0)
    test = match.test[with_test]
    true_class = np.full(said.shape, -1, np.int64)
    true_class[np.flatnonzero(said)[test]] = _rows(match.reference[with_test], test, truth, found)
    return true_class


def _matrix(match: Match, scored: NDArray[np.bool_], truth: Labels, found: Labels) -> NDArray[np.int64]:
    reference, test = match.reference[scored], match.test[scored]
    missed = test < 0
    column = np.empty(missed.shape, np.int64)
    column[~missed] = found.beat_class[test[~missed]]
    column[missed] = np.where(inside(truth.sample[reference[missed]], found.shutdown), _SHUT, _NONE)
    matrix = np.zeros((len(REFERENCE_ROWS), len(TEST_COLUMNS)), np.int64)
    np.add.at(matrix, (_rows(reference, test, truth, found), column), 1)
    return matrix


def _rms_difference(
    match: Match, scored: NDArray[np.bool_], true_rr: NDArray[np.float64], found_rr: NDArray[np.float64]
) -> float:
    """Root mean square of the RR differences at every scored decision of the scan, 0 when there is none."""
    has_truth, has_found = match.reference >= 0, match.test >= 0
    i: NDArray[np.int64] = np.cumsum(has_truth) - has_truth  # the two beats under comparison
    j: NDArray[np.int64] = np.cumsum(has_found) - has_found
    both = scored & (i < len(true_rr)) & (j < len(found_rr))
    difference = true_rr[i[both]] - found_rr[j[both]]
    difference = difference[np.isfinite(difference)]
    return float(np.sqrt(np.mean(difference**2))) if len(difference) else 0.0
