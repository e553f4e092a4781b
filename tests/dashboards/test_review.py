"""The over-read sheet: families in order, strips beside them, letters that can be relabelled."""

from __future__ import annotations

from datetime import datetime

from dashboards import review
from dashboards.drawings import Drawings
from dashboards.tables import Tables

RECORDING = "CN0000-20260302"


def sheet_of(rows, publish) -> dict:
    tables = Tables(publish(rows))
    (recording,) = (row for row in tables.whole("recordings").rows(named=True) if row["recording_id"] == RECORDING)
    return review.context(tables, recording, Drawings(tables, recording))


def test_families_stand_in_the_order_of_the_sheet(rows, publish):
    """The family whose decision moves the burden most stands first."""
    assert [item["family"] for item in sheet_of(rows, publish)["items"]] == [1, 2, 0]


def test_each_family_stands_with_strips_that_show_it(rows, publish):
    """A strip lies beside a family that occurs in it, one of the family's own class first, and only once."""
    items = sheet_of(rows, publish)["items"]
    for item in items:
        assert all(item["family"] in strip["beat_families"] for strip in item["strips"])
    assert [strip["beat_class"] for strip in items[0]["strips"]] == ["V", "V"]
    assert items[2]["strips"][0]["beat_class"] == "N"
    shown = [id(strip) for item in items for strip in item["strips"]]
    assert len(shown) == len(set(shown))


def test_the_effort_of_the_sheet_stands_in_its_title(rows, publish):
    """The headline counts the decisions after which 95 % of the ventricular beats are settled."""
    assert sheet_of(rows, publish)["effort"]["decisions_to_goal"] == 2


def test_strips_beside_no_family_stand_at_the_end(rows, publish):
    """Every strip is on the sheet once, so that each of its beats can be relabelled."""
    sheet = sheet_of(rows, publish)
    beside = [strip["strip_reason"] for item in sheet["items"] for strip in item["strips"]]
    others = [strip["strip_reason"] for strip in sheet["other_strips"]]
    of_recording = [row["strip_reason"] for row in rows["strips"] if row["recording_id"] == RECORDING]
    assert sorted(beside + others) == sorted(of_recording)


def test_the_sheet_tells_what_readers_decided_before(rows, publish):
    """Beside a family stands the latest word of each reader on it, unless withdrawn, under the analysis of the sheet only."""
    decision = {"recording_id": RECORDING, "decision_subject": "family", "automatic_class": "V", "family": 1}
    for order, (reader, decided, is_mixed, fingerprint) in enumerate(
        (("A", "N", False, "f00dfeed"), ("A", "accept", False, "f00dfeed"), ("B", None, True, "f00dfeed"),
         ("C", "S", False, "0ld"))
    ):  # fmt: skip
        more = {"delivery_id": f"D{order}", "decision_order": 0, "reader_code": reader, "decision": decided}
        more |= {
            "is_mixed": is_mixed,
            "read_fingerprint": fingerprint,
            "reviewed_utc": datetime.fromisoformat(f"2026-04-{order + 1:02}"),
        }
        rows["decisions"].append(decision | more)
    part = rows["decisions"][2] | {"decision_subject": "part", "is_mixed": None}
    rows["decisions"].append(part | {"decision_order": 1, "automatic_class": "V", "decision": "accept"})
    rows["decisions"].append(part | {"decision_order": 2, "automatic_class": "F", "decision": "noise"})
    rows["decisions"].append(rows["decisions"][0] | {"delivery_id": "D9", "family": 2, "decision": "withdraw"})
    first, second, *_ = sheet_of(rows, publish)["items"]
    assert first["said"] == ["A: accepted as V", "B: split, V accepted; F as noise"]
    assert second["said"] == []


def test_a_recording_without_families_has_an_empty_sheet(rows, publish):
    """Where nothing was found there is nothing to decide, and no error."""
    rows["review_sheet"].clear()
    rows["review_effort"].clear()
    sheet = sheet_of(rows, publish)
    assert sheet["items"] == [] and sheet["effort"] is None


def test_a_family_found_as_several_classes_can_be_split(rows, publish):
    """Its parts are the classes found in it, each with its beats; a family of one class has none."""
    parts = {item["family"]: item["parts"] for item in sheet_of(rows, publish)["items"]}
    assert parts == {1: [("V", 600), ("F", 40)], 2: [], 0: [("N", 5000), ("S", 120)]}


def test_each_part_of_a_family_stands_with_a_strip_that_shows_it(rows, publish):
    """A strip with a beat of the family that was found as the part's class comes before others, however many there are."""
    strips = [row for row in rows["strips"] if row["recording_id"] == RECORDING]
    for row in strips[:3]:
        row["beat_classes"] = ["V" if kind == "S" else kind for kind in row["beat_classes"]]
        row["beat_families"] = [1 if kind == "V" else 0 for kind in row["beat_classes"]]
    last = strips[2]
    last["beat_classes"] = ["F" if kind == "V" else kind for kind in last["beat_classes"]]
    first = sheet_of(rows, publish)["items"][0]
    assert first["parts"] == [("V", 600), ("F", 40)]
    assert [strip["first_sample"] for strip in first["strips"]] == [strips[0]["first_sample"], last["first_sample"]]
