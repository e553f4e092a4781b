"""Foreign files into a folder of our own before anything is read from them: copied and hashed in one pass.

A file that is cut or replaced while it is read then cannot hurt, and hash and samples are of the same bytes.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import shutil
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from io import FileIO
from pathlib import Path
from typing import NamedTuple

from flows.readers.codes import Waits

_PIECE_BYTES = 2**18  # stays in the processor's cache between reading, hashing and writing


class Staged(NamedTuple):
    """Copies of one delivery's files, in the same order, and the hash of what was copied."""

    files: tuple[Path, ...]
    content_sha256: str


@contextmanager
def staged(folder: Path, files: Sequence[Path], passed: Callable[[int], None] = lambda n: None) -> Iterator[Staged]:
    """Copy the files into `folder`, which is emptied before and removed after; `passed(n)` is called per piece.

    Raises Waits when a file changes meanwhile, cannot be read, or does not fit on the disk.
    """
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    try:
        copies = tuple(folder / file.name for file in files)
        hashes = [_copied(file, copy, passed) for file, copy in zip(files, copies, strict=True)]
        yield Staged(copies, content_hash(hashes))
    except OSError as problem:
        if problem.errno in (errno.ENOSPC, errno.EDQUOT):
            raise Waits(
                "no_space_left", "no room is left on the disk of the programme folder. Make room, then run again."
            ) from problem
        raise
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def content_hash(file_hashes: Sequence[str]) -> str:
    """SHA-256 of one file, or of the hashes of a set in its order; names do not count."""
    if len(file_hashes) == 1:
        return file_hashes[0]
    return hashlib.sha256("".join(file_hashes).encode()).hexdigest()


def hash_file(path: Path) -> str:
    """SHA-256 of a file where it lies."""
    return _copied(path, None, lambda n: None)


def _copied(path: Path, copy: Path | None, passed: Callable[[int], None]) -> str:
    try:
        source = path.open("rb", buffering=0)
    except PermissionError:
        raise Waits("not_readable", "the file may not be read by this program. Give it the right to read.") from None
    except FileNotFoundError:
        raise Waits("still_being_written", "the file went away while it was looked at. Run again.") from None
    digest, buffer = hashlib.sha256(), bytearray(_PIECE_BYTES)
    view = memoryview(buffer)
    with source, copy.open("wb", buffering=0) if copy else contextlib.nullcontext() as target:
        before = _state(path)
        while n := _read(source, buffer):
            digest.update(view[:n])
            if target is not None:
                _write_all(target, view[:n])
            passed(n)
        if _state(path) != before:
            raise Waits("still_being_written", "the file changed while it was copied. Run again when it is complete.")
    return digest.hexdigest()


def _read(source: FileIO, buffer: bytearray) -> int:
    try:
        return source.readinto(buffer)
    except OSError:
        raise Waits("not_readable", "the file could not be read to its end. Check its disk, then run again.") from None


def _write_all(target: FileIO, view: memoryview) -> None:
    while view:
        view = view[target.write(view) :]


def _state(path: Path) -> tuple[int, int] | None:
    try:
        found = path.stat()
    except FileNotFoundError:
        return None
    return found.st_size, found.st_mtime_ns
