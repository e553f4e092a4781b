"""Run-by-run scoring: how long are the ectopic runs of one side on the other side, as ANSI/AAMI EC57 asks.

The rules follow the behaviour of the standard's reference comparator for runs.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.annotations import CLASSES, Annotations, Labels, inside, sorted_out
from detectors.scoring import LEARNING_S, Ratio, match_window

LONGEST_COUNTED_RUN = 6  # the last row and column of a run table hold this length and all longer ones

_N, _S, _V, _F = (CLASSES.index(name) for name in "NSVF")


class RunScore(NamedTuple):
    """Outcome of a run-by-run comparison: reference run lengths by test run lengths, 0 to 5 and longer."""

    by_reference_run: NDArray[np.int64]  # shape (7, 7): for each reference run, the longest test run within it
    by_test_run: NDArray[np.int64]  # shape (7, 7): for each test run, the longest reference run within it


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
    truth, found = (_run_marks(sorted_out(side, n_samples, escape_as), ectopy) for side in (reference, test))
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


def _run_marks(labels: Labels, ectopy: str) -> _RunMarks:
    """Beats and spans of one side as marks that lengthen or end a run."""
    if ectopy == "V":
        makes, long_spans = np.isin(labels.beat_class, (_V, _F)), labels.fibrillation
    else:
        in_af = inside(labels.sample, labels.atrial_fibrillation) & (labels.beat_class == _N)
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
