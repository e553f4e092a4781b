"""How pages say numbers, times and codes: one wording per fact, the same on every page.

What does not belong here: sentences about a patient (see the page modules), and anything that computes.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable
from datetime import UTC, date, datetime
from typing import Any
from zoneinfo import ZoneInfo

MISSING = "–"
THIN_SPACE = "\N{NARROW NO-BREAK SPACE}"

CLASSES = {
    "N": "normal",
    "S": "supraventricular ectopic",
    "V": "ventricular ectopic",
    "F": "fusion",
    "Q": "unclassifiable",
}

VERDICTS = {
    "fell_beyond_chance": ("▼", "fell beyond chance"),
    "rose_beyond_chance": ("▲", "rose beyond chance"),
    "within_chance": ("≈", "within chance"),
    "too_little_wear": ("◌", "too little wear"),
}

MEASURES = {
    "v_burden_pct": ("Ventricular burden", "%", 2),
    "s_burden_pct": ("Supraventricular burden", "%", 2),
    "v_per_h": ("Ventricular beats per hour", "/h", 1),
    "couplets_per_24h": ("Couplets per 24 h", "/24\N{NO-BREAK SPACE}h", 1),
    "runs_per_24h": ("Runs per 24 h", "/24\N{NO-BREAK SPACE}h", 1),
    "longest_run_beats": ("Longest run of all days", "beats", 0),
    "fastest_run_bpm": ("Fastest run of all days", "/min", 0),
    "bigeminy_pct": ("Time in bigeminy", "%", 2),
    "mean_rate_bpm": ("Mean heart rate", "/min", 0),
}
MEASURES_ON_SCREEN = ("longest_run_beats", "fastest_run_bpm", "bigeminy_pct")  # a printed summary has two pages

THERAPIES = {
    "medication_start": "start of",
    "medication_stop": "stop of",
    "dose_change": "dose change of",
    "ablation": "ablation,",
    "other": "",
}

EPISODES = {
    "couplet": "couplet",
    "run": "ventricular run",
    "sv_run": "supraventricular run",
    "bigeminy": "ventricular bigeminy",
    "trigeminy": "ventricular trigeminy",
    "pause": "pause",
    "irregular": "irregular stretch",
}

FINDINGS = {
    "file_cut_short": "The file holds fewer samples than its header says; what is there was read",
    "record_count_open": "The header left the number of records open; the file was read to its end",
    "more_records_than_header_says": "The file holds more samples than its header says; all were read",
    "partial_last_record": "The last record of the file was incomplete and was left out",
    "header_size_field_wrong": "The header gives its own size wrongly; the true size was used",
    "checksum_wrong": "A checksum of the file does not match: ask for the export again if the strips look odd",
    "gap_in_file_declared_continuous": "The file says that it has no gap, but its times show one; the times were believed",
    "bad_annotation": "A mark in the file could not be read and was left out",
    "saturated": "Some samples lie at the end of the recorder's range: what was cut off there is missing from the strips",
    "flat": "All samples of a part have one value: nothing was recorded there",
    "clock_drift": "The sample clock and the device's time stamps run apart; the stamps were believed",
    "clock_not_changed": "The device clock did not follow a change of summer time; times come from the neighbouring part",
    "overlap_trimmed": "Samples that two files hold were taken once",
    "resolution_reduced": "Samples were wider than 16 bit and were stored in coarser steps",
    "rescaled_to_recording": "A part came with another amplitude scale and was put into that of the first part",
    "missing_samples": "The file marks samples as missing; that time is not analysed",
    "start_from_register": "The file has no usable start; that of the register was taken",
    "device_from_file_name": "The file has no device serial; its name was taken",
    "first_of_several_leads": "Several leads are in the file; the first was taken",
    "channel_chosen_by_unit": "No channel is called ECG; the only voltage was taken",
    "scale_from_site": "The amplitude scale comes from programme.toml, not from the file",
    "zone_from_site": "The zone of the device clock comes from programme.toml, not from the file",
}

QUALITY = {
    "flat": "flat line",
    "rail": "input at its limit",
    "noise": "noise",
    "lead_off": "electrode off",
    "missing": "samples missing",
}

DELIVERY_STATUS = {
    "accepted": "accepted",
    "waiting": "waits",
    "skipped": "skipped",
    "quarantined": "refused",
}


def number(value: float | int | None, digits: int = 0) -> str:
    """Return a number with thousands set apart by thin spaces, or a dash when it is missing."""
    if value is None or math.isnan(value):
        return MISSING
    return f"{value:,.{digits}f}".replace(",", THIN_SPACE).replace("-", "\N{MINUS SIGN}")


def significant(value: float | None, figures: int = 2) -> str:
    """Return a number with so many significant figures, never in powers of ten."""
    if value is None or not math.isfinite(value) or value == 0:
        return number(value if value is not None and math.isfinite(value) else None)
    return number(value, max(figures - 1 - math.floor(math.log10(abs(value))), 0))


def share(value: float | None) -> str:
    """Return a per cent figure with two digits; a share too small for them is told as such, never as zero."""
    if value is None or value == 0 or value >= 0.01:
        return number(value, 2)
    return "< 0.01"


WIDE = 10.0  # an interval that reaches so many fold both ways says nothing but that


def ratio_interval(low: float | None, high: float | None) -> str:
    """Return '0.41 to 0.53', or in words that the interval is too wide to say anything."""
    if low is None and high is None:
        return MISSING
    if (low or 0) < 1 / WIDE and (high is None or high > WIDE):
        return "over 10-fold either way"
    return f"{significant(low)} to {significant(high)}"


def chance(fall_pct: float | None, rise_pct: float | None) -> str:
    """Return the change that chance explains, such as '−61 to +158 %', or in words that it explains any."""
    if fall_pct is None or rise_pct is None:
        return MISSING
    if fall_pct > 100 - 100 / WIDE and rise_pct > 100 * WIDE - 100:
        return "over 10-fold either way"
    rise = f"+{number(1 + rise_pct / 100)}-fold" if rise_pct >= 1000 else f"{signed(rise_pct)}\N{NO-BREAK SPACE}%"
    return f"{signed(-fall_pct)} to {rise}"


def signed(value: float | int | None, digits: int = 0) -> str:
    """Return a number with its sign always shown."""
    text = number(value, digits)
    return f"+{text}" if value is not None and value > 0 else text


def day(value: date | None) -> str:
    """Return a calendar day such as 3 Mar 2026."""
    return MISSING if value is None else f"{value.day} {value:%b %Y}"


def days(first: date | None, last: date | None) -> str:
    """Return a span of calendar days, saying a shared month or year once."""
    if first is None or last is None or first == last:
        return day(first or last)
    if first.year != last.year:
        return f"{day(first)} – {day(last)}"
    if first.month != last.month:
        return f"{first.day} {first:%b} – {day(last)}"
    return f"{first.day}–{day(last)}"


def clock(instant_utc: datetime | None, zone: str) -> str:
    """Return a naive UTC instant as local day and time with its offset from UTC."""
    if instant_utc is None:
        return MISSING
    local = local_time(instant_utc, zone)
    offset = local.isoformat()[-6:]
    return f"{day(local.date())}, {local:%H:%M:%S} UTC{'' if offset == '+00:00' else offset}"


def local_time(instant_utc: datetime, zone: str) -> datetime:
    """Return a naive UTC instant as an aware time of the zone."""
    return instant_utc.replace(tzinfo=UTC).astimezone(ZoneInfo(zone))


def age(hours: float | None) -> str:
    """Return a span of hours as people say it: in hours up to two days, then in days."""
    if hours is None:
        return MISSING
    if hours < 1:
        return "less than 1 h"
    return f"{number(hours, 0 if hours >= 10 else 1)} h" if hours < 48 else f"{number(hours / 24)} days"


def therapy(kind: str, detail: str | None) -> str:
    """Return a therapy event in words, such as 'start of bisoprolol 5 mg'."""
    return " ".join(part for part in (THERAPIES.get(kind, kind), detail) if part).rstrip(",")


def plain(code: str | None) -> str:
    """Return a code such as lead_not_limb_like as words."""
    return MISSING if not code else code.replace("_", " ")


def dated(text: str) -> str:
    """Return a sentence with its calendar days as people write them: 2026-03-02 becomes 2 Mar 2026."""
    return re.sub(r"\b\d{4}-\d{2}-\d{2}\b", lambda found: _spoken(found[0]), text)


def _spoken(iso_day: str) -> str:
    try:
        return day(date.fromisoformat(iso_day)).replace(" ", "\N{NO-BREAK SPACE}")
    except ValueError:
        return iso_day


def counted(how_many: int, noun: str, plural: str = "") -> str:
    """Return '1 patient', '3 patients' or 'no patient'."""
    if how_many == 0:
        return f"no {noun}"
    return f"{number(how_many)} {noun if how_many == 1 else plural or noun + 's'}"


def joined(words: Iterable[str]) -> str:
    """Return 'a, b and c'."""
    *head, last = list(words) or [""]
    return f"{', '.join(head)} and {last}" if head else last


def sentence(text: str) -> str:
    """Return the text with a capital at its start."""
    return text[:1].upper() + text[1:]


FILTERS: dict[str, Callable[..., Any]] = {
    "number": number,
    "significant": significant,
    "signed": signed,
    "share": share,
    "dated": dated,
    "day": day,
    "clock": clock,
    "age": age,
    "plain": plain,
    "sentence": sentence,
    "word": lambda code, words: words.get(code, plain(code)),
}
