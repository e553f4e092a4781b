"""Zip and gzip deliveries: unpacked once, into a folder of our own, within limits of size, ratio, number and names.

Sizes that an archive states are not trusted: bytes are counted as they come out.
"""

from __future__ import annotations

import errno
import gzip
import shutil
import stat
import struct
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path, PurePosixPath
from typing import IO, NamedTuple

from flows.readers.codes import Refused

_PIECE_BYTES = 2**20
_MOST_MEMBERS = 2000
_SMALL_BYTES = 2**20  # below this the ratio says nothing


# What the standard library raises on broken archives of either kind; passwords and unknown methods among them.
_DAMAGES = (
    EOFError,
    IndexError,
    NotImplementedError,
    OverflowError,
    RuntimeError,
    ValueError,
    struct.error,
    zlib.error,
    zipfile.BadZipFile,
)


class Limits(NamedTuple):
    """How far an archive may grow."""

    largest_bytes: int = 4096 * 10**6
    largest_ratio: int = 200


def is_archive(head: bytes) -> bool:
    """Zip and gzip by their first bytes."""
    return head.startswith((b"\x1f\x8b", b"PK\x03\x04", b"PK\x05\x06"))


def unpack(path: Path, folder: Path, limits: Limits) -> list[Path]:
    """Unpack one archive into `folder`, emptied first; returns its files in order of their names. Raises Refused."""
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    with path.open("rb") as file:
        head = file.read(4)
    budget = _Budget(path.stat().st_size, limits)
    try:
        files = _gunzip(path, folder, budget) if head.startswith(b"\x1f\x8b") else _unzip(path, folder, budget)
    except (*_DAMAGES, OSError) as problem:
        if isinstance(problem, OSError) and problem.errno in (errno.ENOSPC, errno.EDQUOT):
            raise
        raise Refused(
            "damaged_archive",
            "the archive is cut, damaged or needs a password; expected one that unpacks whole. Pack it again.",
        ) from problem
    for found in files:
        with found.open("rb") as file:
            if is_archive(file.read(4)):
                raise Refused("archive_unsafe", "the archive holds another archive; expected recordings in one layer.")
    return files


class _Budget:
    """Counts what comes out of an archive."""

    def __init__(self, packed_bytes: int, limits: Limits) -> None:
        self._largest = min(limits.largest_bytes, max(packed_bytes * limits.largest_ratio, _SMALL_BYTES))
        self._limits, self._bytes = limits, 0

    def copy(self, source: IO[bytes] | gzip.GzipFile, target: Path) -> None:
        """Copy to the end of the source; refuses beyond the limit."""
        with target.open("xb") as writing:
            while piece := source.read(_PIECE_BYTES):
                self._bytes += len(piece)
                if self._bytes > self._largest:
                    raise Refused(
                        "archive_unsafe",
                        f"the archive unpacks to more than {self._largest / 1e6:.0f} MB; expected at most "
                        f"{self._limits.largest_bytes / 1e6:.0f} MB and {self._limits.largest_ratio} times its size. "
                        "Raise largest_unpacked_mb or largest_unpack_ratio in section [inbox] if that is right.",
                    )
                writing.write(piece)


def _gunzip(path: Path, folder: Path, budget: _Budget) -> list[Path]:
    target = folder / (path.stem if path.suffix.casefold() == ".gz" else path.name)
    with gzip.open(path, "rb") as source:
        budget.copy(source, target)
    return [target]


def _unzip(path: Path, folder: Path, budget: _Budget) -> list[Path]:
    with zipfile.ZipFile(path) as archive:
        members = [member for member in archive.infolist() if _is_wanted(member)]
        if len(members) > _MOST_MEMBERS:
            raise Refused("archive_unsafe", f"the archive has {len(members)} files; expected at most {_MOST_MEMBERS}.")
        targets = {}
        for member in sorted(members, key=lambda member: member.filename):
            target = folder / _safe_name(member)
            if target.name.casefold() in targets:
                raise Refused("archive_unsafe", "the archive has two files of one name; expected different names.")
            targets[target.name.casefold()] = target
            with archive.open(member) as source:
                budget.copy(source, target)
    return list(targets.values())


def _is_wanted(member: zipfile.ZipInfo) -> bool:
    name = PurePosixPath(member.filename).name
    return not member.is_dir() and not name.startswith(".") and not member.filename.startswith("__MACOSX/")


def _safe_name(member: zipfile.ZipInfo) -> str:
    """Name without folders; refuses one that would leave the folder, and links."""
    name = member.filename
    is_link = stat.S_ISLNK(member.external_attr >> 16)
    if is_link or name.startswith("/") or "\\" in name or "\0" in name or ".." in PurePosixPath(name).parts:
        raise Refused(
            "archive_unsafe", "a file in the archive is a link or its name leads outside; expected plain files."
        )
    return PurePosixPath(name).name


def the_recording(
    files: list[Path], opens: Callable[[bytes], bool], names_of: Callable[[Path], list[str]]
) -> list[Path]:
    """The one recording among unpacked files: its file to open first, then the rest.

    `opens(head)` tells whether a reader knows the bytes; `names_of(file)` the files that a header claims.
    """
    heads = {}
    for file in files:
        with file.open("rb") as reading:
            heads[file] = reading.read(4096)
    known = [file for file in files if opens(heads[file])]
    claimed = {name for file in known for name in names_of(file)}
    first = [file for file in known if file.name not in claimed]
    if len(first) > 1:
        raise Refused(
            "archive_holds_several",
            f"the archive holds {len(first)} recordings; expected one. Deliver each in a file of its own.",
        )
    if not first:
        return files
    return [first[0], *(file for file in files if file != first[0])]
