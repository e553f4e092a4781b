"""A lake's folder as a cache of the store in which the lake lies.

Parts are put into the store before their commit, got when they are first needed, and checked against their hash; the ledger
lies at the URL alone. `lake/store.json` says of which store the folder is a cache; a lake without that file lies in its
folder alone, and nothing here is asked for it.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path

from warehouse import schema
from warehouse.parts import write_whole
from warehouse.store import Store, StoreError

LAYOUT_FILE, PROMOTION_FILE = "layout.json", "promoted.json"
SHARED_FILES = (LAYOUT_FILE, PROMOTION_FILE)
"""Files that change in place and count for everybody who works on the lake; all other files are immutable or a cache."""

_NOTE = "store.json"


def store_of(lake: Path) -> Store | None:
    """The store of which the lake's folder is a cache; None for a lake that lies in its folder alone."""
    url = noted_url(lake)
    return Store(url) if url else None


def noted_url(lake: Path) -> str:
    """URL of the lake's store, empty for a lake that lies in its folder alone."""
    note = _content_of(lake / _NOTE)
    return json.loads(note)["url"] if note else ""


def settle(lake: Path, url: str) -> None:
    """Make the lake's folder a cache of the store at `url`, which takes over what was landed so far.

    Raises StoreError where the folder is a cache of another store or where both hold something already.
    """
    noted = noted_url(lake)
    if noted == url:
        return
    if noted:
        raise StoreError(
            f"{lake} is a cache of {noted}, but [lake] store = {url!r}; set it back, "
            "or move the lake folder away and run over the inbox anew"
        )
    store = Store(url)
    there = store.read(LAYOUT_FILE) is not None
    if (lake / LAYOUT_FILE).is_file():
        if there:
            raise StoreError(
                f"{lake} holds a lake of its own and {url} another one; empty [lake] store, "
                "or move the lake folder away to go on with the one in the store"
            )
        _take_over(lake, store)
    write_whole(lake / _NOTE, json.dumps({"url": url}).encode())


def _take_over(lake: Path, store: Store) -> None:
    """Put all that was landed into the store; the layout comes last, so that a half copy is no lake."""
    folders = (*schema.LAKE, "ledger")
    files = [path for name in folders for path in (lake / name).rglob("*") if path.is_file()]
    store.push(lake, [path.relative_to(lake).as_posix() for path in files])
    for name in reversed(SHARED_FILES):
        if content := _content_of(lake / name):
            store.write(name, content)


def write_shared(lake: Path, name: str, content: bytes) -> None:
    """Write one of the SHARED_FILES of a lake, in its store first where it has one."""
    if store := store_of(lake):
        store.write(name, content)
    write_whole(lake / name, content)


def complete(lake: Path, sha256_of: Mapping[str, str]) -> list[str]:
    """Get parts that a cache lacks from its store; returns those that the store does not hold as they were landed."""
    store = store_of(lake)
    return store.fetch(lake, sha256_of) if store else []


def shrink(lake: Path, most_bytes: float) -> list[str]:
    """Remove samples from the cache, those landed or got longest ago first, until the folder holds at most `most_bytes`.

    Only what the store holds goes, and only samples, which are got again one by one when they are read. Returns the paths
    that went; nothing goes where there is no store.
    """
    store = store_of(lake)
    files = [(path.stat(), path) for path in lake.rglob("*") if path.is_file()] if store else []
    too_much = sum(stat.st_size for stat, _ in files) - most_bytes
    if store is None or too_much <= 0:
        return []
    there = {found.path: found.bytes for found in store.objects("signal")}
    went = []
    for stat, path in sorted(files, key=lambda file: (file[0].st_mtime_ns, file[1])):
        name = path.relative_to(lake).as_posix()
        if too_much > 0 and there.get(name) == stat.st_size:
            path.unlink()
            too_much -= stat.st_size
            went.append(name)
    return went


def refresh(lake: Path, store: Store) -> None:
    """Bring the shared files of the cache up to date; those that the store does not hold are left as they are."""
    for name in SHARED_FILES:
        content = store.read(name)
        if content is not None and content != _content_of(lake / name):
            write_whole(lake / name, content)


def _content_of(path: Path) -> bytes | None:
    try:
        return path.read_bytes()
    except FileNotFoundError:
        return None
