"""A lake in an object store: the folder is a cache, the ledger at the URL says what is in force, nothing is half there."""

import os
import shutil
import socket
import sys
import threading
from pathlib import Path

import numpy as np
import polars as pl
import pytest

from warehouse import cache, store
from warehouse.cache import settle, shrink
from warehouse.ledger import Ledger, tidy, verify
from warehouse.parts import Part, PartError, SignalReader, file_sha256, read_part, write_part, write_signal
from warehouse.store import Store, StoreAway, StoreError

pytestmark = pytest.mark.filterwarnings("ignore")  # of the server's libraries


def _row_part(lake: Path, name: str) -> Part:
    row = {"fingerprint": name, "detector_version": "1", "settings_json": "{}"}
    return write_part(lake, "fingerprints", name, pl.DataFrame([row]), fingerprint=name)


def _load(part: Part) -> dict[tuple[str, str], list[Part]]:
    return {(part.table, part.key): [part]}


@pytest.fixture
def lake(tmp_path: Path, bucket_url: str) -> Path:
    """A lake folder that is a cache of an empty store."""
    settle(tmp_path / "lake", bucket_url)
    return tmp_path / "lake"


def test_another_folder_sees_what_was_committed(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """A second cache of the store knows the part and gets its bytes when they are first read."""
    part = _row_part(lake, "a")
    Ledger(lake).commit(_load(part))
    settle(tmp_path / "other", bucket_url)
    assert Ledger(tmp_path / "other").parts() == [part]
    assert not (tmp_path / "other" / part.path).exists()
    assert read_part(tmp_path / "other", part).equals(read_part(lake, part))
    assert file_sha256(tmp_path / "other" / part.path) == part.sha256


def test_what_is_not_committed_is_not_in_force(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """A part that was put but not committed is in nobody's ledger."""
    part = _row_part(lake, "a")
    Store(bucket_url).push(lake, [part.path])
    settle(tmp_path / "other", bucket_url)
    assert Ledger(tmp_path / "other").parts() == []


def test_a_part_put_by_a_worker_can_be_committed_elsewhere(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """The committing folder needs the part in the store only; one that is nowhere is refused."""
    settle(tmp_path / "worker", bucket_url)
    part = _row_part(tmp_path / "worker", "a")
    with pytest.raises(StoreError, match=r"neither in .* nor in s3://"):
        Ledger(lake).commit(_load(part))
    Store(bucket_url).push(tmp_path / "worker", [part.path])
    Ledger(lake).commit(_load(part))
    assert Ledger(lake).parts() == [part]


def test_committers_of_two_folders_lose_nothing(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """Two folders that commit at once overwrite each other's commits never: the slower one looks again."""
    settle(tmp_path / "other", bucket_url)

    def commit(folder: Path, names: list[str]) -> None:
        book = Ledger(folder)
        for name in names:
            book.commit(_load(_row_part(folder, name)))

    names = [f"f{n}" for n in range(12)]
    threads = [
        threading.Thread(target=commit, args=(folder, own))
        for folder, own in ((lake, names[::2]), (tmp_path / "other", names[1::2]))
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [part.key for part in Ledger(lake).parts()] == sorted(names)


def test_a_changed_object_is_never_taken(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """An object whose bytes changed is not fetched, and verify names it."""
    part = _row_part(lake, "a")
    Ledger(lake).commit(_load(part))
    assert verify(lake) == []
    Store(bucket_url).write(part.path, b"something else")
    assert [tuple(damage) for damage in verify(lake)] == [(part.path, "bytes changed in the store")]
    settle(tmp_path / "other", bucket_url)
    with pytest.raises(PartError, match="is missing in"):
        read_part(tmp_path / "other", part)


def test_verify_reads_folder_and_store(lake: Path, bucket_url: str) -> None:
    """A part that only the store has is whole; one that the store lost, or that changed in the folder, is named."""
    kept, lost = _row_part(lake, "a"), _row_part(lake, "b")
    Ledger(lake).commit(_load(kept) | _load(lost))
    (lake / kept.path).unlink()
    assert verify(lake) == []
    Store(bucket_url).remove([lost.path])
    (lake / lost.path).write_bytes(b"x")
    assert [tuple(damage) for damage in verify(lake)] == [
        (lost.path, "bytes changed after it landed"),
        (lost.path, "missing in the store"),
    ]


def test_tidy_removes_what_nothing_refers_to_in_both_places(lake: Path, bucket_url: str) -> None:
    """Parts out of force go from folder and store; parts in force and parts to keep stay."""
    replaced, kept, present = (_row_part(lake, name) for name in ("a", "b", "c"))
    Ledger(lake).commit(_load(replaced) | _load(kept) | _load(present))
    Ledger(lake).commit({(part.table, part.key): [] for part in (replaced, kept)})
    assert tidy(lake, 3600.0) == []  # all of it is younger than the grace time
    assert tidy(lake, -1.0, keep=[kept.path]) == [replaced.path]
    left = [found.path for found in Store(bucket_url).objects("fingerprints")]
    assert sorted(left) == sorted([kept.path, present.path])
    assert Ledger(lake).parts() == [present]


def test_the_oldest_samples_leave_a_cache_that_grew_too_large(lake: Path) -> None:
    """Samples that the store holds go, the oldest first and no more than needed; all others stay, and what went is read."""
    rows = _row_part(lake, "a")
    old, new = (write_signal(lake, key, 0, 0, np.arange(n, dtype=np.int16)) for key, n in (("old", 900), ("new", 901)))
    Ledger(lake).commit(_load(rows) | _load(old) | _load(new))
    uncommitted = write_signal(lake, "uncommitted", 0, 0, np.arange(902, dtype=np.int16))
    for age_s, part in enumerate((new, old, rows, uncommitted)):
        os.utime(lake / part.path, (1e9 - age_s, 1e9 - age_s))
    size = sum(path.stat().st_size for path in lake.rglob("*") if path.is_file())
    assert shrink(lake, size) == []
    assert shrink(lake, size - 1) == [old.path]
    assert shrink(lake, 0) == [new.path]
    assert (lake / rows.path).is_file() and (lake / uncommitted.path).is_file()
    assert SignalReader(lake, [old]).read(0, 0, 900).tolist() == list(range(900))


def test_a_lake_of_its_own_moves_into_an_empty_store(tmp_path: Path, bucket_url: str) -> None:
    """A folder that is given a store puts all it holds there, with its history; a second folder then sees it."""
    part = _row_part(tmp_path / "lake", "a")
    Ledger(tmp_path / "lake").commit(_load(part))
    settle(tmp_path / "lake", bucket_url)
    settle(tmp_path / "other", bucket_url)
    assert Ledger(tmp_path / "other").parts() == [part]
    assert Ledger(tmp_path / "other").version == Ledger(tmp_path / "lake").version == 1
    assert read_part(tmp_path / "other", part).height == 1


def test_a_half_moved_lake_is_still_the_folders(
    tmp_path: Path, bucket_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A move that was cut short leaves the lake in its folder; the next one completes it."""
    part = _row_part(tmp_path / "lake", "a")
    Ledger(tmp_path / "lake").commit(_load(part))
    with monkeypatch.context() as cut_short, pytest.raises(StoreAway):
        cut_short.setattr(Store, "write", _failing_after(2, Store.write))
        settle(tmp_path / "lake", bucket_url)
    assert cache.noted_url(tmp_path / "lake") == "" and Ledger(tmp_path / "lake").parts() == [part]
    settle(tmp_path / "lake", bucket_url)
    assert verify(tmp_path / "lake") == []


def _failing_after(times, write):
    left = iter(range(times))

    def sometimes(self, path, content):
        if next(left, None) is None:
            raise StoreAway("the store went away")
        write(self, path, content)

    return sometimes


def test_two_lakes_are_never_mixed(lake: Path, bucket_url: str, tmp_path: Path) -> None:
    """A folder with a lake of its own is refused a store that holds one, and a cache is refused another store."""
    Ledger(lake)
    own = tmp_path / "own"
    Ledger(own)
    with pytest.raises(StoreError, match=r"holds a lake of its own and s3://.* another one"):
        settle(own, bucket_url)
    for url in ("", bucket_url + "/elsewhere"):
        with pytest.raises(StoreError, match=r"is a cache of s3://.*set it back"):
            settle(lake, url)


def test_a_store_that_was_emptied_is_told(lake: Path, bucket_url: str) -> None:
    """A cache whose store lost its ledger says so and makes no new one."""
    Ledger(lake).commit(_load(_row_part(lake, "a")))
    every = [found.path for folder in ("ledger", "fingerprints") for found in Store(bucket_url).objects(folder)]
    Store(bucket_url).remove([*every, "layout.json"])
    with pytest.raises(RuntimeError, match="ledger is gone"):
        Ledger(lake)


# What a user can get wrong


def test_missing_credentials_are_one_sentence(lake: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without keys the sentence names the variables."""
    monkeypatch.delenv("AWS_SECRET_ACCESS_KEY")
    with pytest.raises(StoreError, match=r"no credentials for s3://.*AWS_ACCESS_KEY_ID and AWS_SECRET_ACCESS_KEY"):
        Ledger(lake)


def test_an_absent_bucket_is_one_sentence(tmp_path: Path, bucket_url: str) -> None:
    """A bucket that does not exist is named, and the folder stays a lake without store."""
    with pytest.raises(StoreError, match="there is no bucket for s3://no-such-bucket/lake"):
        settle(tmp_path / "lake", "s3://no-such-bucket/lake")
    assert not (tmp_path / "lake").exists()


def test_a_dead_endpoint_is_one_sentence(lake: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where nothing listens the sentence says which store does not answer."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        monkeypatch.setenv("AWS_ENDPOINT_URL", f"http://127.0.0.1:{free.getsockname()[1]}")
    monkeypatch.setattr(store, "RETRIES", 0)
    with pytest.raises(StoreAway, match=r"s3://.* does not answer .*run again"):
        Ledger(lake)


def test_a_store_that_takes_no_writes_is_one_sentence(lake: Path, s3_server) -> None:
    """A store that may only be read says which rights it wants; nothing is committed."""
    part = _row_part(lake, "a")
    Ledger(lake)
    with s3_server.read_only(), pytest.raises(StoreError, match=r"refused the access .*list, get, put and delete"):
        Ledger(lake).commit(_load(part))
    assert Ledger(lake).parts() == []


def test_a_refused_request_now_and_then_is_borne(lake: Path, s3_server) -> None:
    """A store that refuses every third request for a moment is asked again, and the commit is there once."""
    with s3_server.refusing(every=3):
        for name in ("a", "b", "c"):
            Ledger(lake).commit(_load(_row_part(lake, name)))
    assert [part.key for part in Ledger(lake).parts()] == ["a", "b", "c"]


def test_without_the_extra_the_setting_says_what_to_install(tmp_path: Path, bucket_url: str, monkeypatch) -> None:
    """Without obstore the setting names the extra."""
    monkeypatch.setitem(sys.modules, "obstore", None)
    with pytest.raises(StoreError, match=r"install burdenline\[s3\]"):
        settle(tmp_path / "lake", bucket_url)


def test_a_lake_without_store_asks_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A lake in its folder alone is opened, written and read without any store being made."""
    monkeypatch.setattr(cache, "Store", None)
    part = _row_part(tmp_path, "a")
    Ledger(tmp_path).commit(_load(part))
    assert read_part(tmp_path, part).height == 1 and verify(tmp_path) == [] and tidy(tmp_path, -1.0) == []
    assert shrink(tmp_path, 0) == []
    shutil.rmtree(tmp_path / "fingerprints")
    with pytest.raises(PartError, match="is missing in"):
        read_part(tmp_path, part)
