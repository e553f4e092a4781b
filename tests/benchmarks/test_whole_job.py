"""The benchmark of the whole job runs, on a recording short enough for a test."""

import subprocess
import sys
from pathlib import Path


def test_the_table_has_a_line_per_stage(tmp_path):
    """Every stage of the job is measured with its time, the ratio to its floor and its memory."""
    done = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.whole_job", str(tmp_path), "--days", "0.0625", "--fs-hz", "125"],
        cwd=Path(__file__).parents[2], capture_output=True, text=True, check=True,
    )  # fmt: skip
    first, *lines = done.stdout.splitlines()
    assert first.endswith("0.0625 days at 125 Hz")
    assert [line.split("  ")[0].strip() for line in lines] == [
        "read", "land", "detect", "stitch", "tables", "pages", "rest", "whole job", "nothing new",
    ]  # fmt: skip
    assert all(" x " in line for line in lines[:6]) and " x " in lines[7]
    assert all("MB anonymous" in line for line in (*lines[:7], lines[8]))
