"""When runs of a folder are due: what `burdenline schedule` promised, so that `burdenline status` can tell that one was missed.

The promise outlives the process that made it, for a schedule that did not come back after its host did is what must be told.
Whoever gives a schedule up removes `lake/schedule.json`.
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

from warehouse.parts import write_whole


@dataclass(frozen=True)
class Due:
    """A schedule: its cron fields in a zone, the longest time between two of its runs, and since when it holds."""

    cron: str
    zone: str
    longest_gap_h: float
    since_utc: str


def promise(folder: Path, cron: str, zone: str, longest_gap_h: float) -> None:
    """Note from when on runs are due."""
    due = Due(cron, zone, longest_gap_h, f"{datetime.now(UTC):%Y-%m-%d %H:%M:%S}")
    write_whole(_path(folder), json.dumps(asdict(due)).encode())


def promised(folder: Path) -> Due | None:
    """What was promised, None where nothing is."""
    try:
        return Due(**json.loads(_path(folder).read_text(encoding="utf-8")))
    except (FileNotFoundError, ValueError, TypeError):
        return None


def _path(folder: Path) -> Path:
    return folder / "lake" / "schedule.json"
