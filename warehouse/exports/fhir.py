"""Burden per wear day and change after therapy as a FHIR Bundle of Observations, plain JSON valid as R4 and R5.

Heart rate and the number of ventricular beats carry their LOINC codes. For burden and everything else no LOINC code is
known, so the code system of this program names them: its codes are the column names of the published tables.
Nothing has been over-read when it is exported, so every Observation is `preliminary`.
"""

from __future__ import annotations

import json
import uuid
from datetime import datetime, time, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from warehouse import schema
from warehouse.exports.provenance import provenance
from warehouse.published import Published

OWN = "urn:burdenline"
LOINC = {"mean_rate_bpm": ("8867-4", "Heart rate"), "v_beats": ("76126-2", "Premature ventricular contractions [#]")}
UCUM = {"%": "%", "h": "h", "1/h": "/h", "1/min": "/min", "beats": "{beats}", "d": "d", "": "1"}
DAY_COMPONENTS = ("v_beats", "all_beats", "analysable_h", "worn_h", "v_per_h", "s_burden_pct", "mean_rate_bpm")
CHANGE_COMPONENTS = (
    "ratio", "ratio_low", "ratio_high", "chance_fall_limit_pct", "chance_rise_limit_pct", "baseline_days", "after_days",
    "baseline_analysable_h", "after_analysable_h",
)  # fmt: skip

Json = dict[str, Any]


def export_fhir(published: Published, file: Path) -> list[Path]:
    """Write one Bundle of type collection: an Observation per wear day and one per therapy event with a verdict."""
    file.write_text(json.dumps(bundle(published), indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
    return [file]


def bundle(published: Published) -> Json:
    """The Bundle as plain values; the same publication gives the same Bundle."""
    common = _common(published)
    zones = dict(published.table("patients").iter_rows())
    days = [_day(row, zones[row["patient_code"]]) for row in published.table("wear_days").iter_rows(named=True)]
    therapies = {row["therapy_id"]: row for row in published.table("therapies").iter_rows(named=True)}
    changes = published.table("changes", {"measure": "v_burden_pct"}).iter_rows(named=True)
    observations = days + [_change(row, therapies[row["therapy_id"]]) for row in changes]
    return {
        "resourceType": "Bundle",
        "identifier": {"system": f"{OWN}:publication", "value": published.name},
        "type": "collection",
        "entry": [{"fullUrl": _full_url(published, each), "resource": each | common} for each in observations],
    }


def _common(published: Published) -> Json:
    origin = provenance(published)
    return {
        "meta": {
            "tag": [
                {"system": f"{OWN}:fingerprint", "code": origin.fingerprint},
                {"system": f"{OWN}:publication", "code": origin.publication},
            ]
        },
        "note": [{"text": caution} for caution in origin.cautions],
    }


def _full_url(published: Published, observation: Json) -> str:
    name = f"{OWN}:{published.name}:{json.dumps(observation, sort_keys=True)}"
    return f"urn:uuid:{uuid.uuid5(uuid.NAMESPACE_URL, name)}"


def _observation(code: str, patient_code: str) -> Json:
    category = {"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "procedure"}
    return {
        "resourceType": "Observation",
        "status": "preliminary",
        "category": [{"coding": [category]}],
        "code": _concept(code),
        "subject": {"identifier": {"system": f"{OWN}:patient", "value": patient_code}},
    }


def _day(row: Json, zone: str) -> Json:
    midnight = datetime.combine(row["local_day"], time(), ZoneInfo(zone))
    next_midnight = datetime.combine(row["local_day"] + timedelta(days=1), time(), ZoneInfo(zone))
    return _observation("v_burden_pct", row["patient_code"]) | {
        "effectivePeriod": {"start": midnight.isoformat(), "end": next_midnight.isoformat()},
        **_value("v_burden_pct", row["v_burden_pct"]),
        "component": [_component(name, row[name]) for name in DAY_COMPONENTS],
    }


def _change(row: Json, therapy: Json) -> Json:
    verdict = {
        "coding": [{"system": f"{OWN}:verdict", "code": row["verdict"]}],
        "text": row["verdict"].replace("_", " "),
    }
    return _observation("change_pct", row["patient_code"]) | {
        "effectiveDateTime": therapy["therapy_day"].isoformat(),
        **_value("change_pct", row["change_pct"]),
        "component": [
            {"code": _concept("verdict"), "valueCodeableConcept": verdict},
            *(_component(name, row[name]) for name in CHANGE_COMPONENTS),
        ],
    }


def _component(name: str, value: float | None) -> Json:
    return {"code": _concept(name), **_value(name, value)}


def _concept(name: str) -> Json:
    codings = [{"system": f"{OWN}:column", "code": name}]
    if name in LOINC:
        code, display = LOINC[name]
        codings.insert(0, {"system": "http://loinc.org", "code": code, "display": display})
    return {"coding": codings, "text": schema.COLUMNS[name].meaning}


def _value(name: str, value: float | None) -> Json:
    if value is None:
        absent = {"system": "http://terminology.hl7.org/CodeSystem/data-absent-reason", "code": "not-performed"}
        return {"dataAbsentReason": {"coding": [absent], "text": "no value could be computed"}}
    unit = schema.COLUMNS[name].unit
    quantity = {
        "value": round(value, 4),
        "unit": unit or "1",
        "system": "http://unitsofmeasure.org",
        "code": UCUM[unit],
    }
    return {"valueQuantity": quantity}
