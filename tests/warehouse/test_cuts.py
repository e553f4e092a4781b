"""A cut keeps a publication for good: its bytes, its inputs, and the proof that its numbers still follow from them."""

import shutil
from pathlib import Path
from typing import Any

import pytest

from warehouse import cuts, ledger
from warehouse.cuts import CutError
from warehouse.ledger import Damage
from warehouse.publish import publish
from warehouse.published import Published


def _publish(lake: Any) -> Path:
    published = lake.folder / "published"
    with lake.built() as build:
        publish(build, published, site=lambda _, folder: folder.mkdir(), stamp={"version": "1"})
    return published


@pytest.fixture
def programme(lake: Any) -> Any:
    """A published programme with one recording, and its settings file."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-03T00:00")
    (lake.folder / "programme.toml").write_text("[programme]\n")
    lake.inputs = [lake.folder / "programme.toml"]
    return lake


def test_a_cut_outlives_the_publication_it_was_made_from(programme: Any) -> None:
    """After new data were published and the lake was tidied, the cut still answers with its own numbers."""
    published = _publish(programme)
    cut = cuts.freeze(published, "interim-1", programme.inputs, reason="interim analysis")
    programme.recording("R1", "P1", "2026-05-01T00:00", "2026-05-04T00:00", v_beats=1)
    programme.wears.pop()
    _publish(programme)
    ledger.tidy(programme.folder / "lake", -1, keep=cuts.kept_parts(published))
    assert cuts.damages(published, "interim-1") == []
    assert Published(published, edition=cut).frame("FROM wear_days").height == 2
    assert Published(published).frame("FROM wear_days").height == 3
    assert (cut / "inputs" / "programme.toml").read_text() == "[programme]\n"


def test_every_number_of_a_cut_comes_out_of_its_parts_again(programme: Any) -> None:
    """A build from the parts of the cut gives its tables byte for byte; one from other parts names what moved."""
    published = _publish(programme)
    cuts.freeze(published, "lock", programme.inputs)
    programme.recording("R2", "P1", "2026-05-07T00:00", "2026-05-08T00:00")
    programme.wears.pop()
    frozen = cuts.cut_parts(published, "lock")
    assert len(frozen) < len(programme.ledger.parts())
    programme.ledger.parts = lambda: frozen
    with programme.built() as build:
        assert cuts.moved_tables(published, "lock", build) == []
        build.connection.execute("UPDATE anew.wear_days SET v_beats = v_beats + 1 WHERE local_day = '2026-05-01'")
        assert cuts.moved_tables(published, "lock", build) == ["wear_days"]
    assert [path.name for path in (published / "cuts").iterdir()] == ["lock"]


def test_freezing_the_same_again_changes_no_byte(programme: Any) -> None:
    """A second freeze under the same name is the same cut; of another publication it is refused."""
    published = _publish(programme)
    cut = cuts.freeze(published, "lock", programme.inputs)
    before = {path: path.read_bytes() for path in cut.rglob("*") if path.is_file()}
    cuts.freeze(published, "lock", programme.inputs)
    assert {path: path.read_bytes() for path in cut.rglob("*") if path.is_file()} == before
    programme.recording("R2", "P1", "2026-05-07T00:00", "2026-05-08T00:00")
    _publish(programme)
    with pytest.raises(CutError, match="cut lock exists and holds another publication"):
        cuts.freeze(published, "lock", programme.inputs)
    assert [path.name for path in (published / "cuts").iterdir()] == ["lock"]


def test_a_cut_is_the_same_bytes_whatever_was_published_before(make_lake: type, tmp_path: Path) -> None:
    """A publication over an earlier one and one from nothing freeze to the same files, the database among them."""
    for name in ("over an earlier one", "from nothing"):
        lake = make_lake(tmp_path / name)
        for code in ("P1", "P2"):
            lake.patient(code)
            lake.recording(f"{code}-1", code, "2026-05-01T00:00", "2026-05-03T00:00")
        if name == "over an earlier one":
            _publish(lake)
        lake.recording("P1-2", "P1", "2026-06-01T00:00", "2026-06-03T00:00", v_beats=9)
        standing = Published(lake.folder / "published") if name == "over an earlier one" else None
        with lake.built(standing=standing) as build:
            assert build.kept == ({"P2"} if standing else set())
            publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
        cuts.freeze(lake.folder / "published", "lock", [])
    a, b = (tmp_path / name / "published" / "cuts" / "lock" for name in ("over an earlier one", "from nothing"))
    files = [path.relative_to(a) for path in sorted(a.rglob("*")) if path.is_file()]
    assert Path("burdenline.duckdb") in files
    assert [file for file in files if (a / file).read_bytes() != (b / file).read_bytes()] == []


def test_a_freeze_that_fails_leaves_nothing(programme: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without room on the disk no cut and no half one is there, and the words say so."""
    published = _publish(programme)

    def full(*_: object, **__: object) -> None:
        raise shutil.Error([("a", "b", "[Errno 28] No space left on device: 'b'"), ("c", "d", "the same")])

    monkeypatch.setattr(shutil, "copytree", full)
    with pytest.raises(
        CutError, match=r"lock could not be written: \[Errno 28\] No space left on device: 'b'; nothing was"
    ):
        cuts.freeze(published, "lock", programme.inputs)
    assert cuts.cut_names(published) == []
    assert not list((published / "cuts").glob("*"))


def test_every_damage_to_a_cut_is_named(programme: Any) -> None:
    """A changed table, a changed input, a removed page, an added file and a changed part are each found."""
    published = _publish(programme)
    cut = cuts.freeze(published, "lock", programme.inputs)
    (cut / "inputs" / "programme.toml").write_text("[programme]\nzone = 'UTC'\n")
    (cut / "tables" / "wear_days.parquet").write_bytes(b"x")
    (cut / "tables" / "hours.parquet" / "00.parquet").unlink()
    (cut / "note.txt").write_text("mine")
    with (cut / "burdenline.duckdb").open("ab") as database:
        database.write(b"x")
    part = programme.ledger.parts("quarter_hours")[0].path
    (programme.folder / "lake" / part).write_bytes(b"x")
    assert cuts.damages(published, "lock") == [
        Damage("burdenline.duckdb", "bytes changed after the cut"),
        Damage("burdenline_duckdb1.duckdb", "bytes changed after the cut"),
        Damage("inputs/programme.toml", "bytes changed after the cut"),
        Damage("note.txt", "was added after the cut"),
        Damage("tables/hours.parquet/00.parquet", "missing"),
        Damage("tables/wear_days.parquet", "bytes changed after the cut"),
        Damage(part, "bytes changed after the cut"),
    ]


@pytest.mark.parametrize("name", ["../x", "", ".x", "a b"])
def test_a_name_that_is_no_plain_folder_is_refused(programme: Any, name: str) -> None:
    """A cut's name is one plain path element."""
    published = _publish(programme)
    with pytest.raises(CutError, match="expected letters"):
        cuts.freeze(published, name, [])


def test_an_unknown_cut_comes_with_those_that_exist(programme: Any) -> None:
    """The message lists the cuts of the programme."""
    published = _publish(programme)
    cuts.freeze(published, "lock", [])
    with pytest.raises(CutError, match=r"no cut 'lok' .* there are: lock"):
        cuts.damages(published, "lok")
