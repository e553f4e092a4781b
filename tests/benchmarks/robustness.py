"""EC57 figures of labelled records as they are and in all the ways in which they could have come.

Run from the checkout: python -m tests.benchmarks.robustness ../shared/reference-ecg/mitdb
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from detectors.scoring import gross
from flows.scoring.score_record import Labelled, score_record
from flows.scoring.score_report import FIGURES, Options
from tests.benchmarks.ways import HARD_WAYS, WAYS, open_in


def main(folder: Path) -> None:
    """Print a line per way: gross figures over all time, V figures in analysable time, analysable share."""
    print(f"{'':22}", *(f"{name:>9}" for name in FIGURES), "  V, analysable time  analysable")
    for way in [*WAYS, *HARD_WAYS]:
        _print(way, [open_in(way, header) for header in sorted(folder.glob("*.hea"))])


def _print(name: str, records: list[Labelled]) -> None:
    options = Options("S", 300.0, 0, "")
    scores = [score_record(record, options) for record in records]
    all_time = gross([score.beats.matrix for score in scores])
    analysable = gross([score.beats_analysable.matrix for score in scores])
    share = np.mean([score.analysable_share_pct for score in scores])
    figures = " ".join(f"{all_time[figure]:9.2f}" for figure in FIGURES)
    print(f"{name:22} {figures} {analysable['veb_se']:10.2f} {analysable['veb_ppv']:9.2f} {share:11.2f}", flush=True)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
