"""Scoring against expert labels: beat by beat and run by run, as ANSI/AAMI EC57 asks.

The rules follow the behaviour of the standard's reference comparators; every figure they print for the cases in
tests/oracle_cases.json is reproduced. Nothing here reads a file or knows how the test beats were made.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

CLASSES = ("N", "S", "V", "F", "Q")
REFERENCE_ROWS = (*CLASSES, "O", "X")  # O: no reference beat, X: none because the reference was shut down
TEST_COLUMNS = ("n", "s", "v", "f", "q", "o", "x")
MATCH_WINDOW_S = 0.15
LEARNING_S = 300.0
LONGEST_COUNTED_RUN = 6  # the last row and column of a run table hold this length and all longer ones

_CLASS_OF_SYMBOL = {
    **dict.fromkeys("N.LRB", "N"),
    **dict.fromkeys("AaJSejn", "S"),
    **dict.fromkeys("VrE", "V"),
    "F": "F",
    **dict.fromkeys("Q?/f", "Q"),
}
_SUPRAVENTRICULAR_ESCAPE = "ejn"
_SHUTDOWN_BITS = 0x30
_N, _S, _V, _F, _Q, _NONE, _SHUT = range(7)


class Annotations(NamedTuple):
    """Labels of one recording, ordered by sample. All arrays have shape (n_annotations,)."""

    sample: NDArray[np.int64]
    symbol: NDArray[np.str_]  # MIT-BIH annotation symbols: beats, [ ] for flutter or fibrillation, ~ noise, + rhythm
    subtype: NDArray[np.int64]  # of ~: both bits 4 and 5 set means that the labelling was shut down
    aux: NDArray[np.str_]  # of +: the rhythm, for example (AFIB


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


class RunScore(NamedTuple):
    """Outcome of a run-by-run comparison: reference run lengths by test run lengths, 0 to 5 and longer."""

    by_reference_run: NDArray[np.int64]  # shape (7, 7): for each reference run, the longest test run within it
    by_test_run: NDArray[np.int64]  # shape (7, 7): for each test run, the longest reference run within it


class Match(NamedTuple):
    """Which beat belongs to which: indices into the two beat lists, -1 where there is none, in time order."""

    reference: NDArray[np.int64]
    test: NDArray[np.int64]


class _Labels(NamedTuple):
    """Annotations sorted out: beats, and spans as arrays of shape (n, 2) from first to last sample."""

    sample: NDArray[np.int64]
    beat_class: NDArray[np.int64]  # index into CLASSES
    fibrillation: NDArray[np.int64]
    shutdown: NDArray[np.int64]
    atrial_fibrillation: NDArray[np.int64]


def beat_annotations(sample: ArrayLike, symbol: Sequence[str] | NDArray[np.str_]) -> Annotations:
    """Plain beats as Annotations without subtypes and rhythm texts; `symbol` may hold EC57 classes."""
    at = np.asarray(sample, dtype=np.int64)
    return Annotations(at, np.asarray(symbol, dtype="U1"), np.zeros(at.shape, np.int64), np.full(at.shape, "", "U1"))


def beat_classes(symbol: NDArray[np.str_], *, escape_as: str = "S") -> NDArray[np.int64]:
    """EC57 class of each MIT-BIH symbol as an index into CLASSES, -1 where the symbol is not a beat.

    Atrial, junctional and supraventricular escape beats (e, j, n) are S in the standard's comparator and N in much
    of the literature; `escape_as` chooses.
    """
    if escape_as not in ("S", "N"):
        raise ValueError(f"escape_as = {escape_as!r}; expected 'S' (as the standard's comparator does) or 'N'")
    table = _CLASS_OF_SYMBOL | dict.fromkeys(_SUPRAVENTRICULAR_ESCAPE, escape_as)
    names, where = np.unique(symbol, return_inverse=True)
    index_of_name = [CLASSES.index(table[str(name)]) if str(name) in table else -1 for name in names]
    return np.array(index_of_name, dtype=np.int64)[where]


def compare_beats(
    reference: Annotations,
    test: Annotations,
    *,
    fs_hz: float,
    n_samples: int,
    learning_s: float = LEARNING_S,
    escape_as: str = "S",
) -> BeatScore:
    """Count which test beat stands for which reference beat, class by class.

    The first `learning_s` are not scored. Source of the method: ANSI/AAMI EC57, beat-by-beat comparison.
    The RR error is taken at every decision, unmatched beats included, as the standard's comparator does.
    """
    truth, found = _sorted_out(reference, n_samples, escape_as), _sorted_out(test, n_samples, escape_as)
    start = round(learning_s * fs_hz)
    true_rr, found_rr = _rr(truth), _rr(found)
    said = ~_inside(found.sample, truth.fibrillation)  # beats within marked fibrillation say nothing about the test
    found = found._replace(sample=found.sample[said], beat_class=found.beat_class[said])
    match = match_beats(truth.sample, found.sample, window=match_window(fs_hz))
    scored = _from_start(match, truth.sample, found.sample, start)
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


def compare_runs(
    reference: Annotations,
    test: Annotations,
    *,
    fs_hz: float,
    n_samples: int,
    ectopy: str,
    learning_s: float = LEARNING_S,
    escape_as: str = "S",
) -> RunScore:
    """Count how long the runs of one side are on the other side.

    `ectopy` "V": V and F beats make runs, and a stretch of marked ventricular fibrillation counts as a run of the
    longest counted length. "S": S beats make runs, and so do N beats within marked atrial fibrillation or flutter;
    such a stretch is at least of the longest counted length.
    Source of the method: ANSI/AAMI EC57, run-by-run comparison.
    """
    if ectopy not in ("V", "S"):
        raise ValueError(f"ectopy = {ectopy!r}; expected 'V' or 'S'")
    start, window = round(learning_s * fs_hz), match_window(fs_hz)
    truth, found = (_run_marks(_sorted_out(side, n_samples, escape_as), ectopy) for side in (reference, test))
    table = _run_table(truth, found, start, window)
    return RunScore(table, _run_table(found, truth, start, window).T.copy())


def run_statistics(score: RunScore) -> dict[str, Ratio]:
    """Couplet, short run (3 to 5 beats) and long run (6 or more) sensitivity and positive predictivity."""
    spans = {"couplet": (2, 3), "short_run": (3, 6), "long_run": (6, 7)}
    ratios = {}
    for name, (least, beyond) in spans.items():
        of_reference, of_test = score.by_reference_run[least:beyond], score.by_test_run[:, least:beyond]
        ratios[f"{name}_se"] = Ratio(int(of_reference[:, least:].sum()), int(of_reference.sum()))
        ratios[f"{name}_ppv"] = Ratio(int(of_test[least:].sum()), int(of_test.sum()))
    return ratios


class _RunMarks(NamedTuple):
    """What makes or breaks runs, in time order. All arrays have shape (n_marks,)."""

    first: NDArray[np.int64]
    last: NDArray[np.int64]
    length: NDArray[np.int64]  # beats that the mark adds to a run; 0 ends one


def _run_marks(labels: _Labels, ectopy: str) -> _RunMarks:
    """Beats and spans of one side as marks that lengthen or end a run."""
    if ectopy == "V":
        makes, long_spans = np.isin(labels.beat_class, (_V, _F)), labels.fibrillation
    else:
        in_af = _inside(labels.sample, labels.atrial_fibrillation) & (labels.beat_class == _N)
        makes, long_spans = in_af | (labels.beat_class == _S), labels.atrial_fibrillation
    shut = labels.shutdown[:, 0]
    first = np.concatenate([labels.sample, long_spans[:, 0], shut])
    last = np.concatenate([labels.sample, long_spans[:, 1], shut])
    span_lengths = np.full(len(long_spans), LONGEST_COUNTED_RUN)
    length = np.concatenate([makes.astype(np.int64), span_lengths, np.zeros(len(shut), np.int64)])
    order = np.argsort(first, kind="stable")
    return _RunMarks(first[order], last[order], length[order])


def _run_table(ours: _RunMarks, theirs: _RunMarks, start: int, window: int) -> NDArray[np.int64]:
    """For each of our runs from `start` on, the longest of their runs near it: counts, shape (7, 7)."""
    table = np.zeros((LONGEST_COUNTED_RUN + 1, LONGEST_COUNTED_RUN + 1), np.int64)
    scored = ours.last >= start
    first, last, length = (column[scored] for column in ours)
    edges = np.flatnonzero(np.diff(np.concatenate([[0], (length > 0).astype(np.int8), [0]])))
    reached = np.maximum.accumulate(theirs.last)
    done = 0
    for begin, end in edges.reshape(-1, 2):
        beyond = int(np.searchsorted(theirs.first, last[begin:end].max() + window, side="right"))
        near = max(done, int(np.searchsorted(reached, first[begin] - window)))
        done = max(done, beyond)  # each mark is looked at once, as the standard's comparator does
        own = min(int(length[begin:end].sum()), LONGEST_COUNTED_RUN)
        table[own, min(_longest_run(theirs.length[near:beyond]), LONGEST_COUNTED_RUN)] += 1
    return table


def _longest_run(lengths: NDArray[np.int64]) -> int:
    longest = current = 0
    for length in lengths.tolist():
        current = current + length if length else 0
        longest = max(longest, current)
    return longest


def _sorted_out(labels: Annotations, n_samples: int, escape_as: str) -> _Labels:
    classes = beat_classes(labels.symbol, escape_as=escape_as)
    is_beat = classes >= 0
    noise, rhythm = labels.symbol == "~", labels.symbol == "+"
    fibrillation_mark = np.isin(labels.symbol, ("[", "]"))
    is_shut = (labels.subtype & _SHUTDOWN_BITS) == _SHUTDOWN_BITS
    is_af = np.char.startswith(labels.aux.astype(str), "(AF")  # (AFIB and (AFL
    return _Labels(
        labels.sample[is_beat],
        classes[is_beat],
        _spans(labels.sample[fibrillation_mark], labels.symbol[fibrillation_mark] == "[", n_samples),
        _spans(labels.sample[noise], is_shut[noise], n_samples),
        _spans(labels.sample[rhythm], is_af[rhythm], n_samples),
    )


def _spans(sample: NDArray[np.int64], is_on: NDArray[np.bool_], n_samples: int) -> NDArray[np.int64]:
    """Spans from each mark that switches on to the next that switches off, shape (n_spans, 2)."""
    turns = np.flatnonzero(np.diff(np.concatenate([[False], is_on])))
    edges = sample[turns].tolist()
    if len(edges) % 2:
        edges.append(n_samples)
    return np.array(edges, dtype=np.int64).reshape(-1, 2)


def _inside(sample: NDArray[np.int64], spans: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Which samples lie in one of the ordered, disjoint spans, both ends included."""
    before = np.searchsorted(spans[:, 0], sample, side="right") - 1
    inside = np.zeros(sample.shape, bool)
    some = before >= 0
    inside[some] = sample[some] <= spans[before[some], 1]
    return inside


def _rr(labels: _Labels) -> NDArray[np.float64]:
    """Samples since the beat before, NaN for the first beat and across fibrillation or shutdown."""
    rr = np.diff(labels.sample.astype(np.float64), prepend=np.nan)
    for begin, _ in [*labels.fibrillation, *labels.shutdown]:
        after = np.searchsorted(labels.sample, begin)
        rr[after : after + 1] = np.nan
    return rr


def _from_start(
    match: Match, truth_at: NDArray[np.int64], found_at: NDArray[np.int64], start: int
) -> NDArray[np.bool_]:
    """Which decisions are scored: those whose reference beat, or lone test beat, lies at or after `start`."""
    lone = match.reference < 0
    scored = np.empty(lone.shape, bool)
    scored[lone] = found_at[match.test[lone]] >= start
    scored[~lone] = truth_at[match.reference[~lone]] >= start
    return scored


def _rows(reference: NDArray[np.int64], test: NDArray[np.int64], truth: _Labels, found: _Labels) -> NDArray[np.int64]:
    """Row of the matrix for each decision: the reference beat's class, or why there is none."""
    extra = reference < 0
    row = np.empty(extra.shape, np.int64)
    row[~extra] = truth.beat_class[reference[~extra]]
    row[extra] = np.where(_inside(found.sample[test[extra]], truth.shutdown), _SHUT, _NONE)
    return row


def _true_class(
    match: Match, scored: NDArray[np.bool_], truth: _Labels, found: _Labels, said: NDArray[np.bool_]
) -> NDArray[np.int64]:
    with_test = scored & (match.test >= 0)
    test = match.test[with_test]
    true_class = np.full(said.shape, -1, np.int64)
    true_class[np.flatnonzero(said)[test]] = _rows(match.reference[with_test], test, truth, found)
    return true_class


def _matrix(match: Match, scored: NDArray[np.bool_], truth: _Labels, found: _Labels) -> NDArray[np.int64]:
    reference, test = match.reference[scored], match.test[scored]
    missed = test < 0
    column = np.empty(missed.shape, np.int64)
    column[~missed] = found.beat_class[test[~missed]]
    column[missed] = np.where(_inside(truth.sample[reference[missed]], found.shutdown), _SHUT, _NONE)
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
