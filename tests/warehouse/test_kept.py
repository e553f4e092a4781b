"""Rows taken over from the standing edition: the same tables as without it, and only what did not change is kept."""

import tempfile
from collections.abc import Callable
from datetime import date, datetime
from pathlib import Path
from typing import Any

import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from warehouse import schema
from warehouse.build import TrendBuild
from warehouse.edition_tables import write_tables
from warehouse.publish import publish
from warehouse.published import Published

CODES = ("P1", "P2", "P3")


def _land(lake: Any, code: str, number: int, seed: int) -> None:
    """A recording of two days whose seconds are fractions that no binary number holds."""
    n = pl.int_range(pl.len()) * (seed + 1)
    first = _first_day(code) + 2 * number
    lake.recording(
        f"{code}-{number}", code, f"2026-05-{first:02}T05:00", f"2026-05-{first + 2:02}T11:00",
        recorded_s=900.0, worn_s=900 - n % 7 / 10, analysable_s=899 - n % 11 / 10, rr_sum_s=880 + n % 13 / 10,
        v_beats=n % 17,
    )  # fmt: skip
    begin = datetime.fromisoformat(f"2026-05-{first:02}T07:00")
    run = {
        "recording_id": f"{code}-{number}",
        "fingerprint": "f1",
        "episode_kind": "run",
        "segment": 0,
        "start_utc": begin,
    }
    found = {"first_sample": 9, "last_sample": 99, "beat_count": 60, "rate_bpm": 90.0 + seed, "duration_s": 40.0}
    lake.land("episodes", f"{code}-{number}", [run | found], fingerprint="f1")


def _first_day(code: str) -> int:
    return 1 + 8 * CODES.index(code)


def _land_again(lake: Any, code: str, seed: int) -> None:
    lake.wears = [wear for wear in lake.wears if wear["recording_id"] != f"{code}-0"]
    _land(lake, code, 0, seed)


def _register_therapy(lake: Any, code: str, seed: int) -> None:
    lake.therapy(code, f"2026-05-{2 + seed % 5:02}", settling_days=seed % 3)


def _move(lake: Any, code: str, seed: int) -> None:
    lake.patients[code] = ("UTC", "Europe/Lisbon", "Asia/Kathmandu")[seed % 3]


def _give_to_another(lake: Any, code: str, seed: int) -> None:
    lake.wears[seed % len(lake.wears)]["patient_code"] = code


def _over_read(lake: Any, code: str, seed: int) -> None:
    instant = datetime.fromisoformat(f"2026-05-{_first_day(code):02}T06")
    beat = {"recording_id": f"{code}-0", "segment": 0, "sample": 0, "beat_utc": instant}
    found = {"fingerprint": "f1", "beat_class": "V", "is_escape": False, "is_analysable": True}
    lake.land("beats", f"{code}-0", [beat | found], fingerprint="f1")
    said = {"delivery_id": f"D{seed}", "reader_code": "qa-1", "reviewed_utc": datetime.fromisoformat("2026-06-01T00")}
    lake.land("reviews", f"D{seed}", [beat | said | {"read_fingerprint": "f1", "decision": "N"}])


def _withdraw(lake: Any, code: str, seed: int) -> None:
    lake.ledger.commit({(table, f"{code}-1"): [] for table in ("recordings", "quarter_hours")})


EDITS: tuple[Callable[[Any, str, int], None], ...] = (
    _land_again, _register_therapy, _move, _give_to_another, _over_read, _withdraw,
)  # fmt: skip


def _programme(make_lake: type, folder: Path) -> Any:
    lake = make_lake(folder)
    for seed, code in enumerate(CODES):
        lake.patient(code, "Europe/Lisbon")
        for number in range(2):
            _land(lake, code, number, seed)
        lake.therapy(code, "2026-05-03")
    return lake


def _publish(lake: Any, standing: Published | None = None, **settings: Any) -> Published:
    with lake.built(standing=standing, **settings) as build:
        assert build.check() == []
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    return Published(lake.folder / "published")


def _tables(build: TrendBuild, folder: Path) -> dict[str, Any]:
    folder.mkdir()
    return write_tables(build, folder)


def _kept(build: TrendBuild) -> set[str]:
    return set(build.frame("kept.patients")["patient_code"])


edits = st.lists(st.tuples(st.sampled_from(EDITS), st.sampled_from(CODES), st.integers(0, 9)), min_size=1, max_size=4)


@settings(max_examples=8, deadline=None)
@given(edits=edits)
def test_a_build_over_a_standing_edition_has_the_tables_of_a_full_build(make_lake: type, edits: list[Any]) -> None:
    """Whatever changes, edition after edition, every file has the bytes of a build that takes nothing over, and its rows."""
    with tempfile.TemporaryDirectory() as name:
        lake = _programme(make_lake, Path(name))
        standing = _publish(lake)
        for edit, code, seed in edits:
            edit(lake, code, seed)
            standing = _publish(lake, standing)
        with lake.built() as build:
            assert _tables(build, lake.folder / "full") == standing.manifest["tables"]
        for name in (*schema.SLICED, "wear_days", "attention", "parts"):
            rows = standing.frame(f"FROM {name}").sort(schema.PUBLISHED[name].key)
            assert rows.equals(standing.table(name)), name


@pytest.mark.parametrize("edit", EDITS)
def test_only_patients_with_changes_are_built_anew(make_lake: type, tmp_path: Path, edit: Any) -> None:
    """A change of one patient leaves the quarter hours of the others unread."""
    lake = _programme(make_lake, tmp_path)
    standing = _publish(lake)
    edit(lake, "P2", 5)
    with lake.built(standing=standing) as build:
        kept = _kept(build)
        read = set(build.frame("lake.quarter_hours")["recording_id"].str.head(2))
    assert kept >= {"P1", "P3"} if edit is not _give_to_another else kept < set(CODES)
    assert "P2" not in kept
    assert not read & kept or edit is _give_to_another


def test_other_settings_build_every_patient_anew(make_lake: type, tmp_path: Path) -> None:
    """Nothing is taken over under another minimum of hours, or from an edition with a damaged table."""
    lake = _programme(make_lake, tmp_path)
    standing = _publish(lake)
    with lake.built(standing=standing) as build:
        assert _kept(build) == set(CODES)
    with lake.built(standing=standing, min_analysable_h_per_day=3.0) as build:
        assert _kept(build) == set()
    table = next(iter(standing.files("hours")))
    table.write_bytes(table.read_bytes()[:-1] + b"?")
    with lake.built(standing=standing) as build:
        assert _kept(build) == set()
        assert build.frame("wear_days")["local_day"].min() == date(2026, 5, 1)
