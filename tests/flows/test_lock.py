import errno
import fcntl
import subprocess
import sys

import pytest

from flows.lock import FolderBusy, folder_lock, schedule_lock

HOLD = """
import sys
from pathlib import Path
from flows.lock import folder_lock
with folder_lock(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.readline()
"""


@pytest.fixture
def holder(tmp_path):
    """A process that holds the folder until it is killed."""
    command = [sys.executable, "-c", HOLD, str(tmp_path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"held\n"
        yield process
        process.kill()


def test_a_second_run_leaves_and_names_the_holder(tmp_path, holder):
    """While one run holds the folder another leaves with the holder's process and what to do."""
    with pytest.raises(FolderBusy, match=f"process {holder.pid} on host .*--wait"), folder_lock(tmp_path):
        pass


def test_a_killed_holder_leaves_no_lock(tmp_path, holder):
    """After a kill -9 of the holder the folder is free at once."""
    holder.kill()
    holder.wait(30)
    with folder_lock(tmp_path):
        pass


def test_a_disk_without_locks_is_not_taken_for_another_run(tmp_path, monkeypatch):
    """Where the file system refuses locks the error says so and names the file; nobody is said to hold the folder."""

    def refuse(descriptor, how):
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr(fcntl, "flock", refuse)
    with pytest.raises(OSError, match=r"expected a disk that knows file locks.*run\.lock"), folder_lock(tmp_path):
        pass


def test_a_folder_has_one_schedule(tmp_path):
    """A second schedule of the folder leaves and names the first; runs go on beside it."""
    with (
        schedule_lock(tmp_path),
        folder_lock(tmp_path),
        pytest.raises(FolderBusy, match="is scheduled already, by process"),
        schedule_lock(tmp_path),
    ):
        pass
