"""Whole runs with the lake in an object store on loopback, on this host and on workers that share nothing but the store."""

import importlib.util
import shutil
from pathlib import Path

import pytest

from flows.cli import main
from flows.nightly import run
from flows.status import status
from tests.flows import test_workers as on_workers
from tests.flows.test_workers import DEVICES, Say, tables_after_run
from warehouse import store
from warehouse.ledger import Ledger
from warehouse.store import Store, StoreAway, StoreError

fresh, expected, cluster = on_workers.fresh, on_workers.expected, on_workers.cluster  # fixtures

needs_dask = pytest.mark.skipif(
    importlib.util.find_spec("distributed") is None, reason="distributed is not installed (the extra dask)"
)
pytestmark = pytest.mark.filterwarnings("ignore")  # of the server's libraries and of lost schedulers


@pytest.fixture
def coast(fresh, tmp_path, bucket_url):
    """A copy of the fresh programme whose lake lies in a store."""
    folder = on_workers.copy(fresh, tmp_path)
    toml = folder / "programme.toml"
    toml.write_text(toml.read_text().replace('store = ""', f'store = "{bucket_url}"'))
    return folder


def as_if_elsewhere(folder, monkeypatch):
    """Work in a folder that is named relative to here, so that workers, which run elsewhere, do not see it."""
    monkeypatch.chdir(folder.parent)
    return Path(folder.name)


def test_the_tables_are_those_of_a_lake_in_its_folder(coast, expected):
    """A run with a store publishes, byte for byte, the tables of one without, and a second run finds nothing to do."""
    assert tables_after_run(coast) == expected
    assert run(coast).outcome == "unchanged"


def test_a_lost_cache_is_made_again_from_the_store(coast, expected):
    """When the lake's folder is lost a run that takes the store over gets the parts back and analyses nothing anew."""
    run(coast)
    shutil.rmtree(coast / "lake")
    assert main(["run", str(coast)]) == 1, "by itself it could as well be another folder"
    said = []
    assert tables_after_run(coast, reporter=Say(said.append), take_over=True) == expected
    assert not any(line.startswith("  analysed") for line in said)


@needs_dask
def test_workers_without_the_folder_publish_the_same(coast, expected, cluster, monkeypatch):
    """Two workers that see only the store analyse every recording; nothing is left in their scratch folders."""
    on_workers.use_scheduler(coast, cluster.address)
    said = []
    assert tables_after_run(as_if_elsewhere(coast, monkeypatch), reporter=Say(said.append)) == expected
    assert sum(line.startswith("  analysed") for line in said) == len(DEVICES)


@needs_dask
def test_a_killed_worker_without_the_folder_doubles_nothing(coast, expected, cluster, monkeypatch):
    """When one of two workers that see only the store is killed half-way the tables are the same."""
    on_workers.use_scheduler(coast, cluster.address)

    def kill_one(line):
        if line.startswith("  analysed"):
            cluster.workers[0].kill()

    assert tables_after_run(as_if_elsewhere(coast, monkeypatch), reporter=Say(kill_one)) == expected


@needs_dask
def test_a_lost_scheduler_leaves_the_store_whole(coast, expected, cluster, monkeypatch):
    """A scheduler lost half-way ends the run; the next one, on this host, publishes the same tables out of the store."""
    on_workers.use_scheduler(coast, cluster.address)

    def kill_all(line):
        if line.startswith("  analysed"):
            cluster.stop()

    with pytest.raises(on_workers.WorkersAway):
        run(as_if_elsewhere(coast, monkeypatch), reporter=Say(kill_all))
    assert not (coast / "published").exists()
    on_workers.use_scheduler(coast, "")
    assert tables_after_run(coast) == expected


def test_every_verb_works_on_a_lake_in_a_store(coast, bucket_url, capsys):
    """verify, tidy, freeze, thaw, sql, promote and status do what they do on a lake in its folder."""
    assert main(["run", str(coast)]) == 0
    for words in (
        ["verify"],
        ["freeze", "visit-1", "--reason", "look", "--by", "qa"],
        ["tidy", "--grace-h", "0"],
        ["thaw", "visit-1", "--check"],
        ["sql", "select count(*) from beats"],
        ["status"],
        ["promote", "present", "--reason", "follow"],
    ):
        assert main([words[0], str(coast), *words[1:]]) == 0, capsys.readouterr()
    assert Store(bucket_url).read("promoted.json") == (coast / "lake" / "promoted.json").read_bytes()
    shutil.rmtree(coast / "lake" / "beats")
    assert main(["verify", str(coast)]) == 0
    assert main(["thaw", str(coast), "visit-1", "--check"]) == 0, "the cut's parts come back from the store"


def test_a_limited_cache_keeps_no_samples_that_it_need_not(coast, expected):
    """With a small [lake] cache_gb the samples leave lake/ after the run; tables are the same and nothing is done anew."""
    toml = coast / "programme.toml"
    toml.write_text(toml.read_text().replace("cache_gb = 0.0", "cache_gb = 1e-6"))
    assert tables_after_run(coast) == expected
    assert not list((coast / "lake" / "signal").rglob("*.parquet"))
    assert run(coast).outcome == "unchanged"
    assert main(["verify", str(coast)]) == 0


def test_a_store_away_leaves_the_folder_as_it_was(coast, s3_server, monkeypatch):
    """When the store stops answering in the night the run ends with a sentence; the publication stands, files stay."""
    run(coast)
    before = published_and_inbox(coast)
    shutil.copyfile(coast / "inbox" / "SRL-1.edf", coast / "inbox" / "later.edf")
    s3_server_retries(monkeypatch)
    with s3_server.refusing(every=1), pytest.raises(StoreAway, match="does not answer"):
        run(coast)
    assert published_and_inbox(coast) == before | {"inbox/later.edf"}
    assert status(coast)["last_outcome"] == "not_published"
    assert run(coast).skipped == 1


def test_a_read_only_store_leaves_the_folder_as_it_was(coast, s3_server):
    """When the store takes no writes the run ends with a sentence and publishes nothing."""
    before = published_and_inbox(coast)
    with s3_server.read_only(), pytest.raises(StoreError, match="refused the access"):
        run(coast)
    assert published_and_inbox(coast) == before


def s3_server_retries(monkeypatch):
    monkeypatch.setattr(store, "RETRIES", 0)


def published_and_inbox(folder):
    """Names of everything published and delivered, with the edition that stands."""
    files = {
        path.relative_to(folder).as_posix() for name in ("inbox", "published") for path in (folder / name).rglob("*")
    }
    current = folder / "published" / "current"
    return files | ({f"current is {current.resolve().name}"} if current.exists() else set())


def test_a_moved_setting_is_refused(coast):
    """A store that is emptied from the settings is asked for by name, and nothing is landed elsewhere."""
    run(coast)
    toml = coast / "programme.toml"
    toml.write_text(toml.read_text().replace('store = "s3', 'store = "" # "s3'))
    with pytest.raises(StoreError, match="set it back"):
        run(coast)
    assert Ledger(coast / "lake").parts("recordings")
