"""How the last run on a programme folder ended, also when it found nothing to do or failed.

The published runs_of_flow holds only runs that changed something; monitoring must know of the others as well.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import NamedTuple

from flows.sentences import is_sentence, sentence
from warehouse.parts import write_whole


class LastRun(NamedTuple):
    """End of a run: instant (UTC), outcome, and why it did not publish."""

    finished_utc: datetime
    outcome: str
    reason: str = ""


@contextmanager
def noted(folder: Path) -> Iterator[list[str]]:
    """Note how the body ends; the body appends its outcome. An error that is a bug is noted by its type only.

    A process that is killed leaves no note; the last run is then the one before it.
    """
    outcomes: list[str] = []
    try:
        yield outcomes
    except Exception as problem:
        with suppress(OSError):  # a full disk must not hide what went wrong
            _write(folder, "not_published", _reason(problem))
        raise
    _write(folder, outcomes[-1], "")


def read(folder: Path) -> LastRun | None:
    """The last run that ended in this folder, None before the first one and where the note cannot be read."""
    try:
        found = json.loads(_path(folder).read_text(encoding="utf-8"))
        return LastRun(datetime.fromisoformat(found["finished_utc"]), found["outcome"], found["reason"])
    except (FileNotFoundError, ValueError, KeyError, TypeError):
        return None


def _reason(problem: Exception) -> str:
    """Why in words that monitoring may keep: an error of the system without its path, which may hold a person's name."""
    if isinstance(problem, OSError):
        return problem.strerror or type(problem).__name__
    return sentence(problem) if is_sentence(problem) else type(problem).__name__


def _write(folder: Path, outcome: str, reason: str) -> None:
    note = LastRun(datetime.now(UTC), outcome, reason)._asdict()
    write_whole(_path(folder), json.dumps(note, default=datetime.isoformat).encode())


def _path(folder: Path) -> Path:
    return folder / "lake" / "last_run.json"
