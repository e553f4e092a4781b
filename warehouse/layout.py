"""The layout of a programme folder on disk: its number, and the steps that bring an older folder to the present one.

`lake/layout.json` holds the number, which counts for register and settings too, and the version that wrote it. A newer
folder is refused; an older one is brought up by `migrate`, called by a run, which keeps lake, register and settings as
they were in `layout-<number>/`. Parts never change in place, so that copy shares their bytes where files can be linked.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path

from warehouse.cache import LAYOUT_FILE, noted_url, write_shared

LAYOUT = 1
"""Number of the present layout; raised, with a step in MIGRATIONS, when an older program could no longer read it."""

MIGRATIONS: dict[int, Callable[[Path], None]] = {}
"""Steps by the number of the layout that they take: each turns a programme folder of that layout into one of the next.

A step writes new files beside and renames them, and it may begin anew after it was killed at any place.
"""

_KEPT = ("lake", "register", "programme.toml")


class LayoutError(RuntimeError):
    """The lake has another layout; the message names both numbers and what to do."""


def found_layout(lake: Path) -> int | None:
    """Number of the layout; None for a folder whose lake was never written."""
    return _found(lake)[0]


def _found(lake: Path) -> tuple[int | None, str]:
    """Number of the layout, and the version that wrote it, empty where it is not said."""
    path = lake / LAYOUT_FILE
    if not path.exists():
        return None, ""
    try:
        said = json.loads(path.read_text(encoding="utf-8"))
        return int(said["layout"]), str(said.get("burdenline", ""))
    except (ValueError, KeyError, TypeError, AttributeError):
        raise LayoutError(
            f'{path} does not hold a number such as {{"layout": {LAYOUT}}}; restore it from a copy'
        ) from None


def note_layout(lake: Path, number: int) -> None:
    """Write the number down, with our version."""
    write_shared(lake, LAYOUT_FILE, json.dumps({"layout": number, "burdenline": version("burdenline")}).encode())


def refuse_newer(lake: Path) -> None:
    """Raise LayoutError for a folder that a newer version has written."""
    found, wrote = _found(lake)
    if found is not None and found > LAYOUT:
        raise LayoutError(
            f"{lake.parent}: burdenline {wrote or 'of a newer version'} wrote layout {found}; this is burdenline "
            f"{version('burdenline')}, which reads layout {LAYOUT}. Use the newer version; nothing was changed"
        )


def refuse_missing_lake(folder: Path) -> None:
    """Raise LayoutError where a publication stands whose lake is gone: to begin a new one would look like loss."""
    lake, standing = folder / "lake", folder / "published" / "current"
    if standing.exists() and found_layout(lake) is None and not noted_url(lake):
        raise LayoutError(
            f"{lake} is gone, but {folder / 'published'} was made from it; put it back from where it was moved, "
            f"or remove {standing} to begin a new lake from the inbox"
        )


def check_layout(lake: Path) -> None:
    """Raise LayoutError for a folder of another layout than the present one."""
    refuse_newer(lake)
    found, wrote = _found(lake)
    if found is not None and found < LAYOUT:
        raise LayoutError(
            f"{lake.parent}: burdenline {wrote or 'of an older version'} wrote layout {found}; this is burdenline "
            f"{version('burdenline')}, which reads layout {LAYOUT}. `burdenline run {lake.parent}` brings the folder to "
            "the present layout and keeps a copy"
        )


def is_older(folder: Path) -> bool:
    """Tell whether a programme folder has to be brought up before it is read."""
    found = found_layout(folder / "lake")
    return found is not None and found < LAYOUT


def migrate(folder: Path) -> Path | None:
    """Bring an older programme folder to the present layout; returns the copy kept, None when nothing was to be done.

    The caller holds the folder. A killed migration is gone on with by the next one. Raises LayoutError for a newer
    folder, and for an older one from which no steps lead here.
    """
    lake = folder / "lake"
    found = found_layout(lake)
    if found is None or found >= LAYOUT:
        check_layout(lake)
        return None
    if url := noted_url(lake):
        raise LayoutError(f"{url}: layout {found}; this version reads layout {LAYOUT} and changes no lake in a store")
    missing = [number for number in range(found, LAYOUT) if number not in MIGRATIONS]
    if missing:
        raise LayoutError(
            f"{folder}: layout {found}; this version reads layout {LAYOUT} and has no step from layout {missing[0]}. "
            "Keep the folder for an older version, or begin a new one over the same inbox"
        )
    copy = _kept_copy(folder, found)
    for number in range(found, LAYOUT):
        MIGRATIONS[number](folder)
        note_layout(lake, number + 1)
    return copy


def _kept_copy(folder: Path, number: int) -> Path:
    copy = folder / f"layout-{number}"
    if not copy.exists():
        unfinished = folder / f".{copy.name}"
        shutil.rmtree(unfinished, ignore_errors=True)
        unfinished.mkdir()
        for name in _KEPT:
            if (folder / name).is_dir():
                ignore = shutil.ignore_patterns("*.lock", "build-*")
                # Only parts are never changed in place: whatever a person edits must not share its bytes.
                copied = _link_or_copy if name == "lake" else shutil.copy2
                shutil.copytree(folder / name, unfinished / name, copy_function=copied, ignore=ignore)
            elif (folder / name).exists():
                shutil.copy2(folder / name, unfinished / name)
        unfinished.rename(copy)
    return copy


def _link_or_copy(source: str, target: str) -> None:
    try:
        os.link(source, target)
    except OSError:
        shutil.copy2(source, target)
