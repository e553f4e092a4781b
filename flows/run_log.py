"""The log of a programme: one JSON line per step of a run, with delivery, recording and flow run, for those who operate it.

    {"utc": "2026-12-01T03:00:07.125Z", "event": "delivery decided", "run": "...", "delivery": "3f0c...", "status": "accepted"}

Only the fields named here are written, and none of them can hold a word about a patient: identifiers that are hashes or
device serials with a day, codes, counts and seconds. Messages of errors name files and codes, so only their type is kept.
"""

from __future__ import annotations

import json
import logging
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from logging.handlers import RotatingFileHandler
from pathlib import Path
from typing import Any

FIELDS = (
    "delivery", "recording", "status", "code", "outcome", "error", "seconds", "recorded_h",
)  # fmt: skip
LARGEST_BYTES = 5_000_000
KEPT_FILES = 10

_log = logging.getLogger("burdenline")
_log.propagate = False  # a run's own words go to the terminal, these lines to the file alone
_log.setLevel(logging.INFO)


def log_file(folder: Path) -> Path:
    """Where the lines of a programme folder are written; older ones lie beside it with a number."""
    return folder / "logs" / "runs.jsonl"


@contextmanager
def opened(folder: Path, run: str) -> Iterator[None]:
    """Write what is told while the body runs, under the name of this run, and how the body ends when it fails."""
    path = log_file(folder)
    path.parent.mkdir(exist_ok=True)
    handler = RotatingFileHandler(path, maxBytes=LARGEST_BYTES, backupCount=KEPT_FILES, encoding="utf-8", delay=True)
    handler.setFormatter(_JsonLine(run))
    _log.addHandler(handler)
    try:
        tell("run began")
        yield
    except BaseException as problem:
        tell("run failed", error=type(problem).__name__)
        raise
    finally:
        _log.removeHandler(handler)
        handler.close()


def tell(event: str, **fields: Any) -> None:
    """Write one line where a log is open; raises ValueError for a field that is not in FIELDS."""
    if unknown := fields.keys() - set(FIELDS):
        raise ValueError(f"no field {', '.join(sorted(unknown))} in the log; known: {', '.join(FIELDS)}")
    _log.info(event, extra={"fields": fields})


class _JsonLine(logging.Formatter):
    def __init__(self, run: str) -> None:
        super().__init__()
        self._run = run

    def format(self, record: logging.LogRecord) -> str:
        """The line of one record."""
        utc = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
        fields = {name: value for name, value in getattr(record, "fields", {}).items() if value is not None}
        return json.dumps({"utc": utc, "event": record.getMessage(), "run": self._run, **fields})
