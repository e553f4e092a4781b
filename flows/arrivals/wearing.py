"""Whose recording an opened file is: its device, its wear in the register, the zone of its clock.

Raises what is missing as a refusal or a wait; nothing is landed here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import NamedTuple

from flows.arrivals.assembly import Match, match
from flows.arrivals.privacy import shown_serial, without_words
from flows.readers.codes import Declined, Refused, Waits
from flows.readers.recording import Finding, Opened, finding
from flows.register import Register

_NOT_TOLD = "not told"


class Wearing(NamedTuple):
    """An opened file with its place in the register; findings are added, marks and lead cleared of the person's words."""

    opened: Opened
    device_serial: str
    match: Match
    file_zone: str | None


def wearing_of(opened: Opened, stems: Sequence[str], register: Register, clock_zone: str) -> Wearing:
    """Device, wear and zone of an opened file; `stems` are its names without suffix, used when it has no serial.

    Raises Refused or Waits with what was found, what is expected and what to do.
    """
    serial, found = _device(opened, stems, register)
    file_zone = opened.zone or clock_zone or None
    if file_zone and not opened.zone and opened.start_local is not None:
        found.append(finding("zone_from_site", file_zone))
    matched = match(register, serial, opened.start_local, file_zone) if serial else None
    if matched is None or serial is None:
        raise _without_wear(serial, opened)
    if matched.start_from_register:
        found.append(finding("start_from_register"))
    named = register.patient_among(opened.patient_words)
    if named is not None and named != matched.wear.patient_code:
        raise Refused(
            "same_start_other_patient",
            f"the file names patient {named}, register/wears.csv has {matched.wear.patient_code} for the wear "
            f"{matched.wear.recording_id}; expected the same. Correct the register or the export, then retry.",
        )
    words = set(opened.patient_words) - {named}
    marks = tuple(mark._replace(text=without_words(mark.text, words)) for mark in opened.marks)
    lead = without_words(opened.lead, words)
    kept = replace(opened, findings=(*opened.findings, *found), marks=marks, lead=lead)
    return Wearing(kept, serial, matched, file_zone)


def _device(opened: Opened, stems: Sequence[str], register: Register) -> tuple[str | None, list[Finding]]:
    """Serial as the register writes it, from the file or else from its name."""
    serial = register.device_among(opened.device_words)
    if serial is not None or shown_serial(opened.device_words) != _NOT_TOLD:
        return serial, []
    serial = next((found for stem in stems if (found := register.device_in(stem))), None)
    return serial, [finding("device_from_file_name")] if serial else []


def _without_wear(serial: str | None, opened: Opened) -> Declined:
    if serial is None:
        told = shown_serial(opened.device_words)
        where = "the file has none and its name holds none of the register" if told == _NOT_TOLD else f"it is {told}"
        return Waits(
            "wear_not_in_register",
            f"device serial: {where}; expected a row of register/wears.csv with the serial, patient and time of wear. "
            "Add the row, then run again.",
        )
    if opened.start_local is None:
        return Refused(
            "start_time_unknown",
            f"the file does not say when it began, and register/wears.csv has no single start_local for device "
            f"{serial}. Enter start_local in the row of the wear, then retry.",
        )
    return Waits(
        "wear_not_in_register",
        f"device {serial} starts {opened.start_local:%Y-%m-%d %H:%M} local time, in none of its wears in "
        "register/wears.csv; expected a row whose from_local and to_local hold it. Correct it, or enter start_local if "
        "the device clock was not set, then run again.",
    )
