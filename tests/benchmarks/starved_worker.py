"""A Dask scheduler on loopback with one worker whose nanny ends it when it takes more memory than it may."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

START_S = 60.0


class StarvedWorker:
    """The scheduler's address, until it is stopped."""

    def __init__(self, folder: Path, limit_mb: int) -> None:
        file = folder / "scheduler.json"
        file.unlink(missing_ok=True)
        self._folder = folder
        self._scheduler = self._start("dask_scheduler", "--port", "0", "--no-show", "--scheduler-file", str(file))
        deadline_s = time.monotonic() + START_S
        while not (file.exists() and file.read_text().endswith("}")) and time.monotonic() < deadline_s:
            time.sleep(0.1)
        self.address = json.loads(file.read_text())["address"]
        self._worker = self._start_worker(f"{limit_mb}MB")

    def feed(self) -> None:
        """Put a worker without a limit in its place."""
        _end(self._worker)
        self._worker = self._start_worker("0")

    def stop(self) -> None:
        """End worker and scheduler."""
        _end(self._worker)
        _end(self._scheduler)

    def _start_worker(self, limit: str) -> subprocess.Popen:
        place = ("--nthreads", "1", "--local-directory", str(self._folder))
        return self._start("dask_worker", self.address, "--memory-limit", limit, *place)

    def _start(self, program: str, *words: str) -> subprocess.Popen:
        command = [sys.executable, "-m", f"distributed.cli.{program}", *words, "--host", "127.0.0.1", "--no-dashboard"]
        with (self._folder / f"{program}.log").open("a") as log:
            return subprocess.Popen(command, stdout=log, stderr=log, start_new_session=True)


def _end(process: subprocess.Popen) -> None:
    os.killpg(process.pid, signal.SIGKILL)  # the nanny and the worker that it keeps alive
    process.wait()
