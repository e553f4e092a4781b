"""Freed memory goes back to the system."""

import platform
import subprocess
import sys

import pytest

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
