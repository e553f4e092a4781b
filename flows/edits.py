"""Edits of register and settings become history: each value that differs from the run before, old and new."""

from __future__ import annotations

from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path

import polars as pl

from flows.register import Register
from flows.settings import Settings
from warehouse.audit import note_inputs, register_inputs, settings_inputs
from warehouse.ledger import Ledger

_KEYS = {
    "patients": ["patient_code"],
    "wears": ["device_serial", "from_utc"],
    "therapies": ["therapy_id"],
}


def note_edits(lake: Path, settings: Settings, people: Register, ledger: Ledger, actor_code: str | None) -> int:
    """Append what changed in register and settings since the run before; returns how many values did."""
    register = [register_inputs(f"{name}.csv", getattr(people, name), key) for name, key in _KEYS.items()]
    inputs = pl.concat([*register, settings_inputs("programme.toml", asdict(settings))])
    now = datetime.now(UTC).replace(tzinfo=None)
    return note_inputs(ledger, lake, inputs, actor_code=actor_code, noticed_utc=now)
