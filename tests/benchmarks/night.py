"""A night of many recordings against as many nights of one, and a night without anything new.

Run from the checkout: python -m tests.benchmarks.night FOLDER [--recordings 50] [--days 1]
Every night is `burdenline run` in a process of its own, so that starting the program counts. A night of n recordings
keeps what one costs when it takes at most n times as long as a night of one. Where other work shares the processors the CPU
seconds tell more than the seconds.
"""

from __future__ import annotations

import argparse
import resource
import subprocess
import sys
import time
from pathlib import Path

from tests.benchmarks.scaling import Cost, linked, make_programme


def main() -> None:
    """Print seconds of one recording, of all, of an idle night, and what a recording costs in the long night."""
    asked = _arguments()
    many, one = asked.folder / f"many-{asked.recordings}-{asked.days:g}", asked.folder / f"one-{asked.days:g}"
    for folder, recordings in ((many, asked.recordings), (one, 1)):
        if not folder.exists():
            make_programme(folder, recordings, asked.days)
    single = min((_night(linked(one, asked.folder / "night")) for _ in range(2)), key=lambda cost: cost.cpu_s)
    long_night = linked(many, asked.folder / "night")
    whole, idle = _night(long_night), _night(long_night)
    print(f"1 recording of {asked.days:g} days {single}; {asked.recordings} recordings {whole}; idle night {idle}")
    for unit, ratio in (("seconds", whole.wall_s / single.wall_s), ("CPU seconds", whole.cpu_s / single.cpu_s)):
        print(f"a recording of the long night takes {ratio / asked.recordings:.2f} of the {unit} of a night of its own")
    more_s = (whole.cpu_s - single.cpu_s) / (asked.recordings - 1)
    print(f"each more recording takes {more_s:.2f} more CPU s")


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--recordings", type=int, default=50)
    parser.add_argument("--days", type=float, default=1.0)
    return parser.parse_args()


def _night(folder: Path) -> Cost:
    begun, before = time.perf_counter(), _children_cpu_s()
    subprocess.run([sys.executable, "-m", "flows.cli", "run", str(folder)], check=True, capture_output=True)
    return Cost(time.perf_counter() - begun, _children_cpu_s() - before)


def _children_cpu_s() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


if __name__ == "__main__":
    main()
