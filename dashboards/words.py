"""How pages say numbers, times and codes: one wording per fact, the same on every page.

What does not belong here: sentences about a patient (see the page modules), and anything that computes.
"""

from __future__ import annotations

import math
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
    "v_per_h": ("Ventricular beats per analysable hour", "/h", 1),
    "couplets_per_24h": ("Couplets per 24 h", "/24 h", 1),
    "runs_per_24h": ("Runs per 24 h", "/24 h", 1),
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
    return f"{number(hours, 0 if hours >= 10 else 1)} h" if hours < 48 else f"{number(hours / 24)} days"


def therapy(kind: str, detail: str | None) -> str:
    """Return a therapy event in words, such as 'start of bisoprolol 5 mg'."""
    return " ".join(part for part in (THERAPIES.get(kind, kind), detail) if part).rstrip(",")


def plain(code: str | None) -> str:
    """Return a code such as lead_not_limb_like as words."""
    return MISSING if not code else code.replace("_", " ")


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
    "day": day,
    "clock": clock,
    "age": age,
    "plain": plain,
    "sentence": sentence,
    "word": lambda code, words: words.get(code, plain(code)),
}
