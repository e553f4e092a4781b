"""The FHIR Bundle is valid in R4 and R5, holds every wear day with its denominators, and codes only what is known."""

import json
from pathlib import Path
from typing import Any

import pytest

from warehouse.cautions import CAUTIONS
from warehouse.exports.fhir import export_fhir
from warehouse.publish import publish
from warehouse.published import Published

CHANGE = {
    "patient_code": "P1",
    "therapy_id": "T1",
    "measure": "v_burden_pct",
    "verdict": "fell_beyond_chance",
    "change_pct": -90.0,
    "ratio": 0.1,
    "chance_fall_limit_pct": 60.0,
    "baseline_days": 3,
}


@pytest.fixture
def written(lake: Any, tmp_path: Path) -> dict[str, Any]:
    """A Bundle of a patient in Berlin over the day on which clocks go forward, one day of it pure noise."""
    lake.patient("P1", "Europe/Berlin")
    lake.recording("R1", "P1", "2026-03-28T23:00", "2026-03-29T22:00")
    nothing = dict.fromkeys(("n_beats", "s_beats", "v_beats", "rr_count"), 0) | {"rr_sum_s": 0.0, "analysable_s": 0.0}
    lake.recording("R2", "P1", "2026-03-29T22:00", "2026-03-30T22:00", **nothing)
    lake.therapy("P1", "2026-04-02")
    with lake.built(changes=[CHANGE]) as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    (file,) = export_fhir(Published(lake.folder / "published"), tmp_path / "bundle.json")
    return json.loads(file.read_text(encoding="utf-8"))


def _by_code(resource: dict[str, Any]) -> dict[str, Any]:
    return {part["code"]["coding"][-1]["code"]: part for part in resource["component"]}


def test_the_bundle_is_valid_in_both_releases(written: dict[str, Any]) -> None:
    """The models of R4B and R5 both accept the Bundle and give it back unchanged."""
    pytest.importorskip("fhir.resources", reason="fhir.resources is a test library")
    from fhir.resources.bundle import Bundle as R5
    from fhir.resources.R4B.bundle import Bundle as R4

    for release in (R4, R5):
        assert len(release.model_validate(written).entry) == 3


def test_a_day_carries_its_period_and_denominators(written: dict[str, Any]) -> None:
    """The effective period is the local day of 23 hours; burden stands with beats and analysable hours."""
    day = written["entry"][0]["resource"]
    # Source: tz database: on 29 March 2026 Berlin goes from +01:00 to +02:00
    assert day["effectivePeriod"] == {"start": "2026-03-29T00:00:00+01:00", "end": "2026-03-30T00:00:00+02:00"}
    assert day["valueQuantity"] == {"value": 9, "unit": "%", "system": "http://unitsofmeasure.org", "code": "%"}
    parts = _by_code(day)
    assert parts["analysable_h"]["valueQuantity"]["value"] == 23
    assert parts["all_beats"]["valueQuantity"] | {"value": 92_000} == parts["all_beats"]["valueQuantity"]
    assert day["status"] == "preliminary"


def test_only_known_loinc_codes_are_used(written: dict[str, Any]) -> None:
    """Heart rate and ventricular beats carry LOINC; burden has only the program's own code."""
    day = written["entry"][0]["resource"]
    loinc = {
        coding["code"]
        for part in (day, *day["component"])
        for coding in part["code"]["coding"]
        if coding["system"] == "http://loinc.org"
    }
    # Source: LOINC 8867-4 heart rate, 76126-2 premature ventricular contractions, as listed in FACTS section 6
    assert loinc == {"8867-4", "76126-2"}
    assert [coding["system"] for coding in day["code"]["coding"]] == ["urn:burdenline:column"]


def test_a_day_without_analysable_time_has_no_value(written: dict[str, Any]) -> None:
    """A missing burden is absent with its reason, not 0."""
    noise = written["entry"][1]["resource"]
    assert "valueQuantity" not in noise
    assert noise["dataAbsentReason"]["coding"][0]["code"] == "not-performed"
    assert _by_code(noise)["worn_h"]["valueQuantity"]["value"] == 24


def test_a_change_carries_verdict_and_chance_limit(written: dict[str, Any]) -> None:
    """The verdict stands with change, chance limit and days; what is not known is absent."""
    change = written["entry"][2]["resource"]
    parts = _by_code(change)
    assert change["valueQuantity"]["value"] == -90
    assert parts["verdict"]["valueCodeableConcept"]["coding"][0]["code"] == "fell_beyond_chance"
    assert parts["chance_fall_limit_pct"]["valueQuantity"]["value"] == 60
    assert "dataAbsentReason" in parts["ratio_low"]


def test_every_observation_carries_fingerprint_and_cautions(written: dict[str, Any]) -> None:
    """An Observation taken out of the Bundle still says where it comes from and how far it can be trusted."""
    for entry in written["entry"]:
        assert {"system": "urn:burdenline:fingerprint", "code": "f1"} in entry["resource"]["meta"]["tag"]
        assert [note["text"] for note in entry["resource"]["note"]] == list(CAUTIONS)
    assert len({entry["fullUrl"] for entry in written["entry"]}) == 3
