"""The register: which patient wore which patch when, and what was done to the patient.

Files in register/: patients.csv, wears.csv, therapies.csv, and for trials visits.csv and arms.csv. Every error names
file, row and column, what was found and what is expected. Codes only: a value with blanks could be a name and is
refused.
"""

from __future__ import annotations

import csv
import difflib
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import date, datetime, time, timedelta
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple

import polars as pl

from flows.arrivals.clocks import possible_utc
from flows.settings import SettingsError, check_zone

THERAPY_KINDS = ("medication_start", "medication_stop", "dose_change", "ablation", "other")
_CODE = re.compile(r"\w[\w.+/:@=-]{0,63}")
_DATE_TIMES = "a local date and time such as 2026-03-01 08:30, or a date"
_LONGEST_DETAIL = 200
_LONGEST_WINDOW_DAYS = 180


class RegisterError(ValueError):
    """A register file cannot be used; the message names file, row, column, found and expected."""


class Wear(NamedTuple):
    """One wearing of one patch by one patient."""

    recording_id: str
    device_serial: str
    patient_code: str
    from_utc: datetime
    to_utc: datetime | None  # None: still worn
    start_local: datetime | None  # start of the recording where the file does not say it
    zone: str
    zone_source: str  # patient or programme

    def covers(self, instant_utc: datetime) -> bool:
        """The instant lies in the wear; the end is excluded."""
        return self.from_utc <= instant_utc and (self.to_utc is None or instant_utc < self.to_utc)


@dataclass(frozen=True)
class Register:
    """patients (patient_code, zone), wears (fields of Wear), therapies (therapy_id, patient_code, therapy_kind,
    therapy_detail, therapy_day) and visits (patient_code, visit, arm, target_day, days_before, days_after) as frames."""

    patients: pl.DataFrame
    wears: pl.DataFrame
    therapies: pl.DataFrame
    visits: pl.DataFrame = field(default_factory=lambda: pl.DataFrame(schema=_VISIT_TYPES))

    @cached_property
    def _wears_by_device(self) -> dict[str, list[Wear]]:
        found: dict[str, list[Wear]] = {}
        for row in self.wears.sort("device_serial", "from_utc").iter_rows(named=True):
            found.setdefault(row["device_serial"], []).append(Wear(**row))
        return found

    @cached_property
    def _patient_codes(self) -> frozenset[str]:
        return frozenset(self.patients["patient_code"])

    def wears_of(self, device_serial: str) -> list[Wear]:
        """Wears of a device, earliest first."""
        return self._wears_by_device.get(device_serial, [])

    def device_among(self, words: tuple[str, ...]) -> str | None:
        """The first word that is a device serial of the register."""
        return next((word for word in words if word in self._wears_by_device), None)

    def device_in(self, text: str) -> str | None:
        """The longest device serial of the register that stands in a text with no letter or digit around it."""
        serials = sorted(self._wears_by_device, key=lambda serial: (-len(serial), serial))
        return next((s for s in serials if re.search(rf"(?<![^\W_]){re.escape(s)}(?![^\W_])", text)), None)

    def patient_among(self, words: tuple[str, ...]) -> str | None:
        """The first word that is a patient code of the register."""
        return next((word for word in words if word in self._patient_codes), None)

    @cached_property
    def codes(self) -> frozenset[str]:
        """All patient codes and device serials."""
        return self._patient_codes | frozenset(self._wears_by_device)


def load(folder: Path, programme_zone: str) -> Register:
    """Read and check the register of a programme folder; raises RegisterError."""
    patients = _patients(folder / "register" / "patients.csv", programme_zone)
    wears = _wears(folder / "register" / "wears.csv", patients)
    therapies = _therapies(folder / "register" / "therapies.csv", patients)
    visits = _visits(folder / "register", patients)
    return Register(
        pl.DataFrame([(code, zone) for code, (zone, _) in patients.items()], schema=_PATIENT_TYPES, orient="row"),
        pl.DataFrame(wears, schema=_WEAR_TYPES, orient="row"),
        pl.DataFrame(therapies, schema=_THERAPY_TYPES, orient="row"),
        pl.DataFrame(visits, schema=_VISIT_TYPES, orient="row"),
    )


_PATIENT_TYPES: dict[str, pl.DataType] = {"patient_code": pl.String(), "zone": pl.String()}
_WEAR_TYPES: dict[str, pl.DataType] = {
    "recording_id": pl.String(),
    "device_serial": pl.String(),
    "patient_code": pl.String(),
    "from_utc": pl.Datetime("us"),
    "to_utc": pl.Datetime("us"),
    "start_local": pl.Datetime("us"),
    "zone": pl.String(),
    "zone_source": pl.String(),
}
_THERAPY_TYPES: dict[str, pl.DataType] = {
    "therapy_id": pl.String(),
    "patient_code": pl.String(),
    "therapy_kind": pl.String(),
    "therapy_detail": pl.String(),
    "therapy_day": pl.Date(),
}
_VISIT_TYPES: dict[str, pl.DataType] = {
    "patient_code": pl.String(),
    "visit": pl.String(),
    "arm": pl.String(),
    "target_day": pl.Date(),
    "days_before": pl.Int64(),
    "days_after": pl.Int64(),
}


class _Row(NamedTuple):
    """One row of a register file; `number` is the line on which it ends, as an editor counts."""

    file: str
    number: int
    values: dict[str, str]

    def wrong(self, column: str, expected: str) -> RegisterError:
        found = self.values[column]
        return RegisterError(
            f"register/{self.file} row {self.number} column {column}: found {found!r}; expected {expected}"
        )

    def code(self, column: str) -> str:
        if not _CODE.fullmatch(self.values[column]):
            raise self.wrong(column, "a code of letters, digits and . + / : @ = - without blanks")
        return self.values[column]

    def known(self, column: str, known: list[str], where: str) -> str:
        value = self.code(column)
        if value not in known:
            near = difflib.get_close_matches(value, known, n=1)
            raise self.wrong(column, f"a value of {where}" + (f"; did you mean {near[0]}?" if near else ""))
        return value

    def local(self, column: str, *, end_of_day: bool = False) -> datetime | None:
        """Local time, None where the field is empty; a date alone means its first instant, or the day's end."""
        text = self.values[column]
        if not text:
            return None
        try:
            if len(text) == len("2026-03-01"):
                day = date.fromisoformat(text) + timedelta(days=int(end_of_day))
                return datetime.combine(day, time())
            moment = datetime.fromisoformat(text)
        except (ValueError, OverflowError):
            raise self.wrong(column, _DATE_TIMES) from None
        if moment.tzinfo is not None:
            raise self.wrong(column, _DATE_TIMES + ", without a zone: the patient's zone holds")
        return moment

    def whole(self, column: str, low: int, high: int) -> int:
        text = self.values[column]
        if not (text.isascii() and text.isdigit() and low <= int(text) <= high):
            raise self.wrong(column, f"a whole number from {low} to {high}")
        return int(text)

    def needed_local(self, column: str) -> datetime:
        moment = self.local(column)
        if moment is None:
            raise self.wrong(column, _DATE_TIMES)
        return moment


def _rows(path: Path, columns: tuple[str, ...], optional: tuple[str, ...] = (), *, needed: bool = True) -> list[_Row]:
    """Rows of one register file; BOM, CRLF, blanks around values, empty lines and semicolons are tolerated."""
    if not path.exists() and not needed:
        return []
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise RegisterError(f"register/{path.name} is missing; expected columns {','.join(columns)}") from None
    except UnicodeDecodeError as problem:
        raise RegisterError(f"register/{path.name}: byte {problem.start} is not UTF-8; save it as UTF-8") from None
    first = text.split("\n", 1)[0]
    separator = ";" if ";" in first and "," not in first else ","
    reader = csv.reader(text.splitlines(), delimiter=separator, skipinitialspace=True)
    header: list[str] | None = None
    rows = []
    for fields in reader:
        fields = [field.strip() for field in fields]
        if not any(fields):
            continue
        if header is None:
            header = _checked_header(path.name, fields, columns, optional)
        elif len(fields) > len(header):
            raise RegisterError(
                f"register/{path.name} row {reader.line_num}: {len(fields)} values; expected {len(header)} "
                f"({','.join(header)}). Put a value with the separator in it into double quotes."
            )
        else:
            values = dict.fromkeys((*columns, *optional), "") | dict(zip(header, fields, strict=False))
            rows.append(_Row(path.name, reader.line_num, values))
    if header is None and needed:
        raise RegisterError(f"register/{path.name} is empty; expected columns {','.join(columns)}")
    return rows


def _checked_header(file: str, found: list[str], columns: tuple[str, ...], optional: tuple[str, ...]) -> list[str]:
    for name in found:
        if name not in columns + optional:
            near = difflib.get_close_matches(name, columns + optional, n=1)
            hint = f"did you mean {near[0]}?" if near else "nothing else of a person belongs into the register."
            raise RegisterError(f"register/{file} row 1: unknown column {name!r}; {hint}")
    missing = [name for name in columns if name not in found]
    if missing or len(set(found)) != len(found):
        raise RegisterError(f"register/{file} row 1: found {','.join(found)}; expected {','.join(columns)} once each")
    return found


def _unique(rows: list[_Row], column: str, value: Callable[[_Row], str]) -> None:
    seen: dict[str, int] = {}
    for row in rows:
        key = value(row)
        if key in seen:
            raise row.wrong(column, f"a value that is not in row {seen[key]} already")
        seen[key] = row.number


def _patients(path: Path, programme_zone: str) -> dict[str, tuple[str, str]]:
    """Zone and where it comes from, by patient code."""
    rows = _rows(path, ("patient_code",), ("zone",))
    _unique(rows, "patient_code", lambda row: row.code("patient_code"))
    patients = {}
    for row in rows:
        zone = row.values["zone"]
        if zone:
            try:
                check_zone("zone", zone)
            except SettingsError:
                raise row.wrong("zone", "an IANA time zone such as Europe/Lisbon, or nothing") from None
        patients[row.values["patient_code"]] = (zone, "patient") if zone else (programme_zone, "programme")
    return patients


def _wears(path: Path, patients: dict[str, tuple[str, str]]) -> list[Wear]:
    rows = _rows(path, ("device_serial", "patient_code", "from_local"), ("to_local", "start_local"))
    known = list(patients)
    pairs = [(row, _wear(row, *patients[row.known("patient_code", known, "patients.csv")])) for row in rows]
    pairs.sort(key=lambda pair: (pair[1].device_serial, pair[1].from_utc))
    taken: dict[str, int] = {}
    for number, (row, wear) in enumerate(pairs):
        if wear.recording_id in taken:
            raise row.wrong("from_local", f"another day than row {taken[wear.recording_id]} of the same device")
        taken[wear.recording_id] = row.number
        if number and pairs[number - 1][1].device_serial == wear.device_serial:
            _refuse_overlap(*pairs[number - 1], row, wear)
    return [wear for _, wear in pairs]


def _wear(row: _Row, zone: str, zone_source: str) -> Wear:
    serial, from_local = row.code("device_serial"), row.needed_local("from_local")
    to_local = row.local("to_local", end_of_day=True)
    # A wear that begins or ends within an hour that happened twice takes the whole hour.
    from_utc = possible_utc(from_local, zone)[0]
    to_utc = possible_utc(to_local, zone)[-1] if to_local else None
    if to_utc is not None and to_utc <= from_utc:
        raise row.wrong("to_local", f"a time after from_local, {row.values['from_local']}")
    return Wear(
        recording_id=f"{re.sub(r'[^A-Za-z0-9._-]', '-', serial).lstrip('.-_') or 'device'}_{from_local:%Y%m%d}",
        device_serial=serial,
        patient_code=row.values["patient_code"],
        from_utc=from_utc,
        to_utc=to_utc,
        start_local=row.local("start_local"),
        zone=zone,
        zone_source=zone_source,
    )


def _refuse_overlap(earlier_row: _Row, earlier: Wear, row: _Row, wear: Wear) -> None:
    if earlier.to_utc is None:
        raise earlier_row.wrong("to_local", f"an end, because row {row.number} has a later wear of the same device")
    if earlier.to_utc > wear.from_utc:
        raise row.wrong(
            "from_local", f"a time after the end of the wear of the same device in row {earlier_row.number}"
        )


def _therapies(path: Path, patients: dict[str, Any]) -> list[tuple[str, str, str, str, date]]:
    columns = ("therapy_id", "patient_code", "therapy_kind", "at_local")
    rows = _rows(path, columns, ("therapy_detail",), needed=False)
    _unique(rows, "therapy_id", lambda row: row.code("therapy_id"))
    return [
        (
            row.values["therapy_id"],
            row.known("patient_code", list(patients), "patients.csv"),
            row.known("therapy_kind", list(THERAPY_KINDS), ", ".join(THERAPY_KINDS)),
            row.values["therapy_detail"][:_LONGEST_DETAIL],
            row.needed_local("at_local").date(),
        )
        for row in rows
    ]


def _visits(folder: Path, patients: dict[str, Any]) -> list[tuple[str, str, str | None, date, int, int]]:
    """Planned visits of a trial with the patient's arm, None where arms.csv has none."""
    known = list(patients)
    arm_rows = _rows(folder / "arms.csv", ("patient_code", "arm"), needed=False)
    _unique(arm_rows, "patient_code", lambda row: row.known("patient_code", known, "patients.csv"))
    arms = {row.values["patient_code"]: row.code("arm") for row in arm_rows}
    columns = ("patient_code", "visit", "target_local", "days_before", "days_after")
    rows = _rows(folder / "visits.csv", columns, needed=False)
    _unique(rows, "visit", lambda row: f"{row.known('patient_code', known, 'patients.csv')} {row.code('visit')}")
    _unique(rows, "target_local", lambda row: f"{row.values['patient_code']} {row.needed_local('target_local').date()}")
    return [
        (
            row.values["patient_code"],
            row.values["visit"],
            arms.get(row.values["patient_code"]),
            row.needed_local("target_local").date(),
            row.whole("days_before", 0, _LONGEST_WINDOW_DAYS),
            row.whole("days_after", 0, _LONGEST_WINDOW_DAYS),
        )
        for row in rows
    ]
