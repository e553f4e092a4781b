"""Beat labels of one recording: MIT-BIH symbols, their EC57 classes, and the spans that some symbols open and close."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

CLASSES = ("N", "S", "V", "F", "Q")

_CLASS_OF_SYMBOL = {
    **dict.fromkeys("N.LRB", "N"),
    **dict.fromkeys("AaJSejn", "S"),
    **dict.fromkeys("VrE", "V"),
    "F": "F",
    **dict.fromkeys("Q?/f", "Q"),
}
_SUPRAVENTRICULAR_ESCAPE = "ejn"
_SHUTDOWN_BITS = 0x30


class Annotations(NamedTuple):
    """Labels of one recording, ordered by sample. All arrays have shape (n_annotations,)."""

    sample: NDArray[np.int64]
    symbol: NDArray[np.str_]  # MIT-BIH annotation symbols: beats, [ ] for flutter or fibrillation, ~ noise, + rhythm
    subtype: NDArray[np.int64]  # of ~: both bits 4 and 5 set means that the labelling was shut down
    aux: NDArray[np.str_]  # of +: the rhythm, for example (AFIB


class Labels(NamedTuple):
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


def sorted_out(labels: Annotations, n_samples: int, escape_as: str) -> Labels:
    """Take the beats and the spans of fibrillation, shutdown and atrial fibrillation out of all annotations."""
    classes = beat_classes(labels.symbol, escape_as=escape_as)
    is_beat = classes >= 0
    noise, rhythm = labels.symbol == "~", labels.symbol == "+"
    fibrillation_mark = np.isin(labels.symbol, ("[", "]"))
    is_shut = (labels.subtype & _SHUTDOWN_BITS) == _SHUTDOWN_BITS
    is_af = np.char.startswith(labels.aux.astype(str), "(AF")  # (AFIB and (AFL
    return Labels(
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


def inside(sample: NDArray[np.int64], spans: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Which samples lie in one of the ordered, disjoint spans, both ends included."""
    before = np.searchsorted(spans[:, 0], sample, side="right") - 1
    inside = np.zeros(sample.shape, bool)
    some = before >= 0
    inside[some] = sample[some] <= spans[before[some], 1]
    return inside
