"""A night of many recordings against as many nights of one, and a night without anything new.

Run from the checkout: python -m tests.benchmarks.night FOLDER [--recordings 50] [--days 1]
Every night is `burdenline run` in a process of its own, so that starting the program counts. A night of n recordings
keeps what one costs when it takes at most n times as long as a night of one.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import time
from pathlib import Path

from tests.benchmarks.scaling import linked, make_programme


def main() -> None:
    """Print seconds of one recording, of all, of an idle night, and what a recording costs in the long night."""
    asked = _arguments()
    many, one = asked.folder / f"many-{asked.recordings}-{asked.days:g}", asked.folder / f"one-{asked.days:g}"
    for folder, recordings in ((many, asked.recordings), (one, 1)):
        if not folder.exists():
            make_programme(folder, recordings, asked.days)
    one_s = min(_night_s(linked(one, asked.folder / "night")) for _ in range(2))
    long_night = linked(many, asked.folder / "night")
    many_s = _night_s(long_night)
    idle_s = _night_s(long_night)
    print(f"1 recording of {asked.days:g} days {one_s:.2f} s; {asked.recordings} recordings {many_s:.2f} s")
    print(f"a recording of the long night takes {many_s / asked.recordings / one_s:.2f} of a night of its own")
    print(f"and {(many_s - one_s) / (asked.recordings - 1):.2f} s more of the night; idle night {idle_s:.2f} s")


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--recordings", type=int, default=50)
    parser.add_argument("--days", type=float, default=1.0)
    return parser.parse_args()


def _night_s(folder: Path) -> float:
    begun = time.perf_counter()
    subprocess.run([sys.executable, "-m", "flows.cli", "run", str(folder)], check=True, capture_output=True)
    return time.perf_counter() - begun


if __name__ == "__main__":
    main()
