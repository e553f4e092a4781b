"""One programme folder works on a store: another one is told so before anything is changed."""

import shutil
from pathlib import Path

import polars as pl
import pytest

from warehouse.ledger import Ledger, tidy
from warehouse.owner import claim
from warehouse.parts import write_part
from warehouse.store import Store, StoreAway, StoreError

pytestmark = pytest.mark.filterwarnings("ignore")  # of the server's libraries


def test_a_second_folder_is_refused_and_left_as_it_was(tmp_path: Path, bucket_url: str) -> None:
    """A folder that never worked on the store is told whose it is, and nothing is made in it; the first one goes on."""
    claim(tmp_path / "a", bucket_url, "run-1", "the folder of A")
    with pytest.raises(StoreError, match=r"belongs to the folder of A, whose run run-1 .*--take-over"):
        claim(tmp_path / "b", bucket_url, "run-2", "the folder of B")
    assert not (tmp_path / "b").exists()
    claim(tmp_path / "a", bucket_url, "run-3", "the folder of A")


def test_of_a_folder_and_its_copy_only_one_goes_on(tmp_path: Path, bucket_url: str) -> None:
    """A copy holds all that its original holds; when one of them has worked on the store the other one is refused."""
    claim(tmp_path / "a", bucket_url, "run-1", "A")
    shutil.copytree(tmp_path / "a", tmp_path / "copy")
    claim(tmp_path / "a", bucket_url, "run-2", "A")
    with pytest.raises(StoreError, match="belongs to A"):
        claim(tmp_path / "copy", bucket_url, "run-3", "the copy")


def test_a_moved_folder_goes_on(tmp_path: Path, bucket_url: str) -> None:
    """The folder is known by its runs, not by its place."""
    claim(tmp_path / "a", bucket_url, "run-1", "A")
    (tmp_path / "a").rename(tmp_path / "moved")
    claim(tmp_path / "moved", bucket_url, "run-2", "A, moved")


def test_taking_over_refuses_the_folder_before(tmp_path: Path, bucket_url: str) -> None:
    """Whoever takes the store over owns it; the folder that worked on it before is refused from then on."""
    claim(tmp_path / "a", bucket_url, "run-1", "A")
    claim(tmp_path / "b", bucket_url, "run-2", "B", take_over=True)
    claim(tmp_path / "b", bucket_url, "run-3", "B")
    with pytest.raises(StoreError, match="belongs to B"):
        claim(tmp_path / "a", bucket_url, "run-4", "A")


@pytest.mark.parametrize("arrived", [False, True])
def test_a_run_killed_while_it_claims_locks_nobody_out(
    tmp_path: Path, bucket_url: str, monkeypatch: pytest.MonkeyPatch, arrived: bool
) -> None:
    """Whether the run's name had reached the store or not, the next run of the folder goes on."""
    claim(tmp_path / "a", bucket_url, "run-1", "A")
    put = Store.write

    def killed(self: Store, path: str, content: bytes) -> None:
        if arrived:
            put(self, path, content)
        raise StoreAway("killed")

    with monkeypatch.context() as during, pytest.raises(StoreAway):
        during.setattr(Store, "write", killed)
        claim(tmp_path / "a", bucket_url, "run-2", "A")
    claim(tmp_path / "a", bucket_url, "run-3", "A")


def test_tidy_of_another_folder_removes_nothing(tmp_path: Path, bucket_url: str) -> None:
    """A folder to which the store no longer belongs does not remove parts that another one's publication may read."""
    claim(tmp_path / "a", bucket_url, "run-1", "A")
    row = pl.DataFrame([{"fingerprint": "a", "detector_version": "1", "settings_json": "{}"}])
    part = write_part(tmp_path / "a", "fingerprints", "a", row, fingerprint="a")
    Ledger(tmp_path / "a").commit({("fingerprints", "a"): [part]})
    Ledger(tmp_path / "a").commit({("fingerprints", "a"): []})
    claim(tmp_path / "b", bucket_url, "run-2", "B", take_over=True)
    with pytest.raises(StoreError, match="belongs to B"):
        tidy(tmp_path / "a", -1.0)
    assert Store(bucket_url).size(part.path) == part.bytes
    assert tidy(tmp_path / "b", -1.0) == [part.path]
