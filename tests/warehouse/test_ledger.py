"""The ledger makes loads visible whole, loses no commit, and finds what is damaged or left over."""

import os
import signal
import subprocess
import sys
import textwrap
import threading
import time
from pathlib import Path

import numpy as np
import polars as pl
import pytest

from warehouse import ledger
from warehouse.ledger import Ledger, LedgerError
from warehouse.parts import Part, write_part, write_signal


def _row_part(lake: Path, name: str, settings_json: str = "{}") -> Part:
    row = {"fingerprint": name, "detector_version": "1", "settings_json": settings_json}
    return write_part(lake, "fingerprints", name, pl.DataFrame([row]), fingerprint=name)


def _load(part: Part) -> dict[tuple[str, str], list[Part]]:
    return {(part.table, part.key): [part]}


def test_parts_are_invisible_before_their_commit(tmp_path: Path) -> None:
    """A written part is in force only after its load was committed."""
    book = Ledger(tmp_path)
    part = _row_part(tmp_path, "a")
    assert book.parts() == []
    assert book.commit(_load(part)) == book.version == 1
    assert Ledger(tmp_path).parts() == [part]


def test_a_commit_replaces_exactly_the_loads_it_names(tmp_path: Path) -> None:
    """A load holds the parts of its latest commit; other loads stay; an empty load is withdrawn."""
    book = Ledger(tmp_path)
    a, b, newer = _row_part(tmp_path, "a"), _row_part(tmp_path, "b"), _row_part(tmp_path, "a", "{1}")
    book.commit(_load(a) | _load(b))
    book.commit(_load(newer))
    assert book.parts() == [newer, b]
    book.commit({("fingerprints", "a"): []})
    assert book.parts("fingerprints") == [b]
    assert book.parts("fingerprints", "a") == book.parts("beats") == []


def test_fingerprints_stand_side_by_side(tmp_path: Path) -> None:
    """A load under another fingerprint replaces nothing; a withdrawal takes both; later loads count again."""
    book = Ledger(tmp_path)
    old, new = (write_part(tmp_path, "findings", "r", _findings(name), fingerprint=name) for name in ("old", "new"))
    book.commit(_load(old))
    book.commit(_load(new))
    assert book.parts("findings", "r") == [new, old]
    book.commit({("findings", "r"): []})
    assert book.parts() == []
    book.commit(_load(old))
    assert book.parts() == [old]


def _findings(fingerprint: str) -> pl.DataFrame:
    row = {"recording_id": "r", "fingerprint": fingerprint, "finding_code": "noisy", "finding_detail": "x"}
    return pl.DataFrame([row])


def test_signal_parts_come_in_order(tmp_path: Path) -> None:
    """Blocks are listed by segment and block, whatever order they were committed in."""
    book = Ledger(tmp_path)
    blocks = [write_signal(tmp_path, "r", s, b, np.full(9, 3 * s + b, np.int16)) for s, b in [(1, 0), (0, 11), (0, 2)]]
    book.commit({("signal", "r"): blocks})
    assert [(p.segment, p.block) for p in book.parts("signal", "r")] == [(0, 2), (0, 11), (1, 0)]


def test_history_is_dropped_and_the_parts_in_force_stay(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """After many more commits than the compaction limit the same parts are in force."""
    monkeypatch.setattr(ledger, "COMPACT_FILES", 4)
    book = Ledger(tmp_path)
    kept = {name: _row_part(tmp_path, name) for name in "abc"}
    for round_number in range(11):
        for name in "abc":
            kept[name] = _row_part(tmp_path, name, f"{round_number}")
            book.commit(_load(kept[name]))
    book.commit({("fingerprints", "b"): []})
    assert Ledger(tmp_path).parts() == [kept["a"], kept["c"]]
    assert book.version == 34


def test_two_committers_lose_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Commits of two writers at once are all in force afterwards, also across compactions."""
    monkeypatch.setattr(ledger, "COMPACT_FILES", 5)
    Ledger(tmp_path)

    def commit_many(writer: str) -> None:
        book = Ledger(tmp_path)
        for number in range(15):
            book.commit(_load(_row_part(tmp_path, f"{writer}{number}")))

    writers = [threading.Thread(target=commit_many, args=(name,)) for name in "xy"]
    for writer in writers:
        writer.start()
    for writer in writers:
        writer.join()
    assert {part.key for part in Ledger(tmp_path).parts()} == {f"{w}{n}" for w in "xy" for n in range(15)}
    assert Ledger(tmp_path).version == 30


def test_a_part_of_another_load_or_without_a_file_is_refused(tmp_path: Path) -> None:
    """What is committed belongs to the named load and is in the lake."""
    book = Ledger(tmp_path)
    part = _row_part(tmp_path, "a")
    with pytest.raises(LedgerError, match="belongs to load fingerprints/a"):
        book.commit({("fingerprints", "b"): [part]})
    with pytest.raises(LedgerError, match="is not in"):
        book.commit({("fingerprints", "a"): [part._replace(path="fingerprints/a/none.parquet")]})
    with pytest.raises(LedgerError, match="unknown lake table 'beast'"):
        book.commit({("beast", "a"): []})
    assert book.version == 0


def test_a_removed_ledger_is_told_apart_from_a_new_lake(tmp_path: Path) -> None:
    """Opening a lake whose ledger folder is gone says so and makes no empty one."""
    Ledger(tmp_path).commit(_load(_row_part(tmp_path, "a")))
    (tmp_path / "ledger").rename(tmp_path / "elsewhere")
    with pytest.raises(LedgerError, match=r"ledger is gone.*restore the ledger folder"):
        Ledger(tmp_path)
    (tmp_path / "elsewhere").rename(tmp_path / "ledger")
    assert len(Ledger(tmp_path).parts()) == 1


def test_a_moved_lake_keeps_its_parts(tmp_path: Path) -> None:
    """Paths in the ledger are relative to the lake, so a lake can be moved."""
    Ledger(tmp_path / "old").commit(_load(_row_part(tmp_path / "old", "a")))
    (tmp_path / "old").rename(tmp_path / "new")
    assert len(Ledger(tmp_path / "new").parts()) == 1
    assert ledger.verify(tmp_path / "new") == []


@pytest.mark.parametrize("name", ["trial [A]", "what?", "100%", "{x}", "a*"])
def test_a_path_that_is_a_search_pattern_is_refused(tmp_path: Path, name: str) -> None:
    """The characters and the folder are named before anything is written."""
    with pytest.raises(LedgerError, match="in the path would be read as a search pattern; rename that folder"):
        Ledger(tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_verify_names_every_changed_and_missing_part(tmp_path: Path) -> None:
    """A flipped byte anywhere in any part is found."""
    book = Ledger(tmp_path)
    landed = [_row_part(tmp_path, name) for name in "abc"]
    for part in landed:
        book.commit(_load(part))
    changed, missing, _ = landed
    content = bytearray((tmp_path / changed.path).read_bytes())
    for position in range(0, len(content), 97):
        content[position] ^= 1
        (tmp_path / changed.path).write_bytes(content)
        assert [damage.path for damage in ledger.verify(tmp_path)] == [changed.path]
        content[position] ^= 1
    (tmp_path / changed.path).write_bytes(content)
    (tmp_path / missing.path).unlink()
    assert ledger.verify(tmp_path) == [ledger.Damage(missing.path, "missing")]


def test_tidy_removes_only_old_files_that_nothing_names(tmp_path: Path) -> None:
    """Parts in force, parts to keep and young files stay."""
    book = Ledger(tmp_path)
    in_force, kept, left = (_row_part(tmp_path, name) for name in "abc")
    book.commit(_load(in_force))
    half = tmp_path / "fingerprints" / "c" / ".writing-x"
    half.write_bytes(b"half")
    assert ledger.tidy(tmp_path, 3600) == []
    hour_ago_s = time.time() - 4000
    for path in tmp_path.glob("fingerprints/*/*"):
        os.utime(path, (hour_ago_s, hour_ago_s))
    assert ledger.tidy(tmp_path, 3600, keep=[kept.path]) == [half.relative_to(tmp_path).as_posix(), left.path]
    assert ledger.verify(tmp_path) == []
    assert (tmp_path / kept.path).exists()


def test_tidy_drops_files_that_the_ledger_wrote_anew(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """After many commits only the files of the latest state are left, and the same parts are in force."""
    monkeypatch.setattr(ledger, "COMPACT_FILES", 3)
    book = Ledger(tmp_path)
    for name in "abcdefghij":
        book.commit(_load(_row_part(tmp_path, name)))
    before = book.parts()
    ledger.tidy(tmp_path, -1)
    assert len(list((tmp_path / "ledger").glob("*.parquet"))) <= 3
    assert Ledger(tmp_path).parts() == book.parts() == before
    book.commit({("fingerprints", "a"): []})
    assert len(Ledger(tmp_path).parts()) == 9


def test_landing_again_renews_the_grace_time(tmp_path: Path) -> None:
    """A part that a load wrote again is young, even when an earlier load had left the same bytes."""
    part = _row_part(tmp_path, "a")
    os.utime(tmp_path / part.path, (0, 0))
    _row_part(tmp_path, "a")
    Ledger(tmp_path)
    assert ledger.tidy(tmp_path, 3600) == []


@pytest.mark.parametrize("delay_ms", [0, 7, 20, 45, 80])
def test_a_killed_committer_leaves_a_whole_ledger(tmp_path: Path, delay_ms: int) -> None:
    """After a kill at any moment the ledger opens, names only whole parts, and takes the next commit."""
    Ledger(tmp_path)
    program = textwrap.dedent(
        """
        import sys, itertools
        from pathlib import Path
        import numpy as np
        from warehouse.ledger import Ledger
        from warehouse.parts import write_signal
        lake = Path(sys.argv[1])
        book = Ledger(lake)
        print("ready", flush=True)
        for n in itertools.count():
            blocks = [write_signal(lake, "r", 0, b, np.full(5000, n, np.int16)) for b in range(3)]
            book.commit({("signal", "r"): blocks})
        """
    )
    process = subprocess.Popen([sys.executable, "-c", program, str(tmp_path)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    with process.stdout:
        process.stdout.readline()
        time.sleep(delay_ms / 1000)
        process.send_signal(signal.SIGKILL)
    process.wait()
    book = Ledger(tmp_path)
    assert len(book.parts()) in (0, 3)
    assert ledger.verify(tmp_path) == []
    book.commit({("signal", "r"): []})
    ledger.tidy(tmp_path, 0)
    assert not list((tmp_path / "signal").glob("*/*"))


def test_a_commit_is_on_the_disk_before_anybody_relies_on_it(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A commit flushes the rows and the entry of the log that make it, so that a power loss cannot undo it later."""
    book, part, flushed = Ledger(tmp_path), _row_part(tmp_path, "a"), set()
    monkeypatch.setattr(os, "fsync", lambda descriptor: flushed.add(os.fstat(descriptor).st_ino))
    commit = book.commit(_load(part))
    made = [tmp_path / "ledger" / "_delta_log" / f"{commit:020d}.json", *(tmp_path / "ledger").glob("*.parquet")]
    assert len(made) == 2 and {path.stat().st_ino for path in made} <= flushed


@pytest.mark.parametrize("torn", ["_delta_log/*1.json", "*.parquet"])
def test_a_torn_ledger_is_one_sentence(tmp_path: Path, torn: str) -> None:
    """A ledger whose log or rows are half there says which folder to restore."""
    Ledger(tmp_path).commit(_load(_row_part(tmp_path, "a")))
    [path] = (tmp_path / "ledger").glob(torn)
    path.write_bytes(path.read_bytes()[:40])
    with pytest.raises(LedgerError, match=r"ledger cannot be read .*; restore the ledger folder from a copy"):
        Ledger(tmp_path).parts()
