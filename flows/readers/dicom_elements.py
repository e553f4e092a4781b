"""The data elements of a DICOM file, little-endian, explicit or implicit: small values kept, large ones left in place.

Source: DICOM PS3.5 section 7 (data set encoding) and PS3.10 section 7 (file format).
"""

from __future__ import annotations

import struct
from io import BufferedReader
from typing import Any, NamedTuple

from flows.readers.codes import Refused

_EXPLICIT, _IMPLICIT = b"1.2.840.10008.1.2.1", b"1.2.840.10008.1.2"
_LONG_VRS = (b"OB", b"OD", b"OF", b"OL", b"OV", b"OW", b"SQ", b"UC", b"UN", b"UR", b"UT", b"SV", b"UV")
_ITEM, _ITEM_END, _SEQUENCE_END = 0xFFFEE000, 0xFFFEE00D, 0xFFFEE0DD
_UNDEFINED = 0xFFFFFFFF
_TRANSFER_SYNTAX = 0x00020010
WAVEFORM_DATA = 0x54001010
_LARGEST_KEPT_BYTES = 65_536
_DEEPEST = 16
# Sequences that are looked into where the file does not say which elements are sequences.
_SEQUENCES = (0x54000100, 0x003A0200, 0x003A0208, 0x003A0211)


class Place(NamedTuple):
    """Where a value that is not kept lies in the file."""

    offset: int
    n_bytes: int


Elements = dict[int, Any]  # tag to bytes, Place, or list of Elements


def read_elements(file: BufferedReader) -> Elements:
    """All elements of a file; raises Refused for codings that are not read and for broken structure."""
    file.seek(132)
    end = file.seek(0, 2)
    file.seek(132)
    try:
        meta = _elements(file, end, explicit=True, depth=0, only_group=0x0002)
        syntax = meta.get(_TRANSFER_SYNTAX, _IMPLICIT).strip(b"\0 ")
        if syntax not in (_EXPLICIT, _IMPLICIT):
            raise Refused(
                "format_not_supported",
                "DICOM: the transfer syntax is compressed or big-endian; expected little-endian. Export it so.",
            )
        return _elements(file, end, explicit=syntax == _EXPLICIT, depth=0)
    except (struct.error, RecursionError) as problem:
        raise Refused("header_cut_short", "DICOM: the file ends inside an element. Export it again.") from problem


def _elements(file: BufferedReader, end: int, *, explicit: bool, depth: int, only_group: int | None = None) -> Elements:
    """Elements up to byte `end`, an item's end mark, or the first one of another group."""
    if depth > _DEEPEST:
        raise Refused("header_cut_short", f"DICOM: sequences nest deeper than {_DEEPEST}. Export the file again.")
    found: Elements = {}
    while file.tell() + 8 <= end:
        at = file.tell()
        group, element = struct.unpack("<HH", file.read(4))
        tag = group << 16 | element
        if only_group is not None and group != only_group:
            file.seek(at)
            break
        if tag in (_ITEM_END, _SEQUENCE_END):
            file.read(4)
            break
        kind, n_bytes = _kind_and_length(file, explicit)
        if kind == b"SQ" or tag in _SEQUENCES or (n_bytes == _UNDEFINED and tag != WAVEFORM_DATA):
            found[tag] = _items(file, min(end, file.tell() + n_bytes), explicit=explicit, depth=depth)
        else:
            found[tag] = _value(file, n_bytes, is_kept=n_bytes <= _LARGEST_KEPT_BYTES and tag != WAVEFORM_DATA)
    return found


def _kind_and_length(file: BufferedReader, explicit: bool) -> tuple[bytes, int]:
    if not explicit:
        return b"", struct.unpack("<I", file.read(4))[0]
    kind = file.read(2)
    if kind in _LONG_VRS:
        return kind, struct.unpack("<2xI", file.read(6))[0]
    return kind, struct.unpack("<H", file.read(2))[0]


def _value(file: BufferedReader, n_bytes: int, *, is_kept: bool) -> bytes | Place:
    if n_bytes == _UNDEFINED:
        raise Refused("format_not_supported", "DICOM: the samples are in fragments; expected one block.")
    if is_kept:
        return file.read(n_bytes)
    place = Place(file.tell(), n_bytes)
    file.seek(n_bytes, 1)
    return place


def _items(file: BufferedReader, end: int, *, explicit: bool, depth: int) -> list[Elements]:
    items: list[Elements] = []
    while file.tell() + 8 <= end:
        group, element, n_bytes = struct.unpack("<HHI", file.read(8))
        if group << 16 | element != _ITEM:
            break
        stop = end if n_bytes == _UNDEFINED else min(end, file.tell() + n_bytes)
        items.append(_elements(file, stop, explicit=explicit, depth=depth + 1))
        if n_bytes != _UNDEFINED:
            file.seek(stop)
    return items
