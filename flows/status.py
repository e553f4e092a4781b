"""How fresh the publication is and what waits, for a person in the morning and for a monitoring program."""

from __future__ import annotations

import shutil
from pathlib import Path
from typing import Any

import polars as pl

from flows import settings as programme_settings
from warehouse.published import Published


def status(folder: Path) -> dict[str, Any]:
    """Collect plain values about a programme folder; a folder never published has `published` false.

    Raises SettingsError when the folder is no programme.
    """
    programme = programme_settings.load(folder / "programme.toml").programme
    found: dict[str, Any] = {
        "programme": programme.name,
        "published": (folder / "published" / "burdenline.duckdb").exists(),
        "inbox_files": sum(path.is_file() for path in (folder / "inbox").rglob("*")),
        "quarantined_files": sum(path.suffixes[-2:] != [".reason", ".txt"] for path in _files(folder / "quarantine")),
        "disk_free_gb": round(shutil.disk_usage(folder).free / 1e9, 1),
    }
    if found["published"]:
        found |= _of_publication(Published(folder / "published"))
    return found


def _files(folder: Path) -> list[Path]:
    return [path for path in folder.rglob("*") if path.is_file()]


def _of_publication(published: Published) -> dict[str, Any]:
    deliveries, runs, recordings = (published.table(name) for name in ("deliveries", "runs_of_flow", "recordings"))
    last = runs.sort("finished_utc").tail(1).to_dicts()
    newest = recordings.group_by("patient_code").agg(pl.col("end_utc").max()).sort("patient_code")
    return {
        "last_run_utc": str(last[0]["finished_utc"]) if last else None,
        "last_outcome": last[0]["outcome"] if last else None,
        "deliveries": dict(deliveries.group_by("status").len().sort("status").iter_rows()),
        "waiting": deliveries.filter(status="waiting").select("file_name", "code", "reason").to_dicts(),
        "patients": [{"patient_code": code, "data_until_utc": str(until)} for code, until in newest.iter_rows()],
    }


def status_text(found: dict[str, Any]) -> str:
    """The same for people."""
    if not found["published"]:
        return f"{found['programme']}: nothing published yet; {found['inbox_files']} files in the inbox"
    counts = ", ".join(f"{count} {name}" for name, count in found["deliveries"].items())
    lines = [
        f"{found['programme']}: {str(found['last_outcome']).replace('_', ' ')} at {found['last_run_utc']} UTC",
        f"deliveries: {counts}; {found['quarantined_files']} files in quarantine; {found['disk_free_gb']} GB free",
        *(f"waits: {row['file_name']}: {row['reason']}" for row in found["waiting"]),
        *(f"{row['patient_code']}: data until {row['data_until_utc']} UTC" for row in found["patients"]),
    ]
    return "\n".join(lines)
