"""The over-read sheet: families in order, strips beside them, letters that can be relabelled."""

from __future__ import annotations

from dashboards import review
from dashboards.tables import Tables

RECORDING = "CN0000-20260302"


def sheet_of(rows, publish) -> dict:
    tables = Tables(publish(rows))
    (recording,) = (row for row in tables.whole("recordings").rows(named=True) if row["recording_id"] == RECORDING)
    return review.context(tables, recording)


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


def test_the_goal_is_the_first_row_that_settles_enough(rows, publish):
    """The headline counts the decisions after which 95 % of the ventricular beats are settled."""
    # Source: the running sum of the sheet: 88.8 % after one family, 100 % after two
    assert sheet_of(rows, publish)["goal"]["review_rank"] == 2


def test_a_recording_without_families_has_an_empty_sheet(rows, publish):
    """Where nothing was found there is nothing to decide, and no error."""
    rows["review_sheet"].clear()
    sheet = sheet_of(rows, publish)
    assert sheet["items"] == [] and sheet["goal"] is None
