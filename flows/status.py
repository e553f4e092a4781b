"""How fresh the publication is, what waits and how long the disk lasts: for a person in the morning and for monitoring."""

from __future__ import annotations

import shutil
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from statistics import median
from typing import Any

import polars as pl

from flows import due, last_run, nightly
from flows import settings as programme_settings
from flows.arrivals.inbox import SeenFiles, look
from flows.last_run import Duration
from flows.settings import Settings
from warehouse.layout import found_layout
from warehouse.ledger import Ledger, LedgerError
from warehouse.published import Published
from warehouse.store import StoreError

GROWTH_DAYS = 30
SHORTEST_GROWTH_DAYS = 7  # a younger lake mostly shows its first filling, not its growth
SOON_FULL_DAYS = 30
LATE_H = 2.0  # one run may take longer than the one before it
SLOW_TIMES = 3.0  # as slow per hour of signal as the median of the last recordings
FEWEST_DURATIONS = 5  # for a median that says anything
SHORTEST_SLOW_S = 10.0


def status(folder: Path, now_utc: datetime | None = None) -> dict[str, Any]:
    """Collect plain values about a programme folder; a folder never published has `published` false.

    `now_utc` is the instant as of which ages are told. Raises SettingsError when the folder is no programme.
    """
    now_utc = now_utc or datetime.now(UTC)
    settings = programme_settings.load(folder / "programme.toml")
    found: dict[str, Any] = {
        "programme": settings.programme.name,
        "as_of_utc": f"{now_utc:%Y-%m-%d %H:%M:%S}",
        "published": (folder / "published" / "burdenline.duckdb").exists(),
        **_of_last_run(folder, now_utc),
        "expected_every_h": settings.status.expected_every_h,
        "schedule": _of_schedule(folder, now_utc),
        "inbox_files": len(_files(folder / "inbox")),
        "quarantined_files": sum(path.suffixes[-2:] != [".reason", ".txt"] for path in _files(folder / "quarantine")),
        **_of_disk(folder, now_utc),
    }
    if found["published"]:
        found |= _of_publication(Published(folder / "published"), now_utc)
    found["queue"] = {
        "new_files": _new_files(folder, settings, now_utc),
        "waiting": found.get("deliveries", {}).get("waiting", 0),
        "unanalysed_recordings": _unanalysed(folder, settings),
    }
    return found | {"trouble": list(_trouble(found))}


def _of_last_run(folder: Path, now_utc: datetime) -> dict[str, Any]:
    last = last_run.read(folder)
    if last is None:
        return {
            "last_run_utc": None,
            "last_run_age_h": None,
            "last_outcome": None,
            "last_reason": None,
            "slow_recordings": [],
        }
    return {
        "last_run_utc": f"{last.finished_utc:%Y-%m-%d %H:%M:%S}",
        "last_run_age_h": _hours(now_utc - last.finished_utc),
        "last_outcome": last.outcome,
        "last_reason": last.reason or None,
        "slow_recordings": _slow(last.analysed),
    }


def _slow(analysed: Sequence[Duration]) -> list[dict[str, Any]]:
    """Recordings that took the detector much longer per hour of signal than the others did, the slowest first."""
    if len(analysed) < FEWEST_DURATIONS:
        return []
    usual = median(each.analysed_s / each.recorded_h for each in analysed)
    rows = [
        each._asdict() | {"times_as_slow": round(each.analysed_s / each.recorded_h / usual, 1)}
        for each in analysed
        if each.analysed_s >= SHORTEST_SLOW_S
    ]
    slow = [row for row in rows if row["times_as_slow"] >= SLOW_TIMES]
    return sorted(slow, key=lambda row: row["times_as_slow"], reverse=True)


def _of_schedule(folder: Path, now_utc: datetime) -> dict[str, Any] | None:
    """What `burdenline schedule` promised, and how long ago it began to."""
    promised = due.promised(folder)
    if promised is None:
        return None
    since = datetime.fromisoformat(promised.since_utc).replace(tzinfo=UTC)
    return asdict(promised) | {"age_h": _hours(now_utc - since)}


def _new_files(folder: Path, settings: Settings, now_utc: datetime) -> int:
    """Deliveries in the inbox that no run has looked at."""
    seen = SeenFiles(folder / "lake" / "seen.json")
    found = look(folder / "inbox", settings.inbox, now_utc.timestamp())
    return sum(not seen.is_unchanged(each.name, each.size, each.mtime_ns) for each in found)


def _unanalysed(folder: Path, settings: Settings) -> int | None:
    """Landed recordings without beats; None where nothing was landed or the lake cannot be asked."""
    if found_layout(folder / "lake") is None:
        return None
    try:
        return len(nightly.unanalysed(Ledger(folder / "lake"), settings))
    except (LedgerError, StoreError):
        return None  # the next run says why; freshness and queue must be told all the same


def _of_disk(folder: Path, now_utc: datetime) -> dict[str, Any]:
    """Free space, and the days that it lasts at the lake's growth of the last month."""
    free_bytes = shutil.disk_usage(folder).free
    growth = _growth_bytes_per_day(folder / "lake", now_utc)
    return {
        "disk_free_gb": round(free_bytes / 1e9, 1),
        "lake_growth_gb_per_day": None if growth is None else round(growth / 1e9, 4),
        "days_until_full": int(free_bytes / growth) if growth else None,
    }


def _growth_bytes_per_day(lake: Path, now_utc: datetime) -> float | None:
    """Bytes of the last month's part files per day; None for a lake too young to tell."""
    stats = [path.stat() for path in _files(lake)]
    ages_days = [(now_utc.timestamp() - stat.st_mtime) / 86400 for stat in stats]
    span_days = min(GROWTH_DAYS, max(ages_days, default=0.0))
    if span_days < SHORTEST_GROWTH_DAYS:
        return None
    return sum(stat.st_size for stat, age in zip(stats, ages_days, strict=True) if age < span_days) / span_days


def _files(folder: Path) -> list[Path]:
    return [path for path in folder.rglob("*") if path.is_file()]


def _of_publication(published: Published, now_utc: datetime) -> dict[str, Any]:
    deliveries, runs = published.table("deliveries"), published.table("runs_of_flow")
    told = ("file_name", "code", "reason")
    return {
        "last_publication_utc": runs.select(pl.col("finished_utc").max().dt.strftime("%Y-%m-%d %H:%M:%S")).item(),
        "deliveries": dict(deliveries.group_by("status").len().sort("status").iter_rows()),
        "waiting": deliveries.filter(status="waiting").select(told).to_dicts(),
        "refused": deliveries.filter(status="quarantined")
        .sort("received_utc", descending=True)
        .select(told)
        .to_dicts(),
        "patients": list(_ages(published, now_utc.replace(tzinfo=None))),
    }


def _ages(published: Published, now: datetime) -> Iterator[dict[str, Any]]:
    """Until when there are data of each patient of the register, and how many hours ago that was."""
    newest = published.table("recordings").group_by("patient_code").agg(pl.col("end_utc").max())
    everybody = published.table("patients").join(newest, on="patient_code", how="left").sort("patient_code")
    for code, until in everybody.select("patient_code", "end_utc").iter_rows():
        age_h = None if until is None else _hours(now - until)
        yield {"patient_code": code, "data_until_utc": until and f"{until:%Y-%m-%d %H:%M:%S}", "data_age_h": age_h}


def _hours(span: Any) -> float:
    return round(span.total_seconds() / 3600, 1)


def _trouble(found: dict[str, Any]) -> Iterator[str]:
    """What a person should look at, one sentence each."""
    expected_h, age_h = found["expected_every_h"], found["last_run_age_h"]
    if expected_h and age_h is None:
        yield f"no run has ended here yet; one is expected every {expected_h:g} h"
    elif expected_h and age_h > expected_h:
        yield f"the last run ended {age_h:g} h ago; one is expected every {expected_h:g} h"
    elif not expected_h:
        yield from _missed(found["schedule"], age_h)
    if found["last_outcome"] == "not_published":
        yield f"the last run published nothing: {found['last_reason']}"
    if found["days_until_full"] is not None and found["days_until_full"] < SOON_FULL_DAYS:
        yield f"the disk is full in {found['days_until_full']} days at the growth of the last month"
    for row in found["slow_recordings"]:
        yield (
            f"{row['recording_id']} took {row['analysed_s']:.0f} s to analyse, "
            f"{row['times_as_slow']:g} times as long per hour as usual"
        )
    if found["quarantined_files"]:
        yield f"{found['quarantined_files']} refused files in quarantine, each with its reason beside it"


def _missed(schedule: dict[str, Any] | None, age_h: float | None) -> Iterator[str]:
    """Say that a run of the promised schedule is overdue."""
    if schedule is None:
        return
    without_run_h = min(schedule["age_h"], schedule["age_h"] if age_h is None else age_h)
    if without_run_h > schedule["longest_gap_h"] + LATE_H:
        yield (
            f"a run of the schedule {schedule['cron']} ({schedule['zone']}) was missed: none has ended for "
            f"{without_run_h:g} h; start `burdenline schedule` again, or remove lake/schedule.json where it was given up"
        )


def status_text(found: dict[str, Any]) -> str:
    """The same for people."""
    lines = [f"{found['programme']}: {_last_run_text(found)}", *(f"look at: {line}" for line in found["trouble"])]
    lines += [_disk_text(found), _queue_text(found["queue"])]
    if schedule := found["schedule"]:
        lines.append(
            f"schedule: {schedule['cron']} ({schedule['zone']}), {schedule['longest_gap_h']:.3g} h at most between runs"
        )
    if not found["published"]:
        return "\n".join([*lines, "nothing published yet"])
    counts = ", ".join(f"{count} {name}" for name, count in found["deliveries"].items())
    lines += [
        f"deliveries: {counts or 'none'}; {found['inbox_files']} files in the inbox",
        *(f"waits: {row['file_name']}: {row['reason']}" for row in found["waiting"]),
        *(f"refused: {row['file_name']}: {row['reason']}" for row in found["refused"]),
        *(_patient_text(row) for row in found["patients"]),
    ]
    return "\n".join(lines)


def _last_run_text(found: dict[str, Any]) -> str:
    if found["last_run_utc"] is None:
        return "no run yet"
    outcome = found["last_outcome"].replace("_", " ")
    return f"{outcome} at {found['last_run_utc']} UTC, {_ago(found['last_run_age_h'])}"


def _disk_text(found: dict[str, Any]) -> str:
    days, growth = found["days_until_full"], found["lake_growth_gb_per_day"]
    lasts = f"enough for {days} days at the growth of the last month" if days is not None else "no growth last month"
    return f"disk: {found['disk_free_gb']} GB free, {lasts if growth is not None else 'too early to say for how long'}"


def _queue_text(queue: dict[str, Any]) -> str:
    unanalysed = queue["unanalysed_recordings"]
    recordings = f", {unanalysed} recordings to analyse" if unanalysed else ""
    return f"queue: {queue['new_files']} new files in the inbox{recordings}"


def _patient_text(row: dict[str, Any]) -> str:
    if row["data_until_utc"] is None:
        return f"{row['patient_code']}: no data yet"
    return f"{row['patient_code']}: data until {row['data_until_utc']} UTC, {_ago(row['data_age_h'])}"


def _ago(hours: float) -> str:
    return f"{hours:g} h ago" if hours < 48 else f"{hours / 24:.0f} days ago"
