"""Who changed what and when, for every change that can move a number: appended to the lake, never rewritten.

Deliveries and reviews are their own history. Register files and settings are not: people edit them in place. So every
value is landed as it was last seen, and a value that differs from it is a change with its old and its new value.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import NamedTuple

import polars as pl

from warehouse.ledger import Ledger
from warehouse.parts import Part, empty_frame, read_part, write_part
from warehouse.schema import LAKE

Loads = dict[tuple[str, str], Sequence[Part]]
_INPUTS = ("inputs", "programme")
_KEY = list(LAKE["inputs"].key)


class Change(NamedTuple):
    """One change: its kind (as in the dictionary), what was changed, value before and after, and why."""

    change_kind: str
    subject: str
    old_value: str | None
    new_value: str | None
    reason: str | None = None


def register_inputs(file_name: str, rows: pl.DataFrame, key: Sequence[str]) -> pl.DataFrame:
    """Rows of a register file, one per value; `key` are the columns that identify a row within the file."""
    named = rows.select(
        pl.lit(file_name).alias("input_file"),
        pl.concat_str([pl.col(name).cast(pl.String).fill_null("") for name in key], separator=" ").alias("input_row"),
        pl.all().cast(pl.String),
    )
    long = named.unpivot(index=["input_file", "input_row"], variable_name="input_column", value_name="input_value")
    return long.with_columns(pl.col("input_value").replace("", None))


def settings_inputs(file_name: str, settings: Mapping[str, Mapping[str, object]]) -> pl.DataFrame:
    """Sections of a settings file, one row per setting."""
    rows = [
        (file_name, section, name, str(value)) for section, values in settings.items() for name, value in values.items()
    ]
    return pl.DataFrame(rows, schema=list(LAKE["inputs"].columns), orient="row")


def note_inputs(
    ledger: Ledger, lake: Path, inputs: pl.DataFrame, *, actor_code: str | None, noticed_utc: datetime
) -> int:
    """Land the inputs as they are now and append a change for every value that differs; returns how many do.

    The first time there is nothing to differ from, so nothing is appended. Doing it again changes nothing.
    """
    before = ledger.parts(*_INPUTS)
    part = write_part(lake, *_INPUTS, inputs.sort(_KEY))
    if before == [part]:
        return 0
    changes = _differences(read_part(lake, before[0]), inputs) if before else []
    loads = {_INPUTS: [part]} | change_loads(lake, changes, actor_code=actor_code, happened_utc=noticed_utc)
    ledger.commit(loads, note="inputs")
    return len(changes)


def _differences(before: pl.DataFrame, after: pl.DataFrame) -> list[Change]:
    both = before.join(after, on=_KEY, how="full", coalesce=True, suffix="_after")
    moved = both.filter(pl.col("input_value").ne_missing(pl.col("input_value_after"))).sort(_KEY)
    return [
        Change("settings" if file.endswith(".toml") else "register", f"{file} {row} {column}", old, new)
        for file, row, column, old, new in moved.iter_rows()
    ]


def change_loads(lake: Path, changes: Sequence[Change], *, actor_code: str | None, happened_utc: datetime) -> Loads:
    """Land changes as one part; returns what the ledger must commit together with whatever they belong to."""
    if not changes:
        return {}
    rows = pl.DataFrame(changes, schema=dict.fromkeys(Change._fields, pl.String), orient="row")
    ids = [_change_id(change, happened_utc) for change in changes]
    complete = rows.with_columns(
        pl.Series("change_id", ids),
        pl.lit(happened_utc).cast(pl.Datetime("us")).alias("happened_utc"),
        pl.lit(actor_code, dtype=pl.String).alias("actor_code"),
    )
    return {("audit", ids[0]): [write_part(lake, "audit", ids[0], complete)]}


def _change_id(change: Change, happened_utc: datetime) -> str:
    content = "\0".join(map(str, (*change, happened_utc)))
    return f"{happened_utc:%Y%m%dT%H%M%S}-{hashlib.sha256(content.encode()).hexdigest()[:12]}"


def changes(ledger: Ledger, lake: Path) -> pl.DataFrame:
    """All appended changes in the order in which they happened."""
    frames = [read_part(lake, part) for part in ledger.parts("audit")]
    return pl.concat([empty_frame(LAKE["audit"]), *frames]).sort("happened_utc", "change_id")
