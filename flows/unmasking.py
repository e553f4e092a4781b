"""Masked trials: the arm stays out of every table, page, export and frozen input until somebody unmasks with a reason."""

from __future__ import annotations

import csv
import re
from datetime import UTC, datetime
from pathlib import Path

from flows import settings as programme_settings
from flows.change.visits import MASKED
from flows.lock import folder_lock
from flows.settings import toml_value
from warehouse.audit import Change, change_loads
from warehouse.ledger import Ledger
from warehouse.parts import write_whole

ARMS = "arms.csv"


class UnmaskError(ValueError):
    """The programme cannot be unmasked; the message says why."""


def unmask(folder: Path, reason: str, actor_code: str | None) -> None:
    """Write [trial] unmask_reason and keep who did it, when and why in the history; the next run publishes the arms.

    Raises UnmaskError when the arms are already shown or no reason is given.
    """
    path = folder / "programme.toml"
    if programme_settings.load(path).trial.unmask_reason:
        raise UnmaskError(f"{path}: the arms are already unmasked; the table audit says since when and why")
    if not reason.strip():
        raise UnmaskError("--reason is empty; expected why the arms may be seen now")
    lake = folder / "lake"
    with folder_lock(folder):
        now = datetime.now(UTC).replace(tzinfo=None)
        change = Change("settings", "programme.toml trial unmask_reason", "", reason, reason)
        Ledger(lake).commit(change_loads(lake, [change], actor_code=actor_code, happened_utc=now), note="unmask")
        write_whole(path, _with_reason(path.read_text(encoding="utf-8"), reason).encode())


def _with_reason(toml: str, reason: str) -> str:
    """The settings with the one line changed, or added at the head of its section."""
    line = f"unmask_reason = {toml_value(reason)}"
    changed, count = re.subn(r"^\s*unmask_reason\s*=[^#\n]*", lambda found: f"{line}  ", toml, flags=re.M)
    if count:
        return changed
    if re.search(r"^\[trial\]", toml, flags=re.M):
        return re.sub(r"^\[trial\].*$", lambda found: f"{found[0]}\n{line}", toml, count=1, flags=re.M)
    return f"{toml.rstrip()}\n\n[trial]\n{line}\n"


def masked_copy(arms: Path, to: Path) -> None:
    """Copy arms.csv with every arm masked: the tables say that a patient has an arm, not which."""
    with arms.open(encoding="utf-8-sig", newline="") as file:
        rows = list(csv.DictReader(file))
    with to.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, ["patient_code", "arm"], lineterminator="\n", extrasaction="ignore")
        writer.writeheader()
        writer.writerows({**row, "arm": MASKED} for row in rows)
