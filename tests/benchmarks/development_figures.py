"""Write the accuracy figures that the methods page shows: EC57 on the records with which the detector was developed.

Run from the checkout after the detector has changed:
python -m tests.benchmarks.development_figures ../shared/reference-ecg
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

from detectors.annotations import CLASSES
from flows.scoring.score import score_folder
from flows.scoring.score_report import RecordScore

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
    row = CLASSES.index(ectopy)
    tables = (half.matrix for half in record.halves)
    counted = [(m[:, : len(CLASSES)].sum(), m[row].sum(), m[:, row].sum(), m[row, row]) for m in tables]
    return [dict(zip(("beats", "expert", "found", "both"), map(int, counts), strict=True)) for counts in counted]


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
    }
    TARGET.write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
