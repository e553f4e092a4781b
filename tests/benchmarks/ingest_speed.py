"""Speed and memory of ingest against a plain sequential copy and hash of the same file.

Run as `python tests/benchmarks/ingest_speed.py FILE.edf SERIAL`: lands the file in a fresh programme folder in a process
of its own, checks that the samples come back equal, and prints the ratio, the peak anonymous memory and the size on
disk. No assertion: the figures are for a person to read.
"""

from __future__ import annotations

import hashlib
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

ROOT = Path(__file__).parents[2]
PIECE = 2**22


def copy_and_hash(source: Path, target: Path) -> tuple[float, float]:
    """Seconds and processor seconds of a plain copy with SHA-256, one pass."""
    begin, cpu = time.perf_counter(), time.process_time()
    digest = hashlib.sha256()
    with source.open("rb") as reading, target.open("wb") as writing:
        while piece := reading.read(PIECE):
            digest.update(piece)
            writing.write(piece)
    seconds = time.perf_counter() - begin, time.process_time() - cpu
    target.unlink()
    return seconds


def anonymous_mb() -> float:
    """Anonymous memory of this process now, MB."""
    for line in Path("/proc/self/smaps_rollup").read_text().splitlines():
        if line.startswith("Anonymous:"):
            return int(line.split()[1]) / 1024
    return float("nan")


def land(folder: Path) -> None:
    """Ingest in this process, watching its memory; prints seconds and MB."""
    from flows import register, settings
    from flows.arrivals import ingest
    from warehouse.ledger import Ledger

    peak, done = [0.0], threading.Event()

    def watch() -> None:
        while not done.wait(0.05):
            peak[0] = max(peak[0], anonymous_mb())

    watcher = threading.Thread(target=watch)
    watcher.start()
    begin, cpu = time.perf_counter(), time.process_time()
    read = settings.load(folder / "programme.toml")
    arrivals = ingest.ingest(folder, read, register.load(folder, "UTC"), Ledger(folder / "lake"))
    seconds, cpu_s = time.perf_counter() - begin, time.process_time() - cpu
    done.set()
    watcher.join()
    print(seconds, cpu_s, peak[0], arrivals.accepted)


def is_equal(file: Path, lake: Path) -> bool:
    """The landed samples are those of the file."""
    import numpy as np

    from flows.readers.identify import open_delivery
    from warehouse.ledger import Ledger
    from warehouse.parts import SignalReader

    opened = open_delivery([file])
    reader = SignalReader(lake, Ledger(lake).parts("signal"))
    at = 0
    for segment, size in reader.segment_samples.items():
        for a in range(0, size, PIECE):
            b = min(a + PIECE, size)
            if not np.array_equal(reader.read(segment, a, b), opened.read(at + a, at + b)):
                return False
        at += size
    return at == opened.n_samples


def main() -> None:
    """Measure and print."""
    file, serial = Path(sys.argv[1]), sys.argv[2]
    with tempfile.TemporaryDirectory(dir=file.parent) as made:
        folder = Path(made)
        for name in ("register", "inbox"):
            (folder / name).mkdir()
        (folder / "programme.toml").write_text("")
        (folder / "register" / "patients.csv").write_text("patient_code\nP-1\n")
        (folder / "register" / "wears.csv").write_text(
            f"device_serial,patient_code,from_local\n{serial},P-1,1990-01-01\n"
        )
        (folder / "inbox" / file.name).hardlink_to(file)
        plain = [copy_and_hash(file, folder / "copy") for _ in range(2)]
        told = subprocess.run(
            [sys.executable, __file__, "--land", folder], check=True, capture_output=True, text=True, cwd=ROOT
        )
        plain += [copy_and_hash(file, folder / "copy") for _ in range(2)]
        plain_s, plain_cpu_s = (sorted(column)[1] for column in zip(*plain, strict=True))
        seconds, cpu_s, peak_mb, accepted = (float(value) for value in told.stdout.split())
        landed = sum(path.stat().st_size for path in (folder / "lake" / "signal").rglob("*.parquet"))
        equal = is_equal(file, folder / "lake")
    print(f"accepted {accepted:.0f}, samples equal: {equal}")
    print(f"copy and hash {plain_s:.2f} s, ingest {seconds:.2f} s, ratio {seconds / plain_s:.2f}")
    print(f"processor {plain_cpu_s:.2f} s, ingest {cpu_s:.2f} s, ratio {cpu_s / plain_cpu_s:.2f}")
    print(f"peak anonymous memory {peak_mb:.0f} MB, on disk {100 * landed / file.stat().st_size:.1f} % of the file")


if __name__ == "__main__":
    sys.path.insert(0, str(ROOT))
    if sys.argv[1] == "--land":
        land(Path(sys.argv[2]))
    else:
        main()
