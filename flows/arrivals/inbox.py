"""The inbox: which deliveries lie there, which files belong together, and which are not to be touched yet.

Nothing is opened further than its first bytes here, and nothing is moved.
"""

from __future__ import annotations

import hashlib
import json
import os
import stat
from collections.abc import Collection, Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import NamedTuple

from flows.readers import wfdb
from flows.readers.codes import Declined, Refused, Waits
from flows.readers.identify import head_of, reader_of
from flows.settings import InboxSettings
from warehouse.parts import write_whole

_LARGEST_HEADER_BYTES = 2**20
_LATEST_NS = 253_402_300_799 * 10**9  # end of the year 9999, the last that a date can hold


@dataclass(frozen=True)
class Candidate:
    """Files that arrived together: the first is the one to open, `companions` only move with it."""

    name: str  # of the first file, relative to the inbox
    files: tuple[Path, ...]
    companions: tuple[Path, ...] = ()
    size: int = 0
    mtime_ns: int = 0  # latest of the files
    problem: Declined | None = None  # known without opening it

    @property
    def received_utc(self) -> datetime:
        """Modification time of the latest file, naive UTC."""
        seconds, rest_ns = divmod(min(max(self.mtime_ns, 0), _LATEST_NS), 10**9)
        return datetime.fromtimestamp(seconds, UTC).replace(microsecond=rest_ns // 1000, tzinfo=None)


def look(inbox: Path, settings: InboxSettings, now_s: float) -> list[Candidate]:
    """All deliveries in the inbox in the order of their arrival; links, pipes and devices are refused candidates."""
    plain, odd = _entries(inbox, settings.done_marker)
    candidates = [_odd_candidate(inbox, path) for path in odd]
    candidates += [_checked(candidate, settings, now_s) for candidate in _grouped(inbox, plain)]
    return sorted(candidates, key=lambda candidate: (candidate.mtime_ns, candidate.name))


def _entries(inbox: Path, done_marker: str) -> tuple[list[Path], list[Path]]:
    """Plain files, and whatever else lies in the inbox; hidden entries and done markers are neither."""
    plain: list[Path] = []
    odd: list[Path] = []
    for folder, folders, files in os.walk(inbox, followlinks=False):
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        for name in [*files, *(name for name in folders if (Path(folder) / name).is_symlink())]:
            path = Path(folder) / name
            if name.startswith(".") or (done_marker and name.endswith(done_marker)):
                continue
            try:
                is_plain = stat.S_ISREG(path.lstat().st_mode)
            except FileNotFoundError:
                continue
            (plain if is_plain else odd).append(path)
    return sorted(plain), sorted(odd)


def _odd_candidate(inbox: Path, path: Path) -> Candidate:
    problem = Refused(
        "not_a_plain_file",
        "the inbox entry is a link, a pipe or a device; expected a plain file. Copy the file itself into the inbox.",
    )
    name = path.relative_to(inbox).as_posix()
    return Candidate(name, (path,), mtime_ns=path.lstat().st_mtime_ns, problem=problem)


def _grouped(inbox: Path, plain: Sequence[Path]) -> Iterator[Candidate]:
    """File sets of WFDB headers first; what no header claims stands alone."""
    headers = {path for path in plain if _is_header(path)}
    claimed: set[Path] = set()
    sets = []
    for header in sorted(headers, key=lambda path: (not _has_segments(path), path)):
        if header not in claimed:
            files, problem = _file_set(header)
            claimed |= set(files)
            sets.append((files, problem))
    for files, problem in sets:
        companions = _companions(files[0], plain, claimed)
        claimed |= set(companions)
        yield _candidate(inbox, files, companions, problem)
    for path in plain:
        if path not in claimed:
            yield _candidate(inbox, (path,), (), _orphan(path))


def _candidate(inbox: Path, files: Sequence[Path], companions: Sequence[Path], problem: Declined | None) -> Candidate:
    there = [found for path in files if (found := _stat(path))]
    return Candidate(
        files[0].relative_to(inbox).as_posix(),
        tuple(files),
        tuple(companions),
        sum(found.st_size for found in there),
        max((found.st_mtime_ns for found in there), default=0),
        problem,
    )


def _stat(path: Path) -> os.stat_result | None:
    try:
        return path.stat()
    except OSError:
        return None


def _is_header(path: Path) -> bool:
    try:
        return path.stat().st_size <= _LARGEST_HEADER_BYTES and wfdb.identify(head_of(path))
    except OSError:
        return False


def _has_segments(path: Path) -> bool:
    try:
        return any(name.endswith(".hea") for name in wfdb.names_in_header(path))
    except (Declined, OSError):
        return False


def _file_set(header: Path) -> tuple[tuple[Path, ...], Declined | None]:
    """The header, the files it names and what these name; and what is missing."""
    files, open_headers, missing = [header], [header], 0
    try:
        while open_headers:
            for name in wfdb.names_in_header(open_headers.pop()):
                path = header.parent / name
                if path in files:
                    continue
                if not path.is_file():
                    missing += 1
                    continue
                files.append(path)
                if name.endswith(".hea"):
                    open_headers.append(path)
    except Declined as problem:
        return (header,), problem
    return tuple(files), Waits("waiting_for_missing_part", _missing_sentence(missing)) if missing else None


def _missing_sentence(missing: int) -> str:
    return f"the header names {missing} files that are not beside it; expected all of them. Deliver them as well."


def files_with_header(header: Path) -> list[Path]:
    """A WFDB header with its files and companions; the file alone when it is no header."""
    if header.is_symlink() or not _is_header(header):
        return [header]
    files, _ = _file_set(header)
    plain = [path for path in header.parent.iterdir() if path.is_file() and path.suffix != ".txt"]
    return [*files, *_companions(header, plain, files)]


def _companions(header: Path, plain: Sequence[Path], claimed: Collection[Path]) -> list[Path]:
    """Files of the header's name that no reader opens, annotations for instance."""
    same = (p for p in plain if p.parent == header.parent and p.stem == header.stem and p not in claimed)
    return [path for path in same if not _is_recording(path)]


def _is_recording(path: Path) -> bool:
    try:
        return reader_of(head_of(path)) is not None
    except OSError:
        return True  # not readable now, so not to be moved with another


def _orphan(path: Path) -> Declined | None:
    """A signal file without its header cannot be told from other bytes, so it waits."""
    try:
        if path.suffix.casefold() == ".dat" and reader_of(head_of(path)) is None:
            return Waits(
                "waiting_for_missing_part",
                "a signal file without its header; expected a .hea file that names it. Deliver it as well.",
            )
    except PermissionError:
        return Waits("not_readable", "the file may not be read by this program. Give it the right to read.")
    except OSError:
        return Waits("still_being_written", "the file went away while it was looked at. Run again.")
    return None


def _checked(candidate: Candidate, settings: InboxSettings, now_s: float) -> Candidate:
    """Add what waiting rules say: quiet time, done marker, and how long a part may be missing."""
    problem = candidate.problem
    markers = _markers(candidate.files[0], settings.done_marker)
    changed_s = max((_changed_s(path, now_s) for path in candidate.files), default=now_s)
    if isinstance(problem, Waits) and problem.code == "waiting_for_missing_part":
        if now_s - changed_s >= settings.part_wait_h * 3600:
            problem = Refused("part_missing", problem.sentence)
    elif problem is None and settings.done_marker and not markers:
        problem = Waits(
            "still_being_written", "no done-marker lies beside the file. It is taken when the marker comes."
        )
    elif problem is None and now_s - changed_s < settings.quiet_s:
        problem = Waits(
            "still_being_written",
            f"the file changed {max(now_s - changed_s, 0):.0f} s ago; expected {settings.quiet_s:g} s without change.",
        )
    return replace(candidate, problem=problem, companions=(*candidate.companions, *markers))


def _markers(path: Path, suffix: str) -> tuple[Path, ...]:
    """Files that say the delivery is complete: its name, or its name without suffix, and the marker's suffix."""
    named = (path.with_name(path.name + suffix), path.with_name(path.stem + suffix)) if suffix else ()
    return tuple(marker for marker in named if marker.is_file())


def _changed_s(path: Path, now_s: float) -> float:
    """Last change of content or of the directory entry: a file copied in with its old date is new here.

    A time ahead of the clock came with the file and says nothing about its arrival.
    """
    found = _stat(path)
    times = (found.st_mtime, found.st_ctime) if found else ()
    return max((time for time in times if time <= now_s), default=0.0)


# What was seen before


class Seen(NamedTuple):
    """A file as an earlier run saw it."""

    size: int
    mtime_ns: int
    sha256: str  # empty where it was not hashed


class SeenFiles:
    """Sizes, times and hashes of inbox files by name: spares hashing again. Losing it costs time, nothing else."""

    def __init__(self, path: Path) -> None:
        self._path = path
        try:
            self._files = {name: Seen(*values) for name, values in json.loads(path.read_text()).items()}
        except (OSError, ValueError, TypeError, AttributeError):
            self._files = {}
        self._now: dict[str, Seen] = {}

    def is_unchanged(self, name: str, size: int, mtime_ns: int) -> bool:
        """The file looked the same in an earlier run."""
        return self._files.get(_key(name), Seen(0, 0, ""))[:2] == (size, mtime_ns)

    def hash_of(self, name: str, size: int, mtime_ns: int) -> str:
        """Hash of an unchanged file, else empty."""
        return self._files[_key(name)].sha256 if self.is_unchanged(name, size, mtime_ns) else ""

    def note(self, name: str, size: int, mtime_ns: int, sha256: str) -> None:
        """Remember how a delivery looks now."""
        self._now[_key(name)] = Seen(size, mtime_ns, sha256)

    def save(self) -> None:
        """Write what was noted in this run; deliveries that are gone are forgotten."""
        if self._now != self._files:
            write_whole(self._path, json.dumps(self._now, sort_keys=True).encode())


def _key(name: str) -> str:
    """Names may name persons and are not kept."""
    return hashlib.sha256(name.encode("utf-8", "surrogateescape")).hexdigest()[:16]
