"""A publication is switched in one step, the same when nothing changed, and whole after a kill or a full disk."""

import json
import os
import re
import resource
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path
from typing import Any

import pytest

from warehouse import cuts, ledger, schema
from warehouse.publish import PublishError, publish
from warehouse.published import Published, QueryError


def _site(published: Published, folder: Path) -> None:
    folder.mkdir()
    (folder / "index.html").write_text(f"{published.table('wear_days').height} wear days")


def _publish(lake: Any, stamp: dict[str, Any] | None = None, fingerprint: str = "f1") -> bool:
    with lake.built(fingerprint) as build:
        return publish(build, lake.folder / "published", site=_site, stamp=stamp or {"version": "1"})


def test_publishing_the_same_again_switches_nothing(programme: Any) -> None:
    """The same tables and stamp are the same edition; another stamp or another number is a new one."""
    assert _publish(programme)
    link = (programme.folder / "published" / "current").readlink()
    assert not _publish(programme)
    assert (programme.folder / "published" / "current").readlink() == link
    assert _publish(programme, stamp={"version": "2"})
    assert (programme.folder / "published" / "site" / "index.html").read_text() == "5 wear days"
    programme.recording("R3", "P1", "2026-06-03T00:00", "2026-06-04T00:00")
    assert _publish(programme, stamp={"version": "2"})
    assert (programme.folder / "published" / "site" / "index.html").read_text() == "7 wear days"


def test_the_same_tables_make_the_same_bytes(programme: Any, tmp_path: Path) -> None:
    """Two publications of one lake have an equal database, Parquet tables, pages and manifest, byte for byte."""
    for name in ("a", "b"):
        with programme.built() as build:
            publish(build, tmp_path / name, site=_site, stamp={})
    a, b = (tmp_path / name / "current" for name in ("a", "b"))
    files = {path.relative_to(a.resolve()) for path in a.resolve().rglob("*") if path.is_file()}
    assert len(files) > len(schema.PUBLISHED)
    for file in files:
        assert (a / file).read_bytes() == (b / file).read_bytes(), file


def test_a_first_publication_has_slices_without_a_patient(programme: Any) -> None:
    """Patients fall into slices by a checksum, and a slice that none falls into is a file without rows."""
    with programme.built() as build:
        build.slices = 64
        publish(build, programme.folder / "published", site=_site, stamp={})
    published = Published(programme.folder / "published")
    assert min(told["rows"] for told in published.files("hours").values()) == 0
    assert published.table("hours").height > 0


def test_an_open_reader_stays_with_its_edition(programme: Any) -> None:
    """A reader that opened before a switch sees the old tables to the end, a new one sees the new ones."""
    _publish(programme)
    before = Published(programme.folder / "published")
    assert before.frame("FROM recordings").height == 2
    programme.recording("R3", "P1", "2026-06-03T00:00", "2026-06-04T00:00")
    _publish(programme)
    assert before.frame("FROM recordings").height == before.table("recordings").height == 2
    assert Published(programme.folder / "published").table("recordings").height == 3


def test_old_editions_go_when_two_newer_ones_stand(programme: Any) -> None:
    """The standing edition and the one before are kept, nothing else."""
    for version in "123":
        _publish(programme, stamp={"version": version})
    editions = list((programme.folder / "published" / ".editions").iterdir())
    assert len(editions) == 2


def test_a_moved_programme_folder_still_answers(programme: Any, tmp_path: Path) -> None:
    """Beats are found from the published folder's place, wherever the programme folder is and whoever asks."""
    _publish(programme)
    inside = tmp_path / "inside"
    inside.mkdir()
    for name in ("lake", "published"):
        (programme.folder / name).rename(inside / name)
    inside = inside.rename(tmp_path / "moved")
    published = Published(inside / "published")
    assert published.frame("FROM beats").height == published.table("beats").height == 9
    asked = (
        "import duckdb; print(duckdb.connect('burdenline.duckdb', read_only=True).sql('from beats').fetchall()[0][0])"
    )
    answer = subprocess.run(
        [sys.executable, "-c", asked], cwd=inside / "published", capture_output=True, text=True, check=True
    )
    assert answer.stdout == "R1\n"


@pytest.mark.parametrize("name", ["it's", "two words", "Grün", "100 #1", "tag=1", "a+b:c"])
def test_a_programme_folder_may_have_any_plain_name(make_lake: Any, tmp_path: Path, name: str) -> None:
    """Blanks, quotes, letters beyond ASCII and signs in the path change nothing for tables, views, cuts and tidying."""
    lake = make_lake(tmp_path / name)
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    lake.land("beats", "R1", [{"recording_id": "R1", "fingerprint": "f1", "segment": 0, "sample": 1}], fingerprint="f1")
    _publish(lake)
    published = Published(tmp_path / name / "published")
    assert published.frame("FROM beats").height == published.table("beats").height == 1
    assert published.frame("FROM wear_days").equals(published.table("wear_days"))
    cuts.freeze(tmp_path / name / "published", "lock", [])
    assert cuts.damages(tmp_path / name / "published", "lock") == ledger.verify(tmp_path / name / "lake") == []
    assert ledger.tidy(tmp_path / name / "lake", -1) == []


def test_a_lake_that_was_moved_away_is_missed_with_its_place(programme: Any) -> None:
    """Trend tables still answer without the lake; a query over beats says where it has to be."""
    _publish(programme)
    published = Published(programme.folder / "published")
    (programme.folder / "lake").rename(programme.folder / "elsewhere")
    assert published.frame("FROM wear_days").height == 5
    with pytest.raises(QueryError, match=re.escape(f"put the lake back at {programme.folder / 'lake'}")):
        published.frame("FROM beats")


def test_a_foreign_file_in_the_place_of_a_link_is_not_overwritten(programme: Any) -> None:
    """A user's own file with the name of a published piece stops the switch with its path."""
    (programme.folder / "published").mkdir()
    (programme.folder / "published" / "site").mkdir()
    with pytest.raises(PublishError, match="site is not a link"):
        _publish(programme)


def test_a_damaged_edition_is_written_again(programme: Any) -> None:
    """A byte that changed in the database or a table is mended by the next publication of the same tables."""
    _publish(programme)
    published = Published(programme.folder / "published")
    for path in (published.edition / "burdenline.duckdb", next(iter(published.files("hours")))):
        whole = path.read_bytes()
        path.write_bytes(whole[:-9] + b"?" + whole[-8:])
        with programme.built(standing=Published(programme.folder / "published")) as build:
            assert not publish(build, programme.folder / "published", site=_site, stamp={"version": "1"})
        assert path.read_bytes() == whole
    assert len(list((programme.folder / "published" / ".editions").iterdir())) == 1


def test_every_file_of_an_edition_is_on_the_disk_before_it_stands(
    programme: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Files and folders are flushed, then the link is renamed, then its folder is flushed."""
    published = programme.folder / "published"
    order: list[int | Path] = []  # inode of what is flushed, target of what is renamed
    flush, rename = os.fsync, Path.replace

    def noted_flush(descriptor: int) -> None:
        order.append(os.fstat(descriptor).st_ino)
        flush(descriptor)

    def noted_rename(path: Path, target: Path) -> Path:
        order.append(target)
        return rename(path, target)

    monkeypatch.setattr(os, "fsync", noted_flush)
    monkeypatch.setattr(Path, "replace", noted_rename)
    _publish(programme)
    edition, switch = (published / "current").resolve(), order.index(published / "current")
    assert {path.stat().st_ino for path in (edition, *edition.rglob("*"))} <= set(order[:switch])
    assert edition.parent.stat().st_ino in order[:switch]
    assert published.stat().st_ino in order[switch:]


def test_a_site_that_fails_leaves_the_standing_edition(programme: Any) -> None:
    """An error while pages are written changes nothing of what is published."""
    _publish(programme)
    before = (programme.folder / "published" / "current").readlink()

    def broken(_: Published, folder: Path) -> None:
        raise OSError(28, "No space left on device", str(folder))

    with programme.built() as build, pytest.raises(PublishError, match=r"No space left .* the one before stays"):
        publish(build, programme.folder / "published", site=broken, stamp={"version": "2"})
    assert (programme.folder / "published" / "current").readlink() == before
    assert Published(programme.folder / "published").frame("FROM wear_days").height == 5


def test_a_disk_that_is_too_small_leaves_the_standing_edition(programme: Any) -> None:
    """A database file that cannot grow is a failure with words; nothing half-written is left."""
    _publish(programme)
    before = (programme.folder / "published" / "current").readlink()
    limit = resource.getrlimit(resource.RLIMIT_FSIZE)
    too_big = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    with programme.built() as build:
        resource.setrlimit(resource.RLIMIT_FSIZE, (300_000, limit[1]))
        try:
            with pytest.raises(PublishError, match=r"could not be written to .* the one before stays"):
                publish(build, programme.folder / "published", site=_site, stamp={"version": "2"})
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, limit)
            signal.signal(signal.SIGXFSZ, too_big)
    assert (programme.folder / "published" / "current").readlink() == before
    assert [path.name for path in (programme.folder / "published" / ".editions").iterdir()] == [before.name]
    assert Published(programme.folder / "published").frame("FROM wear_days").height == 5


@pytest.mark.parametrize("delay_ms", [5, 40, 90, 160, 300])
def test_a_killed_publication_leaves_a_whole_one(programme: Any, delay_ms: int) -> None:
    """After a kill at any moment tables, pages and database are of one edition, and the next publication succeeds."""
    _publish(programme, stamp={"version": 0})
    program = textwrap.dedent(
        """
        import itertools, sys
        sys.path.insert(0, sys.argv[2])
        from pathlib import Path
        from conftest import Lake
        from warehouse.publish import publish
        lake = Lake(Path(sys.argv[1]))
        lake.patient("P1")
        def site(published, folder):
            folder.mkdir()
            (folder / "index.html").write_text(str(published.manifest["stamp"]["version"]))
        print("ready", flush=True)
        for version in itertools.count(1):
            with lake.built() as build:
                publish(build, lake.folder / "published", site=site, stamp={"version": version})
        """
    )
    here = str(Path(__file__).parent)
    process = subprocess.Popen(
        [sys.executable, "-c", program, str(programme.folder), here], stdout=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    with process.stdout:
        process.stdout.readline()
        time.sleep(delay_ms / 1000)
        process.send_signal(signal.SIGKILL)
    process.wait()
    folder = programme.folder / "published"
    published = Published(folder)
    version = json.loads((folder / "manifest.json").read_text())["stamp"]["version"]
    assert version == 0 or (folder / "site" / "index.html").read_text() == str(version)
    assert published.frame("FROM recordings").height == published.table("recordings").height
    assert _publish(programme, stamp={"version": "after"})
    assert not list((folder / ".editions").glob(".staging*"))
    assert os.path.lexists(folder / "burdenline.duckdb")
