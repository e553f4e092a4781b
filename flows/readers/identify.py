"""The one list of readers, tried in this order, and the door through which every delivery is opened.

A format is known by its bytes, never by its name. What no reader knows is named as far as it can be.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from types import ModuleType

from flows.readers import aecg, archive, dicom, edf, ishne, parquet, text, wfdb
from flows.readers.codes import Refused
from flows.readers.recording import NO_SITE, Opened, Site

READERS: tuple[ModuleType, ...] = (edf, ishne, dicom, parquet, aecg, wfdb, text)

HEAD_BYTES = 4096
NO_LIMITS = archive.Limits()

# Marks of formats that arrive by mistake or are not read here: (offset, bytes, code, what it is).
_FOREIGN = (
    (0, b"version https://git-lfs", "pointer_not_data", "a pointer of a large-file store"),
    (0, b"\x89HDF\r\n\x1a\n", "format_not_supported", "an HDF5 file"),
    (0, b"MATLAB", "format_not_supported", "a MATLAB file"),
    (0, b"ARROW1", "format_not_supported", "an Arrow file"),
    (0, b"fLaC", "format_not_supported", "an audio file (FLAC)"),
    (0, b"%PDF-", "format_not_supported", "a PDF document"),
    (0, b"\x89PNG", "format_not_supported", "a picture (PNG)"),
    (0, b"\xff\xd8\xff", "format_not_supported", "a picture (JPEG)"),
    (0, b"7z\xbc\xaf\x27\x1c", "format_not_supported", "a 7-zip archive"),
    (0, b"Rar!", "format_not_supported", "a RAR archive"),
)  # fmt: skip


def reader_of(head: bytes) -> ModuleType | None:
    """The first reader that knows the bytes."""
    return next((reader for reader in READERS if reader.identify(head)), None)


def head_of(path: Path) -> bytes:
    """The first bytes of a file."""
    with path.open("rb") as file:
        return file.read(HEAD_BYTES)


def open_delivery(
    files: Sequence[Path],
    site: Site = NO_SITE,
    *,
    scratch: Path | None = None,
    limits: archive.Limits = NO_LIMITS,
) -> Opened:
    """Open the files of one delivery with the first reader that knows the first file's bytes; raises Refused.

    An archive is unpacked into `scratch` and the recording in it opened; the caller removes the folder.
    """
    head = head_of(files[0])
    if scratch is not None and archive.is_archive(head):
        unpacked = archive.unpack(files[0], scratch, limits)
        if not unpacked:
            raise Refused("no_samples", "the archive holds no files; expected a recording.")
        return open_delivery(archive.the_recording(unpacked, _is_known, _names_of), site)
    if not head:
        raise Refused("empty_file", "the file has 0 bytes; expected a recording. Deliver it again.")
    reader = reader_of(head)
    if reader is None:
        raise _unknown(head)
    opened: Opened = reader.open_delivery(files, site)
    return replace(opened, file_stem=files[0].stem)


def _is_known(head: bytes) -> bool:
    return reader_of(head) is not None


def _names_of(path: Path) -> list[str]:
    """Files that a file claims as its own, when it is a header."""
    return wfdb.names_in_header(path) if wfdb.identify(head_of(path)) else []


def _unknown(head: bytes) -> Refused:
    for offset, mark, code, what in _FOREIGN:
        if head[offset:].startswith(mark):
            return Refused(
                code, f"the file is {what}; expected one of: {_names()}. Export the recording as one of these."
            )
    start = head[:1000].lower()
    if b"<html" in start or b"<!doctype html" in start:
        return Refused(
            "web_page_not_data",
            "the file is a web page, as a login page that answered a download; expected a recording. "
            "Sign in and download it again.",
        )
    return Refused("unknown_format", f"no reader knows the first bytes; tried: {_names()}. Export it as one of these.")


def _names() -> str:
    return ", ".join(reader.NAME for reader in READERS)
