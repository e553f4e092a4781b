"""A Prefect server of this host alone: the clock of `burdenline schedule` where no other server is named.

The server that Prefect starts by itself for a single run never schedules anything, so the schedule brings its own.
"""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

START_S = 180.0
END_S = 30.0


class ServerError(RuntimeError):
    """There is no server; the message says what was tried and where to look."""


@contextmanager
def local_server(log: Path) -> Iterator[str]:
    """Run a server on a free port of loopback while the body runs; yields the address of its API.

    What it says is written to `log`. Raises ServerError.
    """
    port = _free_port()
    api = f"http://127.0.0.1:{port}/api"
    environment = os.environ | {
        "PREFECT_API_URL": api,
        "PREFECT_SERVER_API_HOST": "127.0.0.1",
        "PREFECT_SERVER_API_PORT": str(port),
        "PREFECT_SERVER_UI_API_URL": api,
    }
    log.parent.mkdir(parents=True, exist_ok=True)
    with log.open("wb") as words:
        command = [sys.executable, "-m", "prefect", "server", "start"]
        # In a session of its own: Ctrl-C is for the schedule, which still needs its server to end in order.
        server = subprocess.Popen(command, env=environment, stdout=words, stderr=words, start_new_session=True)
    try:
        with _unwinding():
            _await(server, f"{api}/health", log)
            yield api
    finally:
        _end(server)


@contextmanager
def _unwinding() -> Iterator[None]:
    """Let a request to end, and a terminal that closes, unwind the body, so that no server outlives it."""
    before = {request: signal.getsignal(request) for request in (signal.SIGTERM, signal.SIGHUP)}
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(0))
    if before[signal.SIGHUP] is signal.SIG_DFL:  # nohup has it ignored
        signal.signal(signal.SIGHUP, lambda *_: signal.raise_signal(signal.SIGTERM))
    try:
        yield
    finally:
        for request, handler in before.items():
            signal.signal(request, handler)


def _end(server: subprocess.Popen[bytes]) -> None:
    server.terminate()
    try:
        server.wait(END_S)
    except subprocess.TimeoutExpired:
        server.kill()
        server.wait()


def _free_port() -> int:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        return free.getsockname()[1]


def _await(server: subprocess.Popen[bytes], address: str, log: Path) -> None:
    deadline_s = time.monotonic() + START_S
    while server.poll() is None and time.monotonic() < deadline_s:
        try:
            with urllib.request.urlopen(address, timeout=5.0):
                return
        except (urllib.error.URLError, OSError):
            time.sleep(0.5)
    raise ServerError(
        f"the Prefect server of this host did not start; its own words are in {log}. "
        "PREFECT_HOME must be a folder in which this user may write"
    )
