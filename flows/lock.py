"""One run at a time on a programme folder, and one schedule.

The operating system drops the lock when its holder dies, so no dead lock survives a crash; the text in the file only
names the holder.
"""

from __future__ import annotations

import fcntl
import os
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


class FolderBusy(RuntimeError):
    """Another run or schedule holds the programme folder; the message names its process and host."""


@contextmanager
def folder_lock(folder: Path, wait_s: float = 0.0) -> Iterator[None]:
    """Hold the folder while the body runs; raises FolderBusy when another run still holds it after `wait_s` seconds."""
    try:
        with _held(folder / "lake" / "run.lock", wait_s):
            yield
    except _Held as holder:
        raise FolderBusy(f"{folder} is in use by {holder}; wait for it to end, or pass --wait SECONDS") from None


@contextmanager
def schedule_lock(folder: Path) -> Iterator[None]:
    """Be the only schedule of the folder while the body runs; raises FolderBusy when there is one already."""
    try:
        with _held(folder / "lake" / "schedule.lock", 0.0):
            yield
    except _Held as holder:
        raise FolderBusy(f"{folder} is scheduled already, by {holder}; end that one before another begins") from None


class _Held(Exception):
    """Somebody else holds the file; the text names the holder."""


@contextmanager
def _held(path: Path, wait_s: float) -> Iterator[None]:
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("a+", encoding="utf-8") as handle:
        _acquire(handle.fileno(), path, time.monotonic() + wait_s)
        handle.truncate(0)
        handle.write(f"process {os.getpid()} on host {socket.gethostname()}")
        handle.flush()
        yield


def _acquire(descriptor: int, path: Path, deadline: float) -> None:
    while True:
        try:
            return fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            if time.monotonic() >= deadline:
                raise _Held(path.read_text(encoding="utf-8") or "another process") from None
        except OSError as problem:
            told = f"{problem.strerror}; expected a disk that knows file locks"
            raise OSError(problem.errno, told, str(path)) from None
        time.sleep(min(0.5, max(0.0, deadline - time.monotonic())))
