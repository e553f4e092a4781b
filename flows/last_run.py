"""How the last run on a programme folder ended, also when it found nothing to do or failed.

The published runs_of_flow holds only runs that changed something; monitoring must know of the others as well.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

from flows.sentences import is_sentence, sentence
from warehouse.parts import write_whole

if TYPE_CHECKING:
    from flows.nightly import Analysed

KEPT_DURATIONS = 500


class Duration(NamedTuple):
    """How long the detector took for a recording. Measured, so it stays out of every published table."""

    recording_id: str
    recorded_h: float
    analysed_s: float


class LastRun(NamedTuple):
    """End of a run: instant (UTC), outcome, why it did not publish, and what recordings took, the latest first."""

    finished_utc: datetime
    outcome: str
    reason: str = ""
    analysed: tuple[Duration, ...] = ()


@dataclass
class RunEnd:
    """What the run itself tells about its end: recordings as they are analysed, the outcome last."""

    outcome: str = ""
    analysed: list[Analysed] = field(default_factory=list)


@contextmanager
def noted(folder: Path) -> Iterator[RunEnd]:
    """Note how the body ends; the body fills the value in. An error that is a bug is noted by its type only.

    A process that is killed leaves no note; the last run is then the one before it.
    """
    end = RunEnd()
    try:
        yield end
    except Exception as problem:
        with suppress(OSError):  # a full disk must not hide what went wrong
            _write(folder, end, "not_published", _reason(problem))
        raise
    _write(folder, end, end.outcome, "")


def read(folder: Path) -> LastRun | None:
    """The last run that ended in this folder, None before the first one and where the note cannot be read."""
    try:
        found = json.loads(_path(folder).read_text(encoding="utf-8"))
        analysed = tuple(Duration(*took) for took in found.get("analysed", ()))
        return LastRun(datetime.fromisoformat(found["finished_utc"]), found["outcome"], found["reason"], analysed)
    except (FileNotFoundError, ValueError, KeyError, TypeError):
        return None


def _reason(problem: Exception) -> str:
    """Why in words that monitoring may keep: an error of the system without its path, which may hold a person's name."""
    if isinstance(problem, OSError):
        return problem.strerror or type(problem).__name__
    return sentence(problem) if is_sentence(problem) else type(problem).__name__


def _write(folder: Path, end: RunEnd, outcome: str, reason: str) -> None:
    note = LastRun(datetime.now(UTC), outcome, reason, _durations(folder, end))._asdict()
    write_whole(_path(folder), json.dumps(note, default=datetime.isoformat).encode())


def _durations(folder: Path, end: RunEnd) -> tuple[Duration, ...]:
    """The latest of each recording, of this run and of those before it."""
    before = read(folder)
    latest: dict[str, Duration] = {}
    for each in (*reversed(end.analysed), *(before.analysed if before else ())):
        latest.setdefault(each.recording_id, Duration(*each[:3]))
    return tuple(latest.values())[:KEPT_DURATIONS]


def _path(folder: Path) -> Path:
    return folder / "lake" / "last_run.json"
