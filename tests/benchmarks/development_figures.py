"""Write the accuracy figures that the methods page shows: EC57 on the records with which the detector was developed.

Run from the checkout after the detector has changed:
python -m tests.benchmarks.development_figures ../shared/reference-ecg
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from detectors.annotations import CLASSES
from flows.scoring.score import score_folder
from flows.scoring.score_record import score_record
from flows.scoring.score_report import Options, RecordScore
from tests.benchmarks.ways import TURNED, open_in

TARGET = Path(__file__).parents[2] / "dashboards" / "development_figures.json"
KEPT = (
    "options",
    "gross",
    "average",
    "gross_without_af",
    "v_burden_error",
    "analysable_share",
    "runs",
    "noise",
    "reliability",
)
OF_RECORD = ("record", "has_af", "v_burden_found_pct", "v_burden_expert_pct")


def halves(record: RecordScore, ectopy: str) -> list[dict[str, int]]:
    """What the expert and the detector counted in each half, and how many of it both did."""
    return [counts(half.matrix, ectopy) for half in record.halves]


def counts(matrix: NDArray[np.int64], ectopy: str) -> dict[str, int]:
    """Beats, those of one ectopy by the expert and by the detector, and those by both."""
    row = CLASSES.index(ectopy)
    counted = matrix[:, : len(CLASSES)].sum(), matrix[row].sum(), matrix[:, row].sum(), matrix[row, row]
    return dict(zip(("beats", "expert", "found", "both"), map(int, counted), strict=True))


def turned(header: Path) -> dict[str, object]:
    """Ventricular beats of a record in its lead and in leads between its two, as if electrodes lay elsewhere."""
    scores = [score_record(open_in(way, header), Options("S", 0.0, 0, "")) for way in ("as they are", *TURNED)]
    whole = (sum(half.matrix for half in score.halves) for score in scores)
    return {"record": header.stem, "leads": [counts(np.asarray(matrix), "V") for matrix in whole]}


def forms(record: RecordScore) -> dict[str, object]:
    """Ventricular couplets and runs: how many the expert sees, and how many found ones are shorter by the expert."""
    by_expert, found = record.runs["V"]
    spans = {"couplets": slice(2, 3), "runs": slice(3, None)}
    counted = {
        name: {"expert": int(by_expert[span].sum()), "false": int(found[: span.start, span].sum())}
        for name, span in spans.items()
    }
    return {"record": record.record, "has_af": record.has_af, **counted}


def main(reference: Path) -> None:
    """Score the arrhythmia records, clean and with recorded noise on two of them, and keep the summary."""
    report = score_folder(
        reference / "mitdb", noise_folder=reference / "nstdb", noise_records=("118", "119"), say=print
    )
    plain = report.as_dict()
    figures = {
        "data": "22 records of the MIT-BIH Arrhythmia Database (Moody and Mark 2001), first signal",
        "record_count": len(report.records),
        **{name: plain[name] for name in KEPT},
        "v_burdens": [{name: row[name] for name in OF_RECORD} for row in plain["records"]],
        "halves": {
            ectopy: [{"record": r.record, "has_af": r.has_af, "halves": halves(r, ectopy)} for r in report.records]
            for ectopy in "VS"
        },
        "turned": [turned(header) for header in sorted((reference / "mitdb").glob("*.hea"))],
        "forms": [forms(record) for record in report.records],
    }
    TARGET.write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
