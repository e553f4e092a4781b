"""Frozen cuts of a programme folder: the warehouse keeps them, here they get their inputs."""

from __future__ import annotations

import shutil
import tempfile
from datetime import UTC, datetime
from pathlib import Path

from flows import register
from flows import settings as programme_settings
from flows.lock import folder_lock
from flows.publication import built
from flows.unmasking import ARMS, masked_copy
from warehouse import cuts
from warehouse.audit import Change, change_loads
from warehouse.layout import refuse_missing_lake
from warehouse.ledger import Ledger
from warehouse.published import Published


def freeze_standing(folder: Path, name: str, reason: str, actor_code: str | None) -> Path:
    """Freeze the standing publication with register and settings, and keep that in the history; returns its folder."""
    lake = folder / "lake"
    refuse_missing_lake(folder)
    with folder_lock(folder), tempfile.TemporaryDirectory(prefix="freeze-", dir=lake) as scratch:
        is_new = name not in cuts.cut_names(folder / "published")
        cut = cuts.freeze(folder / "published", name, _inputs(folder, Path(scratch)), reason=reason)
        if is_new:
            now = datetime.now(UTC).replace(tzinfo=None)
            change = Change("cut", name, None, Published(folder / "published").name, reason or None)
            Ledger(lake).commit(change_loads(lake, [change], actor_code=actor_code, happened_utc=now), note="freeze")
    return cut


def _inputs(folder: Path, scratch: Path) -> list[Path]:
    """Settings and register as they are, but for the arms of a masked trial."""
    settings = programme_settings.load(folder / "programme.toml")
    files = {path.name: path for path in sorted((folder / "register").glob("*.csv"))}
    if ARMS in files and not settings.trial.unmask_reason:
        masked_copy(files[ARMS], scratch / ARMS)
        files[ARMS] = scratch / ARMS
    return [folder / "programme.toml", *files.values()]


def cut_folder(folder: Path, name: str) -> Path:
    """Folder of a cut; raises CutError with the cuts that exist."""
    cuts.described(folder / "published", name)
    return folder / "published" / "cuts" / name


def check_cut(folder: Path, name: str) -> list[str]:
    """Recompute a cut from its parts and inputs; one sentence for each thing that is no longer the same."""
    published = folder / "published"
    refuse_missing_lake(folder)
    damages = [f"{damage.path}: {damage.problem}" for damage in cuts.damages(published, name)]
    if damages:
        return damages
    with tempfile.TemporaryDirectory(prefix="thaw-", dir=folder / "lake") as scratch:
        as_was = _folder_as_it_was(cut_folder(folder, name) / "inputs", Path(scratch))
        settings = programme_settings.load(as_was / "programme.toml")
        people = register.load(as_was, settings.programme.zone)
        fingerprint = cuts.described(published, name)["fingerprint"]
        with built(folder, settings, people, cuts.cut_parts(published, name), fingerprint) as build:
            build.run_models("marts")
            return [f"table {table}: recomputed rows differ" for table in cuts.moved_tables(published, name, build)]


def _folder_as_it_was(inputs: Path, scratch: Path) -> Path:
    (scratch / "register").mkdir()
    shutil.copyfile(inputs / "programme.toml", scratch / "programme.toml")
    for path in inputs.glob("*.csv"):
        shutil.copyfile(path, scratch / "register" / path.name)
    return scratch
