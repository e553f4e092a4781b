"""Beat labels of a WFDB record in the MIT annotation format.

Source: WFDB specification, physionet.org/physiotools/wag/annot-5.htm: 16-bit little-endian words, six bits of type and
ten bits of time since the annotation before. Signal files are read in flows/readers/wfdb.py.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

_SYMBOLS = dict(enumerate(' NLRaVFJASEj/Q~ | sT*D"=pB^t+u?![]en@xf()r'))
_SKIP, _NUMBER, _SUBTYPE, _CHANNEL, _TEXT = 59, 60, 61, 62, 63


class AnnotationError(ValueError):
    """An annotation file cannot be read; the message names the file and what was found."""


class WfdbAnnotations(NamedTuple):
    """All annotations of one record. Arrays have shape (n_annotations,), in the order of the file."""

    sample: NDArray[np.int64]  # counted in frames of the record
    symbol: NDArray[np.str_]
    subtype: NDArray[np.int64]
    aux: NDArray[np.str_]


class _Mark(NamedTuple):
    sample: int
    symbol: str
    subtype: int = 0
    aux: str = ""


def read_annotations(path: Path) -> WfdbAnnotations:
    """Read one annotation file; raises AnnotationError when it ends within an annotation or has an unknown type."""
    marks = list(_marks(path.read_bytes(), path.name))
    return WfdbAnnotations(
        np.array([mark.sample for mark in marks], np.int64),
        np.array([mark.symbol for mark in marks], "U1"),
        np.array([mark.subtype for mark in marks], np.int64),
        np.array([mark.aux for mark in marks], "U"),
    )


def _marks(data: bytes, name: str) -> Iterator[_Mark]:
    words = np.frombuffer(data[: len(data) // 2 * 2], "<u2").tolist()
    at, sample = 0, 0
    mark: _Mark | None = None
    while at < len(words):
        kind, value = words[at] >> 10, words[at] & 0x3FF
        at += 1
        if kind == 0 and value == 0:
            break
        if kind == _SKIP:
            sample += _long(words, at, name)
            at += 2
        elif kind == _TEXT:
            text = data[2 * at : 2 * at + value]
            at += (value + 1) // 2
            mark = mark._replace(aux=text.rstrip(b"\0").decode("latin-1")) if mark else None
        elif kind == _SUBTYPE:
            mark = mark._replace(subtype=value - 1024 if value >= 512 else value) if mark else None
        elif kind in (_NUMBER, _CHANNEL):
            continue
        else:
            if mark:
                yield mark
            sample += value
            mark = _Mark(sample, _symbol(kind, name))
    else:
        raise AnnotationError(f"{name}: the annotations have no end mark; the file is cut short or not of this format")
    if mark:
        yield mark


def _symbol(kind: int, name: str) -> str:
    symbol = _SYMBOLS.get(kind, " ")
    if symbol == " ":
        raise AnnotationError(f"{name}: annotation type {kind} is not defined; the file is not of the MIT format")
    return symbol


def _long(words: list[int], at: int, name: str) -> int:
    """The long time step after a skip: two words, the high one first."""
    if at + 1 >= len(words):
        raise AnnotationError(f"{name}: the file ends within a time step; it is cut short")
    step = (words[at] << 16) | words[at + 1]
    return step - 2**32 if step >= 2**31 else step
