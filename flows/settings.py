"""programme.toml: what a programme may set, with defaults, limits and meanings.

Settings that change results are part of the analysis fingerprint; settings that change only execution are not.
The template that `burdenline init` writes is made from the same dataclasses, so no setting exists in two places.
"""

from __future__ import annotations

import difflib
import json
import re
import tomllib
from dataclasses import Field, asdict, dataclass, field, fields
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

_STORE_URL = re.compile(r"s3://[a-z0-9][a-z0-9.-]{1,61}[a-z0-9](/[A-Za-z0-9._-]+)*")


class SettingsError(ValueError):
    """programme.toml cannot be used; the message names the file, the key, what was found and what is expected."""


def _setting(default: Any, meaning: str, low: float | None = None, high: float | None = None) -> Any:
    return field(default=default, metadata={"meaning": meaning, "low": low, "high": high})


@dataclass(frozen=True)
class ProgrammeSettings:
    """Who runs the programme and where."""

    name: str = _setting("unnamed programme", "name on the pages")
    zone: str = _setting("UTC", "IANA time zone of patients whose register row has none")


@dataclass(frozen=True)
class DetectorSettings:
    """Changes results: part of the fingerprint."""

    bigeminy_min_cycles: int = _setting(3, "ectopic-normal pairs in a row that make bigeminy", 2, 20)
    trigeminy_min_cycles: int = _setting(3, "ectopic-normal-normal triples in a row that make trigeminy", 2, 20)
    pause_ms: int = _setting(2000, "RR interval that counts as a pause, ms", 1000, 10000)
    full_pause_tolerance_pct: float = _setting(
        8.0, "how far a full compensatory pause may miss 2 sinus cycles, %", 1, 20
    )


@dataclass(frozen=True)
class WearSettings:
    """What counts as a valid day and as enough of them. Common practice, no standard exists."""

    min_analysable_h_per_day: float = _setting(10.0, "analysable hours that make a valid day", 0.05, 23)
    min_days_per_period: int = _setting(2, "valid days that a period needs for a verdict", 1, 60)


@dataclass(frozen=True)
class ChangeSettings:
    """How baseline, settling and after periods are cut and judged."""

    baseline_days: int = _setting(28, "days before the therapy event that may serve as baseline", 1, 365)
    after_days: int = _setting(90, "days after settling that may serve as the after period", 1, 730)
    settling_days_medication: int = _setting(7, "days after a medication event that are left out", 0, 365)
    settling_days_ablation: int = _setting(14, "days after an ablation that are left out", 0, 365)
    settling_days_other: int = _setting(7, "days after any other event that are left out", 0, 365)
    success_limit_pct: float = _setting(80.0, "reduction that the programme calls success, %", 1, 99.9)
    detector_error_share: float = _setting(
        1.0, "share of the detector's measured error within a patient in the chance limits, 0 to ignore", 0, 10
    )
    gap_drift_share: float = _setting(
        1.0, "share of the published drift over weeks (Circulation 1988;78:286) in the chance limits, 0 for none", 0, 1
    )


@dataclass(frozen=True)
class TrialSettings:
    """Wear rules of a trial's visits, and whether its arms are shown. Common practice, no standard exists."""

    min_analysable_h_per_day: float = _setting(18.0, "analysable hours that make a day of a visit count", 0.05, 23)
    min_days_per_visit: int = _setting(3, "such days that a visit needs", 1, 60)
    unmask_reason: str = _setting("", "why the arms of register/arms.csv may be published; empty keeps them masked")


@dataclass(frozen=True)
class AttentionSettings:
    """Reference lines of the attention list; never a verdict."""

    v_burden_pct: float = _setting(10.0, "ventricular burden of a valid day, %", 0.1, 100)
    run_beats: int = _setting(3, "beats of a ventricular run", 3, 100)
    fast_run_bpm: float = _setting(120.0, "rate of a ventricular run, 1/min", 60, 300)
    pause_ms: int = _setting(3000, "pause, ms", 1000, 10000)
    sustained_run_s: float = _setting(30.0, "length of a ventricular run that counts as sustained, s", 5, 600)
    short_coupling_ms: float = _setting(300.0, "mean coupling interval of a ventricular family, ms", 100, 600)
    patch_end_days: int = _setting(2, "days before the registered end of a wear that is still open", 0, 30)


@dataclass(frozen=True)
class InboxSettings:
    """When a file in the inbox may be touched, and how large an archive may grow."""

    quiet_s: float = _setting(0.0, "seconds that a file must have stayed unchanged", 0, 86400)
    done_marker: str = _setting("", "suffix of a marker file that says a delivery is complete, empty for none")
    accepted_files: str = _setting("leave", "what happens to accepted files: leave or remove")
    part_wait_h: float = _setting(24.0, "hours that a file set waits for a missing part, then it is refused", 0, 8760)
    largest_unpacked_mb: int = _setting(4096, "size that an archive may unpack to, MB", 1, 1_000_000)
    largest_unpack_ratio: int = _setting(200, "how many times larger than itself an archive may unpack", 2, 100_000)


@dataclass(frozen=True)
class SiteSettings:
    """What the site knows about its files that the files do not say; empty or 0 means: only the file counts."""

    clock_zone: str = _setting("", "IANA time zone of the device clocks, UTC for instance; empty: the patient's zone")
    ecg_channel: str = _setting("", "label of the ECG channel where several could be it, or #1, #2 by its place")
    mv_per_count: float = _setting(0.0, "millivolts per count where files have no scale", 0, 1)
    fs_hz: float = _setting(0.0, "sampling rate of text and Parquet files without a time column, Hz", 0, 10_000)
    ecg_column: str = _setting("", "ECG column of text and Parquet files: its name, or its number from 1")
    time_column: str = _setting("", "time column of text and Parquet files: its name, or its number from 1")
    time_format: str = _setting("", "strptime format of the time column; empty: ISO 8601")
    separator: str = _setting("", "separator of text files: comma, semicolon, tab or blank; empty: by the file")
    decimal: str = _setting("", "decimal sign of text files: point or comma; empty: by the file")
    unit: str = _setting("", "unit of the ECG column: V, mV, uV, nV or counts (with mv_per_count)")


@dataclass(frozen=True)
class WorkersSettings:
    """Execution only: never changes a result."""

    processes: int = _setting(1, "recordings analysed at the same time on this host", 1, 256)
    scheduler: str = _setting(
        "", "address of a Dask scheduler, tcp://host:8786, to analyse on its workers; empty: here"
    )


@dataclass(frozen=True)
class LakeSettings:
    """Where landed parts are kept. Execution only: never changes a result."""

    store: str = _setting(
        "", "S3-compatible place of the lake, s3://bucket/prefix; lake/ is then a cache of it; empty: in lake/ alone"
    )
    cache_gb: float = _setting(
        0.0,
        "most of lake/ that stays after a run where there is a store, GB: the oldest samples leave it; 0: any",
        0,
        1e6,
    )


@dataclass(frozen=True)
class NotifySettings:
    """Who is told how a scheduled run ended. Execution only; nothing is sent when both are empty."""

    command: str = _setting("", "command that gets the outcome as JSON on its standard input, empty for none")
    webhook: str = _setting("", "http(s) address that gets the outcome as JSON, empty for none")
    only_trouble: bool = _setting(False, "stay silent when everything was published without refusals")


@dataclass(frozen=True)
class StatusSettings:
    """What `burdenline status` calls late. Execution only."""

    expected_every_h: float = _setting(
        0.0, "hours within which a run must have ended, 26 for a nightly; 0: any", 0, 8760
    )


RESULT_SECTIONS = ("detector",)


@dataclass(frozen=True)
class Settings:
    """All sections of programme.toml."""

    programme: ProgrammeSettings = field(default_factory=ProgrammeSettings)
    detector: DetectorSettings = field(default_factory=DetectorSettings)
    wear: WearSettings = field(default_factory=WearSettings)
    change: ChangeSettings = field(default_factory=ChangeSettings)
    trial: TrialSettings = field(default_factory=TrialSettings)
    attention: AttentionSettings = field(default_factory=AttentionSettings)
    inbox: InboxSettings = field(default_factory=InboxSettings)
    site: SiteSettings = field(default_factory=SiteSettings)
    lake: LakeSettings = field(default_factory=LakeSettings)
    workers: WorkersSettings = field(default_factory=WorkersSettings)
    notify: NotifySettings = field(default_factory=NotifySettings)
    status: StatusSettings = field(default_factory=StatusSettings)


DEFAULTS = Settings()


def load(path: Path) -> Settings:
    """Read and check programme.toml; raises SettingsError with file, key, found and expected."""
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise SettingsError(
            f"{path} not found: this is not a programme folder; `burdenline init {path.parent}` makes one"
        ) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as problem:
        raise SettingsError(f"{path}: not readable as TOML: {problem}") from None
    kinds = {section.name: type(getattr(DEFAULTS, section.name)) for section in fields(Settings)}
    _refuse_unknown(path, "section", raw, list(kinds))
    return Settings(**{name: _section(path, name, kind, raw.get(name, {})) for name, kind in kinds.items()})


def _section(path: Path, name: str, kind: Any, raw: Any) -> Any:
    if not isinstance(raw, dict):
        raise SettingsError(f"{path}: {name} is {raw!r}; expected a section [{name}]")
    known = {setting.name: setting for setting in fields(kind)}
    _refuse_unknown(path, f"[{name}] setting", raw, list(known))
    return kind(**{key: _value(f"{path}: [{name}] {key}", known[key], value) for key, value in raw.items()})


def _value(where: str, setting: Field, value: Any) -> Any:
    expected: type = type(setting.default)
    if expected is float and type(value) is int:
        value = float(value)
    if type(value) is not expected:
        raise SettingsError(f"{where} = {value!r}; expected a value like {setting.default!r}")
    low, high = setting.metadata["low"], setting.metadata["high"]
    if low is not None and not low <= value <= high:
        raise SettingsError(f"{where} = {value}; expected {low} to {high} ({setting.metadata['meaning']})")
    if setting.name == "zone" or (setting.name == "clock_zone" and value):
        check_zone(where, str(value))
    if setting.name == "webhook" and value and not str(value).startswith(("http://", "https://")):
        raise SettingsError(f"{where} = {value!r}; expected an address that begins with http:// or https://")
    if setting.name == "scheduler" and value and not str(value).startswith(("tcp://", "tls://")):
        raise SettingsError(f"{where} = {value!r}; expected an address such as tcp://host:8786")
    if setting.name == "store" and value and not _STORE_URL.fullmatch(str(value)):
        # The value is not shown: it may hold a key.
        raise SettingsError(
            f"{where}: expected an address such as s3://bucket/prefix; keys belong into the environment"
        )
    if setting.name == "accepted_files" and value not in ("leave", "remove"):
        raise SettingsError(f"{where} = {value!r}; expected leave or remove")
    return value


def check_zone(where: str, zone: str) -> None:
    """Refuse a zone that the time zone database does not know."""
    try:
        ZoneInfo(zone)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise SettingsError(f"{where} = {zone!r}; expected an IANA time zone such as Europe/Lisbon") from None


def _refuse_unknown(path: Path, what: str, found: dict[str, Any], known: list[str]) -> None:
    for name in found:
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            hint = f"did you mean {near[0]}?" if near else f"known: {', '.join(known)}"
            raise SettingsError(f"{path}: unknown {what} {name}; {hint}")


def template(name: str, zone: str) -> str:
    """Text of a programme.toml with every setting at its default and its meaning beside it."""
    lines = ["# Settings of this programme. Delete a line to use its default; an unknown name is refused.", ""]
    for section in fields(Settings):
        lines.append(f"[{section.name}]")
        defaults = getattr(DEFAULTS, section.name)
        values = asdict(defaults) | ({"name": name, "zone": zone} if section.name == "programme" else {})
        for setting in fields(defaults):
            lines.append(f"{setting.name} = {toml_value(values[setting.name])}  # {setting.metadata['meaning']}")
        lines.append("")
    return "\n".join(lines)


def toml_value(value: Any) -> str:
    """A setting's value as TOML writes it; JSON's spelling of these types is TOML's too."""
    return json.dumps(value, ensure_ascii=False)


def result_settings(settings: Settings) -> dict[str, Any]:
    """The settings that change results, for the fingerprint."""
    return {section: asdict(getattr(settings, section)) for section in RESULT_SECTIONS}
