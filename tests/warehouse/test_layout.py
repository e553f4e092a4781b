"""Lakes of other layouts: an older one is brought up with a copy kept, a newer one is refused and left alone."""

from pathlib import Path
from typing import Any

import pytest

from warehouse import layout
from warehouse.layout import LayoutError, migrate, note_layout
from warehouse.ledger import Ledger
from warehouse.parts import write_whole


def _files(folder: Path) -> dict[str, bytes]:
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def _note_that(line: str) -> Any:
    """A made-up step: adds a line to a note in the lake, once."""

    def step(lake: Path) -> None:
        note = lake / "note.txt"
        before = note.read_text() if note.exists() else ""
        write_whole(note, (before.replace(line, "") + line).encode())

    return step


@pytest.fixture
def two_steps(monkeypatch: pytest.MonkeyPatch) -> None:
    """A program whose present layout is 3, with made-up steps from 1."""
    monkeypatch.setattr(layout, "LAYOUT", 3)
    monkeypatch.setattr(layout, "MIGRATIONS", {1: _note_that("one to two\n"), 2: _note_that("two to three\n")})


@pytest.fixture
def older(programme: Any) -> Path:
    """A lake of layout 1 with landed parts."""
    note_layout(programme.folder / "lake", 1)
    return programme.folder / "lake"


@pytest.mark.usefixtures("two_steps")
def test_an_older_lake_is_brought_up_with_a_copy_kept(older: Path) -> None:
    """All steps are taken in order, the parts stay in force, and the copy has the bytes of before."""
    before = _files(older)
    copy = migrate(older)
    assert copy == older.with_name("lake.layout-1")
    assert _files(copy) == before
    assert (older / "note.txt").read_text() == "one to two\ntwo to three\n"
    assert {part.key for part in Ledger(older).parts("recordings")} == {"R1", "R2"}
    assert migrate(older) is None


@pytest.mark.usefixtures("two_steps")
def test_a_killed_migration_is_gone_on_with(older: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The copy of before is kept as it was, and steps that were taken are not taken again."""
    before, second = _files(older), layout.MIGRATIONS[2]

    def killed(lake: Path) -> None:
        second(lake)
        raise KeyboardInterrupt

    monkeypatch.setitem(layout.MIGRATIONS, 2, killed)
    with pytest.raises(KeyboardInterrupt):
        migrate(older)
    with pytest.raises(LayoutError, match=r"layout 2; this version reads layout 3.*burdenline run"):
        Ledger(older)
    monkeypatch.setitem(layout.MIGRATIONS, 2, second)
    migrate(older)
    assert _files(older.with_name("lake.layout-1")) == before
    assert (older / "note.txt").read_text() == "one to two\ntwo to three\n"


@pytest.mark.usefixtures("two_steps")
def test_an_older_lake_is_not_opened_before_it_is_brought_up(older: Path) -> None:
    """Reading it is refused with both numbers and the command that migrates it."""
    with pytest.raises(LayoutError, match=r"layout 1; this version reads layout 3.*burdenline run"):
        Ledger(older)


def test_a_newer_lake_is_refused_and_left_alone(older: Path) -> None:
    """Both layout numbers are named, and no byte is changed."""
    note_layout(older, 7)
    before = _files(older)
    for work in (Ledger, migrate):
        with pytest.raises(LayoutError, match=r"layout 7; this version reads layout 1"):
            work(older)
    assert _files(older) == before


def test_a_layout_without_steps_is_refused(older: Path) -> None:
    """Without a step from an old layout nothing is tried."""
    note_layout(older, 0)
    with pytest.raises(LayoutError, match="no step from layout 0"):
        migrate(older)
    assert not list(older.parent.glob("*layout-*"))


def test_a_damaged_layout_file_is_named(older: Path) -> None:
    """A file without a number is said with its path."""
    (older / "layout.json").write_text("{}")
    with pytest.raises(LayoutError, match=r"layout\.json does not hold a number"):
        Ledger(older)
