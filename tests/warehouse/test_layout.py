"""Folders of other layouts: an older one is brought up with a copy kept, a newer one is refused and left alone."""

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
    """A made-up step: adds a line to a note in the register, once."""

    def step(folder: Path) -> None:
        note = folder / "register" / "note.txt"
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
    """A programme folder of layout 1 with landed parts, register and settings."""
    note_layout(programme.folder / "lake", 1)
    (programme.folder / "register").mkdir()
    (programme.folder / "register" / "note.txt").write_text("as it was\n")
    (programme.folder / "programme.toml").write_text("[programme]\n")
    return programme.folder


@pytest.mark.usefixtures("two_steps")
def test_an_older_lake_is_brought_up_with_a_copy_kept(older: Path) -> None:
    """All steps are taken in order, the parts stay in force, and the copy has the bytes of before."""
    before = _files(older)
    copy = migrate(older)
    assert copy == older / "layout-1"
    assert _files(copy) == before
    assert (older / "register" / "note.txt").read_text() == "as it was\none to two\ntwo to three\n"
    assert {part.key for part in Ledger(older / "lake").parts("recordings")} == {"R1", "R2"}
    assert migrate(older) is None


@pytest.mark.usefixtures("two_steps")
def test_a_killed_migration_is_gone_on_with(older: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The copy of before is kept as it was, and steps that were taken are not taken again."""
    before, second = _files(older), layout.MIGRATIONS[2]

    def killed(folder: Path) -> None:
        second(folder)
        raise KeyboardInterrupt

    monkeypatch.setitem(layout.MIGRATIONS, 2, killed)
    with pytest.raises(KeyboardInterrupt):
        migrate(older)
    with pytest.raises(LayoutError, match=r"layout 2; this is burdenline .*, which reads layout 3.*burdenline run"):
        Ledger(older / "lake")
    monkeypatch.setitem(layout.MIGRATIONS, 2, second)
    migrate(older)
    assert _files(older / "layout-1") == before
    assert (older / "register" / "note.txt").read_text() == "as it was\none to two\ntwo to three\n"


@pytest.mark.usefixtures("two_steps")
def test_an_older_lake_is_not_opened_before_it_is_brought_up(older: Path) -> None:
    """Reading it is refused with both numbers and the command that migrates it."""
    with pytest.raises(LayoutError, match=r"layout 1; this is burdenline .*, which reads layout 3.*burdenline run"):
        Ledger(older / "lake")


def test_a_newer_lake_is_refused_and_left_alone(older: Path) -> None:
    """Both layout numbers are named, and no byte is changed."""
    (older / "lake" / "layout.json").write_text('{"layout": 7, "burdenline": "9.1"}')
    before = _files(older)
    for work, path in ((Ledger, older / "lake"), (migrate, older)):
        with pytest.raises(
            LayoutError, match=r"burdenline 9\.1 wrote layout 7; this is burdenline .*, which reads layout 1"
        ):
            work(path)
    assert _files(older) == before


def test_a_layout_without_steps_is_refused(older: Path) -> None:
    """Without a step from an old layout nothing is tried."""
    note_layout(older / "lake", 0)
    with pytest.raises(LayoutError, match="no step from layout 0"):
        migrate(older)
    assert not list(older.glob("layout-*"))


def test_a_damaged_layout_file_is_named(older: Path) -> None:
    """A file without a number is said with its path."""
    (older / "lake" / "layout.json").write_text("{}")
    with pytest.raises(LayoutError, match=r"layout\.json does not hold a number"):
        Ledger(older / "lake")
