"""Version 5 transport files: the table format that regulators take, written from a frame of text and numbers.

Layout as in the published record layout of a version 5 transport file (technical note TS-140): 80-byte records, one
140-byte description per variable, big-endian numbers in IBM hexadecimal floating point. Header times are fixed, so that
the same rows make the same bytes.
"""

from __future__ import annotations

import struct
from collections.abc import Mapping

import numpy as np
import polars as pl
from numpy.typing import NDArray

MAX_TEXT, MAX_NAME, MAX_LABEL = 200, 8, 40
_RECORD = 80
_WHEN = "01JAN00:00:00:00"
_MISSING = b"." + bytes(7)


class TransportError(ValueError):
    """A table cannot be held by a transport file; the message names column, value and limit."""


def transport_file(name: str, label: str, frame: pl.DataFrame, labels: Mapping[str, str]) -> bytes:
    """Bytes of a transport file with one table; `frame` has String and Float64 columns, a missing text is ''.

    Raises TransportError for names over 8 and labels over 40 characters, text over 200, and anything outside ASCII.
    """
    _check_names(name, label, frame, labels)
    widths = {column: _width(frame[column]) for column in frame.columns}
    header = _header(name, label, len(frame.columns))
    variables = b"".join(
        _variable(number, column, labels[column], frame.schema[column] == pl.Float64, widths, frame.columns)
        for number, column in enumerate(frame.columns, start=1)
    )
    rows = np.hstack([_cells(frame[column], widths[column]) for column in frame.columns])
    return header + _padded(variables) + _marker("OBS     ") + _padded(rows.tobytes())


def _check_names(name: str, label: str, frame: pl.DataFrame, labels: Mapping[str, str]) -> None:
    for column in (name, *frame.columns):
        if not (column.isascii() and column.isidentifier() and len(column) <= MAX_NAME):
            raise TransportError(f"name {column!r}: expected at most {MAX_NAME} ASCII letters, digits and underscores")
    for text in (label, *(labels[column] for column in frame.columns)):
        if not text.isascii() or len(text) > MAX_LABEL:
            raise TransportError(f"label {text!r}: expected at most {MAX_LABEL} ASCII characters")


def _width(values: pl.Series) -> int:
    if values.dtype == pl.Float64:
        return 8
    for value in values.unique().sort():
        if value is None or not value.isascii() or len(value) > MAX_TEXT:
            raise TransportError(f"{values.name}: {value!r}; expected at most {MAX_TEXT} ASCII characters")
    return max(1, *values.str.len_bytes().drop_nulls())


def _header(name: str, label: str, variables: int) -> bytes:
    library = _marker("LIBRARY ") + _text(f"{'SAS':8}{'SAS':8}{'SASLIB':8}{'9.4':8}", 64) + _text(_WHEN, 16)
    member = (
        _marker("MEMBER  ", f"{0:017}16{0:08}140")
        + _marker("DSCRPTR ")
        + _text(f"{'SAS':8}{name:8}{'SASDATA':8}{'9.4':8}", 64)
        + _text(_WHEN, 16)
        + _text(f"{_WHEN:32}{label:40}", _RECORD)
    )
    return library + _text(_WHEN, _RECORD) + member + _marker("NAMESTR ", f"{0:06}{variables:04}{0:020}")


def _marker(kind: str, numbers: str = "0" * 30) -> bytes:
    return _text(f"HEADER RECORD*******{kind}HEADER RECORD!!!!!!!{numbers}", _RECORD)


def _text(text: str, width: int) -> bytes:
    return text.encode("ascii").ljust(width)


def _padded(content: bytes) -> bytes:
    return content + b" " * (-len(content) % _RECORD)


def _variable(
    number: int, name: str, label: str, is_number: bool, widths: Mapping[str, int], columns: list[str]
) -> bytes:
    position = sum(widths[column] for column in columns[: number - 1])
    kind = 1 if is_number else 2
    head = struct.pack(">4h", kind, 0, widths[name], number) + _text(name, 8) + _text(label, 40)
    formats = _text("", 8) + struct.pack(">3h", 0, 0, 0) + bytes(2) + _text("", 8) + struct.pack(">2h", 0, 0)
    return head + formats + struct.pack(">i", position) + bytes(52)


def _cells(values: pl.Series, width: int) -> NDArray[np.uint8]:
    if values.dtype == pl.Float64:
        return ibm_float(values.to_numpy())
    content = b"".join(_text(value, width) for value in values)
    return np.frombuffer(content, np.uint8).reshape(len(values), width)


def ibm_float(values: NDArray[np.float64]) -> NDArray[np.uint8]:
    """IBM hexadecimal floating point of each value, shape (n, 8) uint8; NaN is the missing value.

    Exact for every double in range: 56 bits hold its 53. Raises TransportError beyond 16**63 and for infinity.
    """
    if np.any(np.abs(values[~np.isnan(values)]) >= 16.0**63):
        raise TransportError(f"a number is not below 16**63: {np.nanmax(np.abs(values))}")
    fraction, exponent = np.frexp(np.abs(np.nan_to_num(values)))
    power = -(-exponent // 4)  # the number is fraction * 2**(exponent - 4 power) * 16**power, its fraction below 1
    whole = np.ldexp(fraction, 56 + exponent - 4 * power).astype(np.uint64)
    sign = np.signbit(values).astype(np.uint64) << np.uint64(63)
    words = sign | ((power + 64).astype(np.uint64) << np.uint64(56)) | whole
    words[(values == 0) | (power < -64)] = 0  # zero, and what is too small to hold
    cells = words.astype(">u8").view(np.uint8).reshape(len(values), 8).copy()
    cells[np.isnan(values)] = np.frombuffer(_MISSING, np.uint8)
    return cells
