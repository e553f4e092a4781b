"""The layout of a lake on disk: its number, and the steps that bring an older lake to the present one.

`layout.json` in the lake holds the number. Opening a ledger refuses another one; `migrate` is called by a run, which
holds the folder, and keeps the older lake beside as `lake.layout-<number>`. Parts never change in place, so the copy
shares their bytes where the file system can link files.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path

from warehouse.cache import LAYOUT_FILE, noted_url, write_shared

LAYOUT = 1
"""Number of the present layout; raised, with a step in MIGRATIONS, when an older program could no longer read it."""

MIGRATIONS: dict[int, Callable[[Path], None]] = {}
"""Steps by the number of the layout that they take: each turns a lake of that layout into one of the next.

A step writes new files beside and renames them, and it may begin anew after it was killed at any place.
"""


class LayoutError(RuntimeError):
    """The lake has another layout; the message names both numbers and what to do."""


def found_layout(lake: Path) -> int | None:
    """Number of the lake's layout; None for a lake that was never written."""
    path = lake / LAYOUT_FILE
    if not path.exists():
        return None
    try:
        return int(json.loads(path.read_text(encoding="utf-8"))["layout"])
    except (ValueError, KeyError, TypeError):
        raise LayoutError(
            f'{path} does not hold a number such as {{"layout": {LAYOUT}}}; restore it from a copy'
        ) from None


def note_layout(lake: Path, number: int) -> None:
    """Write the number down."""
    write_shared(lake, LAYOUT_FILE, json.dumps({"layout": number}).encode())


def check_layout(lake: Path) -> None:
    """Raise LayoutError for a lake of another layout than the present one."""
    found = found_layout(lake)
    if found in (None, LAYOUT):
        return
    if found > LAYOUT:
        raise LayoutError(
            f"{lake}: a newer burdenline wrote layout {found}; this version reads layout {LAYOUT}. "
            "Use the newer version; nothing was changed"
        )
    raise LayoutError(
        f"{lake}: an older burdenline wrote layout {found}; this version reads layout {LAYOUT}. "
        f"`burdenline run {lake.parent}` brings it to the present layout and keeps a copy"
    )


def migrate(lake: Path) -> Path | None:
    """Bring an older lake to the present layout; returns the copy that was kept, None when there was nothing to do.

    The caller holds the folder. A killed migration is gone on with by the next one. Raises LayoutError for a newer
    lake, and for an older one from which no steps lead here.
    """
    found = found_layout(lake)
    if found is None or found >= LAYOUT:
        check_layout(lake)
        return None
    if url := noted_url(lake):
        raise LayoutError(f"{url}: layout {found}; this version reads layout {LAYOUT} and changes no lake in a store")
    missing = [number for number in range(found, LAYOUT) if number not in MIGRATIONS]
    if missing:
        raise LayoutError(
            f"{lake}: layout {found}; this version reads layout {LAYOUT} and has no step from layout {missing[0]}. "
            "Keep the folder for an older version, or begin a new one over the same inbox"
        )
    copy = _kept_copy(lake, found)
    for number in range(found, LAYOUT):
        MIGRATIONS[number](lake)
        note_layout(lake, number + 1)
    return copy


def _kept_copy(lake: Path, number: int) -> Path:
    copy = lake.with_name(f"{lake.name}.layout-{number}")
    if not copy.exists():
        unfinished = copy.with_name(f".{copy.name}")
        shutil.rmtree(unfinished, ignore_errors=True)
        shutil.copytree(lake, unfinished, copy_function=_link_or_copy, ignore=shutil.ignore_patterns("run.lock"))
        unfinished.rename(copy)
    return copy


def _link_or_copy(source: str, target: str) -> None:
    try:
        os.link(source, target)
    except OSError:
        shutil.copy2(source, target)
