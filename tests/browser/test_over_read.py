"""The over-read sheet in a real browser: decide, keep, save, load."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema
import pytest

import dashboards

SHEET, OTHER = "review/CN0000-20260302.html", "review/CN0001-20260320.html"
SCHEMA = json.loads((Path(dashboards.__file__).parent / "assets" / "decisions.schema.json").read_text("utf-8"))


def progress(page) -> str:
    return page.locator("#progress").inner_text()


def save(page, folder: Path) -> Path:
    with page.expect_download() as download:
        page.get_by_role("button", name="Save decisions").click()
    kept = folder / download.value.suggested_filename
    download.value.save_as(kept)
    return kept


@pytest.fixture
def decided(visit):
    """A sheet on which the first family is accepted, the second relabelled, and one beat called noise."""
    page = visit.open(SHEET)
    page.keyboard.press("j")
    page.keyboard.press("a")
    page.keyboard.press("s")
    page.locator(".mark[data-sample]").nth(1).focus()
    page.keyboard.press("x")
    page.locator(".episode").first.get_by_role("button", name="Reject").click()
    page.get_by_label("Reader code").fill("R-07")
    return page


def test_keys_decide_and_tell_what_is_settled(decided):
    """Two keys decide two families; the sheet tells the share of the burden they settle."""
    # Source: the invented sheet: shares 88.8 % and 11.2 %
    assert "100.0 % of the ventricular beats settled, 2 of 3 families decided, 1 single beat relabelled" in progress(
        decided
    )


def test_a_mixed_family_that_was_found_as_one_class_is_left_open(decided):
    """One key marks it; its share is told as open, not as settled, and a decision takes the mark away."""
    second = decided.locator(".item").nth(1)
    second.focus()
    decided.keyboard.press("d")
    assert "88.8 % of the ventricular beats settled" in progress(decided)
    assert "1 left open with 11.2 %" in progress(decided)
    assert second.get_by_text("Left open").is_visible()
    decided.keyboard.press("a")
    assert "100.0 % of the ventricular beats settled" in progress(decided)


def test_a_split_family_is_decided_part_by_part(decided, tmp_path):
    """Three keys split a family and decide its two parts; the file names them, and it loads again."""
    first = decided.locator(".item").first
    first.focus()
    for key in "dva":
        decided.keyboard.press(key)
    assert "100.0 % of the ventricular beats settled, 2 of 3 families decided" in progress(decided)
    kept = save(decided, tmp_path)
    content = json.loads(kept.read_text("utf-8"))
    jsonschema.validate(content, SCHEMA)
    family = content["families"][0]
    assert (family["family"], family["is_mixed"]) == (1, True)
    assert [tuple(part.values()) for part in family["parts"]] == [("V", 600, "accept"), ("F", 40, "accept")]
    before = progress(decided)
    decided.get_by_role("button", name="Start over").click()
    decided.locator("#load").set_input_files(kept)
    decided.get_by_text("Loaded.").wait_for()
    assert progress(decided) == before


def test_an_undecided_part_leaves_the_family_open(decided):
    """Undo on a part opens it again, and the family counts as open."""
    decided.locator(".item").first.focus()
    for key in "dva":
        decided.keyboard.press(key)
    decided.locator(".part").nth(1).focus()
    decided.keyboard.press("u")
    assert "1 left open with 88.8 %" in progress(decided)


def test_a_decision_of_an_earlier_file_is_withdrawn_with_a_key(decided, tmp_path):
    """A withdrawn family settles nothing and stands in the file as withdrawn."""
    decided.locator(".item").first.focus()
    decided.keyboard.press("w")
    assert "11.2 % of the ventricular beats settled, 1 of 3 families decided" in progress(decided)
    content = json.loads(save(decided, tmp_path).read_text("utf-8"))
    jsonschema.validate(content, SCHEMA)
    assert content["families"][0]["decision"] == "withdraw"


def test_a_family_of_the_same_shape_counts_as_settled(decided):
    """A family merged into a decided one is settled with it."""
    second = decided.locator(".item").nth(1)
    second.focus()
    decided.keyboard.press("u")
    assert "88.8 % of the ventricular beats settled" in progress(decided)
    second.get_by_label("has the same shape as").select_option("1")
    assert "100.0 % of the ventricular beats settled, 2 of 3" in progress(decided)


def test_decisions_survive_a_reload(decided):
    """What was decided stands after the page is loaded again."""
    before = progress(decided)
    decided.reload()
    assert progress(decided) == before
    assert decided.get_by_label("Reader code").input_value() == "R-07"


def test_undo_takes_a_decision_back(decided):
    """One key on a family makes it undecided again."""
    decided.locator(".item").first.focus()
    decided.keyboard.press("u")
    assert "1 of 3 families" in progress(decided)


def test_the_saved_file_keeps_to_its_schema(decided, tmp_path):
    """The file holds reader, recording, analysis and every decision, as the published schema describes."""
    content = json.loads(save(decided, tmp_path).read_text("utf-8"))
    jsonschema.validate(content, SCHEMA)
    assert (content["recording_id"], content["fingerprint"]) == ("CN0000-20260302", "f00dfeed")
    assert [(each["family"], each["decision"]) for each in content["families"]] == [(1, "accept"), (2, "S")]
    assert [each["decision"] for each in content["beats"]] == ["noise"]
    assert [(each["episode_kind"], each["decision"]) for each in content["episodes"]] == [("run", "reject")]


def test_nothing_is_saved_without_a_reader(visit):
    """A decision belongs to a reader: without a code the page asks for it."""
    page = visit.open(SHEET)
    page.get_by_role("button", name="Save decisions").click()
    assert "Enter your reader code" in page.locator("#review-note").inner_text()


def test_a_saved_file_loads_into_an_empty_sheet(decided, visit, tmp_path):
    """A file brings its decisions back after everything was cleared."""
    before, kept = progress(decided), save(decided, tmp_path)
    decided.get_by_role("button", name="Start over").click()
    assert progress(decided) == "Nothing decided yet"
    decided.locator("#load").set_input_files(kept)
    decided.get_by_text("Loaded.").wait_for()
    assert progress(decided) == before


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"recording_id": "CN9999-20260101"}, "belong to recording CN9999-20260101"),
        ({"fingerprint": "0ld"}, "another analysis"),
        ({"version": 3}, "has version 3"),
        ({"kind": "holiday plans"}, "not a file of over-read decisions"),
        (
            {"families": [{"family": 77, "automatic": "V", "decision": "accept"}]},
            "families that this sheet does not have",
        ),
        (
            {
                "families": [
                    {"family": 1, "automatic": "V", "decision": None, "parts": [{"automatic": "Q", "decision": "N"}]}
                ]
            },
            "parts of families that this sheet does not have",
        ),
        (
            {"beats": [{"segment": 0, "sample": 1, "automatic": "V", "decision": "maybe"}]},
            "decisions that do not exist",
        ),
        ({"episodes": None}, "not complete"),
    ],
)
def test_a_file_that_does_not_fit_changes_nothing(decided, tmp_path, change, said):
    """A file for another recording or analysis, newer, or edited is refused as a whole, with its reason."""
    kept = save(decided, tmp_path)
    kept.write_text(json.dumps(json.loads(kept.read_text("utf-8")) | change), "utf-8")
    before = progress(decided)
    decided.locator("#load").set_input_files(kept)
    decided.get_by_text("Not loaded").wait_for()
    assert said in decided.locator("#review-note").inner_text()
    assert progress(decided) == before


def test_decisions_of_one_recording_do_not_reach_another(decided, visit):
    """Each recording keeps its own decisions."""
    assert progress(visit.open(OTHER)) == "Nothing decided yet"
