"""Every edit of the register and the settings is kept with its old and new value, in order, and published."""

from datetime import datetime
from typing import Any

import polars as pl
import pytest

from warehouse.audit import Change, change_loads, changes, note_inputs, register_inputs, settings_inputs

NOON = datetime.fromisoformat("2026-06-01T12:00")


def _inputs(wears: pl.DataFrame, min_h: float = 10.0) -> pl.DataFrame:
    settings = settings_inputs("programme.toml", {"wear": {"min_analysable_h_per_day": min_h}})
    return pl.concat([register_inputs("wears.csv", wears, ["device_serial", "from_local"]), settings])


WEARS = pl.DataFrame(
    {"device_serial": ["A", "B"], "from_local": ["1", "2"], "patient_code": ["P1", "P2"], "to_local": ["", "9"]}
)


@pytest.fixture
def noted(lake: Any) -> Any:
    """A lake that has seen the register once."""
    assert note_inputs(lake.ledger, lake.folder / "lake", _inputs(WEARS), actor_code="ann", noticed_utc=NOON) == 0
    return lake


def _changes(lake: Any) -> list[tuple[Any, ...]]:
    found = changes(lake.ledger, lake.folder / "lake")
    return found.select("change_kind", "subject", "old_value", "new_value").rows()


def test_the_first_look_is_no_change(noted: Any) -> None:
    """Inputs seen for the first time, or again without an edit, append nothing and commit nothing."""
    version = noted.ledger.version
    note_inputs(noted.ledger, noted.folder / "lake", _inputs(WEARS), actor_code="ann", noticed_utc=NOON)
    assert _changes(noted) == []
    assert noted.ledger.version == version


def test_an_edit_is_kept_with_both_values(noted: Any) -> None:
    """A re-assigned wear, a filled blank, a removed row and a changed setting are each one change per value."""
    edited = WEARS.head(1).with_columns(pl.lit("P9").alias("patient_code"), pl.lit("8").alias("to_local"))
    count = note_inputs(noted.ledger, noted.folder / "lake", _inputs(edited, 12.0), actor_code="bob", noticed_utc=NOON)
    assert count == 7
    assert set(_changes(noted)) == {
        ("register", "wears.csv A 1 patient_code", "P1", "P9"),
        ("register", "wears.csv A 1 to_local", None, "8"),
        ("register", "wears.csv B 2 device_serial", "B", None),
        ("register", "wears.csv B 2 from_local", "2", None),
        ("register", "wears.csv B 2 patient_code", "P2", None),
        ("register", "wears.csv B 2 to_local", "9", None),
        ("settings", "programme.toml wear min_analysable_h_per_day", "10.0", "12.0"),
    }
    assert changes(noted.ledger, noted.folder / "lake")["actor_code"].unique().to_list() == ["bob"]


def test_earlier_changes_stay(noted: Any) -> None:
    """Changing a value and changing it back are two changes, one after the other."""
    for hour, min_h in ((13, 12.0), (14, 10.0)):
        note_inputs(
            noted.ledger,
            noted.folder / "lake",
            _inputs(WEARS, min_h),
            actor_code=None,
            noticed_utc=NOON.replace(hour=hour),
        )
    assert [(old, new) for *_, old, new in _changes(noted)] == [("10.0", "12.0"), ("12.0", "10.0")]


def test_the_publication_lists_changes_deliveries_and_reviews(noted: Any) -> None:
    """The published table holds what was appended beside the deliveries and reviews, which are their own history."""
    promotion = Change("promotion", "f2", "f1", "f2", "fewer false beats")
    noted.ledger.commit(change_loads(noted.folder / "lake", [promotion], actor_code="ann", happened_utc=NOON))
    noted.land(
        "deliveries", "00", [{"delivery_id": "D1", "file_name": "x.edf", "status": "waiting", "reason": "no wear"}]
    )
    decided = {"recording_id": "R1", "decision_subject": "family", "family": 3, "decision": "N", "note": "looks sinus"}
    noted.land("decisions", "D2", [{"delivery_id": "D2", "decision_order": 0, "reader_code": "A", **decided}])
    with noted.built() as build:
        rows = build.frame("audit").select("change_kind", "subject", "new_value", "reason").rows()
        assert build.check() == []
    assert set(rows) == {
        ("promotion", "f2", "f2", "fewer false beats"),
        ("delivery", "x.edf", "waiting", "no wear"),
        ("review", "R1 family 3", "N", "looks sinus"),
    }
