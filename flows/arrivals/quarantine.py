"""Refused deliveries out of the inbox and back: moved whole with the reason beside, retried after a fix.

Files are moved only after the ledger says why, so that a run that is killed in between is finished by the next one.
"""

from __future__ import annotations

import errno
import shutil
import zipfile
from collections.abc import Collection, Sequence
from pathlib import Path, PurePosixPath

from flows.arrivals.deliveries import Deliveries
from flows.arrivals.inbox import Candidate, files_with_header
from flows.arrivals.privacy import shown_name
from flows.lock import folder_lock
from warehouse.ledger import Ledger
from warehouse.parts import write_whole

REASON_SUFFIX = ".reason.txt"
_LOCK_WAIT_S = 10.0


def quarantine(
    folder: Path, candidate: Candidate, delivery_id: str, code: str, reason: str, codes: Collection[str]
) -> str:
    """Move a refused delivery out of the inbox with its reason beside it; returns its name there.

    A file set whose names might name a person is moved as one zip archive, so that its members keep their names.
    """
    target = folder / "quarantine"
    target.mkdir(exist_ok=True)
    files = [path for path in (*candidate.files, *candidate.companions) if path.is_symlink() or path.exists()]
    shown = shown_name(candidate.name, delivery_id, codes)
    is_masked = shown != candidate.name
    name = _free_name(target, PurePosixPath(shown).name, delivery_id)
    if is_masked and len(files) > 1:
        name = _free_name(target, f"delivery-{delivery_id[:8]}.zip", delivery_id)
    write_whole(target / (name + REASON_SUFFIX), _reason_text(name, delivery_id, code, reason).encode())
    if name.endswith(".zip") and len(files) > 1:
        _zip_away(files, target / name)
    else:
        for path in files:
            _move(path, target / (name if path == candidate.files[0] else path.name))
    _remove_empty_folders(folder / "inbox", candidate.files[0].parent)
    return name


def _move(path: Path, target: Path) -> None:
    """Rename, or copy and delete where the folders lie on different file systems."""
    try:
        path.replace(target)
    except OSError as problem:
        if problem.errno != errno.EXDEV:
            raise
        beside = target.with_name(f".writing-{target.name}")
        shutil.copy2(path, beside, follow_symlinks=False)
        beside.replace(target)
        path.unlink()


def remove(folder: Path, candidate: Candidate) -> None:
    """Delete the files of a delivery that is in the lake."""
    for path in (*candidate.files, *candidate.companions):
        path.unlink(missing_ok=True)
    _remove_empty_folders(folder / "inbox", candidate.files[0].parent)


def _free_name(target: Path, name: str, delivery_id: str) -> str:
    """The name, unless another delivery has it in quarantine."""
    reason = target / (name + REASON_SUFFIX)
    if reason.exists() and f"delivery: {delivery_id}" not in reason.read_text(encoding="utf-8"):
        path = PurePosixPath(name)
        return f"{path.stem}-{delivery_id[:8]}{path.suffix}"
    return name


def _reason_text(name: str, delivery_id: str, code: str, reason: str) -> str:
    return (
        f"{code}\n{reason}\n\ndelivery: {delivery_id}\n"
        f"After a fix of settings or register: burdenline retry DIR {name}\n"
    )


def _zip_away(files: Sequence[Path], target: Path) -> None:
    beside = target.with_name(f".writing-{target.name}")
    with zipfile.ZipFile(beside, "w", zipfile.ZIP_STORED) as archive:
        for path in files:
            archive.write(path, path.name.encode("utf-8", "replace").decode())
    beside.replace(target)
    for path in files:
        path.unlink()


def _remove_empty_folders(inbox: Path, folder: Path) -> None:
    while folder != inbox and inbox in folder.parents and not any(folder.iterdir()):
        folder.rmdir()
        folder = folder.parent


def retry(folder: Path, name: str) -> None:
    """Put a quarantined delivery back into the inbox and let the ledger forget it, so that the next run tries again.

    Raises FileNotFoundError where the quarantine has no such file, FileExistsError where the inbox has one of its name,
    FolderBusy while a run holds the folder.
    """
    source = folder / "quarantine" / name
    if PurePosixPath(name).name != name or name.endswith(REASON_SUFFIX) or not (source.is_symlink() or source.exists()):
        raise FileNotFoundError(2, "is not a file of the quarantine folder; expected one of its names", str(source))
    files = files_with_header(source)
    for path in files:
        if (folder / "inbox" / path.name).exists():
            raise FileExistsError(17, "lies in the inbox already; let a run take it first", str(path.name))
    reason = source.with_name(name + REASON_SUFFIX)
    with folder_lock(folder, _LOCK_WAIT_S):
        deliveries = Deliveries(folder / "lake", ledger := Ledger(folder / "lake"))
        for delivery_id in _deliveries_in(reason):
            if delivery_id in deliveries.rows:
                deliveries.drop(delivery_id)
        if loads := deliveries.loads():
            ledger.commit(loads, note="retry")
        for path in files:
            _move(path, folder / "inbox" / path.name)
        reason.unlink(missing_ok=True)


def _deliveries_in(reason: Path) -> list[str]:
    if not reason.exists():
        return []
    lines = reason.read_text(encoding="utf-8").splitlines()
    return [line.removeprefix("delivery: ") for line in lines if line.startswith("delivery: ")]
