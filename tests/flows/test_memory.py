"""Freed memory goes back to the system, and a run that gets no more says so."""

import platform
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool

import pytest

from flows import nightly, sentences
from flows.progress import SILENT
from flows.settings import Settings, WorkersSettings

FREED_AND_USED_AGAIN = """
import numpy as np
from flows.memory import give_back

def anonymous_mb():
    return next(int(line.split()[1]) / 1024 for line in open("/proc/self/status") if line.startswith("RssAnon"))

{call}
np.ones(24 * 2**20, np.uint8)  # freed at once: from now on the C library would keep arrays of this size
before = anonymous_mb()
np.ones(20 * 2**20, np.uint8)
print(anonymous_mb() - before)
"""


@pytest.mark.skipif(platform.libc_ver()[0] != "glibc", reason="mallopt is glibc's")
@pytest.mark.parametrize(("call", "is_kept"), [("", True), ("give_back()", False)])
def test_a_large_array_that_was_freed_leaves_the_process(call, is_kept):
    """An array of 20 MB stays with a process after it is freed, and does not once the limits are set."""
    code = FREED_AND_USED_AGAIN.format(call=call)
    told = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert (float(told) > 10) is is_kept


def test_an_ended_process_is_one_sentence(tmp_path, monkeypatch):
    """A process that the system ends, as it does when memory is used up, ends the run with what to do."""

    def ended(item):
        raise BrokenProcessPool("a process in the process pool was terminated abruptly")

    monkeypatch.setattr(nightly, "ProcessPoolExecutor", lambda processes, mp_context: ThreadPoolExecutor(processes))
    monkeypatch.setattr(nightly, "analyse_one", ended)
    settings = Settings(workers=WorkersSettings(processes=2))
    work = [nightly.Work(tmp_path, name, settings) for name in ("a", "b")]
    with pytest.raises(nightly.ProcessEnded, match=r"out of memory perhaps; .* lower \[workers\] processes"):
        list(nightly.analyse_here(work, SILENT))


def test_memory_that_is_used_up_is_one_sentence():
    """An array that cannot be had is told to the user, not shown as a fault of the program."""
    assert sentences.is_sentence(MemoryError())
    assert sentences.sentence(MemoryError()).startswith("no memory is left; nothing was lost")
