"""HL7 annotated ECG: XML, read as a stream so that memory does not grow with the file.

Source: HL7 aECG Implementation Guide, final, 21 March 2005 (ANSI/HL7 V3 ECG R1): a sequence set holds one GLIST_TS with
head and increment, and one SLIST_PQ per lead with origin, scale and digits. Document types and entities are refused.
Names, birth date and every other text of the document are passed over.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from datetime import UTC, date, datetime, time, timedelta
from fractions import Fraction
from pathlib import Path
from typing import Any
from xml.parsers import expat

import numpy as np

from flows.readers.channels import choose, mv_per_unit
from flows.readers.codes import Refused
from flows.readers.columns import Spool
from flows.readers.recording import Finding, Opened, Site, Stretch, checked_rate, checked_scale, decimal_of, finding
from flows.readers.wide import Wide, fitted

NAME = "aECG"
_NAMESPACE = "urn:hl7-org:v3"
_ROOT = re.compile(rb"<(\w+:)?AnnotatedECG[\s>]")
_PIECE_BYTES = 2**18
_S_PER_UNIT = {"s": Fraction(1), "ms": Fraction(1, 1000), "us": Fraction(1, 1_000_000)}
_TIME = re.compile(r"(\d{4})(\d\d)(\d\d)(\d\d)(\d\d)(\d\d)?(\.\d+)?([+-]\d{4})?")
_ANY_RAIL = 2**40


def identify(head: bytes) -> bool:
    """The XML's root is AnnotatedECG of the HL7 v3 name space."""
    return _ROOT.search(head) is not None and _NAMESPACE.encode() in head


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG lead of the first rhythm series; raises Refused."""
    series = _Series()
    _parse(files[0], series)
    if not series.leads:
        raise Refused("no_signals", "XML: it holds no lead sequences; expected an SLIST_PQ per lead.")
    labels = [lead.label for lead in series.leads]
    number, choice = (0, ()) if len(labels) == 1 else choose(labels, ["mV"] * len(labels), site.ecg_channel, "XML")
    lead = series.leads[number]
    if not lead.samples.n_samples:
        raise Refused("no_samples", "XML: the ECG lead has no digits; expected samples.")
    rate = _rate(series.increment)
    start, zone = _start(series.head)
    mv_per_count, count_at_zero, scale_findings = _scale(lead, site)
    stretches = (Stretch(0, lead.samples.n_samples, 0),)
    wide = Wide(lead.samples.read, stretches, mv_per_count, count_at_zero, (-_ANY_RAIL, _ANY_RAIL), None)
    fit, wide_findings = fitted(wide)
    return Opened(
        format=NAME,
        device_words=series.device_words,
        patient_words=series.patient_words,
        start_local=start,
        start_resolution_ms=1 if series.head and "." in series.head else 1000,
        zone=zone,
        rate=rate,
        lead=lead.label,
        mv_per_count=fit.mv_per_count,
        count_at_zero_mv=fit.count_at_zero_mv,
        rails=fit.rails,
        missing_count=fit.missing_count,
        stretches=stretches,
        read=fit.read,
        findings=(*choice, *scale_findings, *wide_findings),
        other_channels=tuple(label for n, label in enumerate(labels) if n != number),
    )


def _parse(path: Path, series: _Series) -> None:
    parser = expat.ParserCreate(namespace_separator=" ")
    parser.buffer_text = True
    parser.StartElementHandler = series.begin
    parser.EndElementHandler = series.end
    parser.CharacterDataHandler = series.text
    parser.StartDoctypeDeclHandler = _refuse_doctype
    parser.EntityDeclHandler = _refuse_doctype
    try:
        with path.open("rb") as file:
            while piece := file.read(_PIECE_BYTES):
                parser.Parse(piece, False)
        parser.Parse(b"", True)
    except expat.ExpatError as problem:
        raise Refused(
            "bad_header_number",
            f"XML: not well formed in line {problem.lineno}; expected a whole document. Export the file again.",
        ) from problem


def _refuse_doctype(*_: Any) -> None:
    raise Refused("unsafe_xml", "XML: it declares a document type or entities; expected plain aECG. Export it without.")


class _Lead:
    """One lead's sequence: code, scale and digits."""

    def __init__(self, label: str) -> None:
        self.label = label.removeprefix("MDC_ECG_LEAD_")
        self.origin: tuple[str, str] = ("0", "")
        self.scale: tuple[str, str] = ("", "")
        self.samples = Spool()


class _Series:
    """What is picked from the document while it passes."""

    def __init__(self) -> None:
        self.leads: list[_Lead] = []
        self.head: str | None = None
        self.increment: tuple[str, str] | None = None
        self.device_words: tuple[str, ...] = ()
        self.patient_words: tuple[str, ...] = ()
        self._path: list[str] = []
        self._code = ""
        self._has_time = False
        self._is_done = False
        self._digits: list[str] | None = None
        self._rest = ""

    def begin(self, tag: str, values: dict[str, str]) -> None:
        """An element begins."""
        name = tag.rsplit(" ", 1)[-1]
        self._path.append(name)
        if name == "id" and len(self._path) > 1:
            self._identity(values)
        if self._is_done or "sequence" not in self._path:
            return
        if name == "code":
            self._code = values.get("code", "")
        elif self._code.startswith("TIME_"):
            self._time(name, values)
        elif name == "value" and _type(values) == "SLIST_PQ" and self._has_time:
            self.leads.append(_Lead(self._code))
        elif self.leads and name in ("origin", "scale"):
            setattr(self.leads[-1], name, (values.get("value", ""), values.get("unit", "")))
        elif self.leads and name == "digits":
            self._digits, self._rest = [], ""

    def end(self, tag: str) -> None:
        """An element ends."""
        name = self._path.pop()
        if name == "digits" and self._digits is not None:
            self._store(" ".join([self._rest + "".join(self._digits)]), is_last=True)
            self._digits = None
        if name == "sequenceSet" and self.leads:
            self._is_done = True  # further sets are derived or other series

    def text(self, text: str) -> None:
        """Digits pass on in pieces; every other text is dropped."""
        if self._digits is not None:
            self._store(self._rest + text, is_last=False)

    def _store(self, text: str, *, is_last: bool) -> None:
        cut = len(text) if is_last else max(text.rfind(" "), text.rfind("\n"), text.rfind("\t")) + 1
        self._rest = text[cut:]
        try:
            values = np.array(text[:cut].split(), dtype=np.float32)
        except ValueError:
            raise Refused("bad_header_number", "XML: a digit of the ECG is no number; expected numbers only.") from None
        self.leads[-1].samples.add(values)

    def _time(self, name: str, values: dict[str, str]) -> None:
        if name == "head" and self.head is None:
            self.head = values.get("value")
            self._has_time = True
        elif name == "increment" and self.increment is None:
            self.increment = (values.get("value", ""), values.get("unit", ""))

    def _identity(self, values: dict[str, str]) -> None:
        words = tuple(values.get("extension", "").split())
        if "trialSubject" in self._path[-2:]:
            self.patient_words += words
        elif any("evice" in each for each in self._path[-3:-1]):
            self.device_words += words


def _type(values: dict[str, str]) -> str:
    return next((value for name, value in values.items() if name.endswith("type")), "").rsplit(":", 1)[-1]


def _rate(increment: tuple[str, str] | None) -> Fraction:
    value, unit = increment or ("", "")
    try:
        step_s = decimal_of(value) * _S_PER_UNIT[unit]
        rate = 1 / step_s
    except (ValueError, KeyError, ZeroDivisionError):
        raise Refused(
            "bad_header_number", "XML: the time increment cannot be read; expected a positive number in s, ms or us."
        ) from None
    return checked_rate(rate.limit_denominator(100_000), "XML")


def _start(head: str | None) -> tuple[datetime | None, str | None]:
    """Wall clock of the device, or UTC where the time says its offset."""
    found = _TIME.fullmatch(head or "")
    if found is None:
        return None, None
    year, month, day, hour, minute = (int(part) for part in found.groups()[:5])
    micros = round(float(found[7] or 0) * 1_000_000)
    try:
        whole_s = datetime.combine(date(year, month, day), time(hour, minute, int(found[6] or 0)))
        start = whole_s + timedelta(microseconds=micros)
        if found[8] is None:
            return start, None
        offset = timedelta(hours=int(found[8][:3]), minutes=int(found[8][0] + found[8][3:]))
        return (start - offset).replace(tzinfo=UTC).replace(tzinfo=None), "UTC"
    except (ValueError, OverflowError):
        return None, None


def _scale(lead: _Lead, site: Site) -> tuple[float, float, tuple[Finding, ...]]:
    """Millivolts per digit and the digit at 0 mV."""
    if site.mv_per_count:
        return site.mv_per_count, 0.0, (finding("scale_from_site", f"{site.mv_per_count:g} mV"),)
    factor, origin_factor = mv_per_unit(lead.scale[1]), mv_per_unit(lead.origin[1] or lead.scale[1])
    if factor is None or origin_factor is None:
        raise Refused("unit_unknown", "XML: the scale's unit is no voltage; expected V, mV, uV or nV.")
    try:
        mv_per_count, origin_mv = _float(lead.scale[0]) * factor, _float(lead.origin[0]) * origin_factor
    except ValueError:
        raise Refused("bad_header_number", "XML: origin or scale of the ECG lead is no number.") from None
    if not mv_per_count:
        raise Refused("amplitude_scale_missing", "XML: the scale is 0; expected millivolts per digit.")
    return checked_scale(mv_per_count, 65_535, "XML"), (0.0 - origin_mv) / mv_per_count, ()


def _float(text: str) -> float:
    return float(decimal_of(text))
