"""Which programme folder works on a store: the run that the store names last must be one of this folder.

A copy of the folder, a second host with the same settings and a restored backup all lack that run, wherever they lie and
whatever they are called; a folder that moved, or that another host of the same share works on, has it. Two folders that
begin within the same second both go on, lose nothing (`warehouse.ledger`), and one of them is told the next time.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from warehouse.cache import noted_url, settle, store_of
from warehouse.parts import write_whole
from warehouse.store import Store, StoreError

OWNER_FILE = "owner.json"
"""In the store the last run and its folder; in the lake's folder the runs of which one must be that."""


def claim(lake: Path, url: str, run_id: str, folder: str, *, take_over: bool = False) -> None:
    """Make the lake's folder a cache of the store at `url` for a run, and name the run there; nothing for an empty `url`.

    `folder` is what another folder is told. With `take_over` a store of another folder is taken, which is refused from
    then on. Raises StoreError, and has then changed nothing.
    """
    if not url or noted_url(lake) not in ("", url):
        settle(lake, url)
        return
    store = Store(url)
    before = _owner(store)
    if not take_over:
        _refuse_other(lake, store, before)
    settle(lake, url)
    # Both, for a run that is killed between here and the store.
    write_whole(lake / OWNER_FILE, json.dumps({"runs": [before.get("run"), run_id]}).encode())
    store.write(OWNER_FILE, json.dumps({"run": run_id, "folder": folder}).encode())


def refuse_other(lake: Path) -> None:
    """Raise StoreError where the lake's store belongs to another folder; asks nothing where there is no store."""
    if store := store_of(lake):
        _refuse_other(lake, store, _owner(store))


def _refuse_other(lake: Path, store: Store, owner: dict[str, Any]) -> None:
    if owner and owner["run"] not in _own_runs(lake):
        raise StoreError(
            f"{store.url} belongs to {owner['folder']}, whose run {owner['run']} was the last one on it; give this folder "
            "a store of its own, or, where that folder is gone or this one has lost its lake/, go on here with "
            "`burdenline run DIR --take-over`. Nothing was changed"
        )


def _owner(store: Store) -> dict[str, Any]:
    content = store.read(OWNER_FILE)
    return json.loads(content) if content else {}


def _own_runs(lake: Path) -> list[str]:
    try:
        return json.loads((lake / OWNER_FILE).read_text(encoding="utf-8"))["runs"]
    except (FileNotFoundError, ValueError, KeyError, TypeError):
        return []
