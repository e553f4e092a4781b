"""Wear-day results in the shape of the SDTM ECG domain (EG), as CSV and as a version 5 transport file.

One row per patient, wear day and test, as the findings class asks. Test codes are the sponsor's own except the mean
heart rate: whoever submits maps them to the controlled terminology that is in force then. A result that could not be
computed is a row with EGSTAT NOT DONE and its reason, never a missing row. Values that a transport file cannot hold
(text longer than 200, characters outside ASCII, too long names and labels) are refused before a byte is written.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime, time, timedelta
from pathlib import Path
from typing import Any, NamedTuple
from zoneinfo import ZoneInfo

import polars as pl

from warehouse.exports import transport
from warehouse.exports.provenance import provenance
from warehouse.published import Published


class Test(NamedTuple):
    """One test of the domain: its code and name, the published column, its unit, and decimals of the result."""

    code: str
    name: str
    column: str
    unit: str
    decimals: int


TESTS = (
    Test("VBURDEN", "Ventricular Ectopic Burden", "v_burden_pct", "%", 4),
    Test("VEBNUM", "Number of Ventricular Ectopic Beats", "v_beats", "beats", 0),
    Test("VEBHR", "Ventricular Ectopic Beats per Hour", "v_per_h", "beats/h", 4),
    Test("SBURDEN", "Supraventricular Ectopic Burden", "s_burden_pct", "%", 4),
    Test("BEATNUM", "Number of Analysable Beats", "all_beats", "beats", 0),
    Test("ANLHRS", "Analysable Hours", "analysable_h", "h", 4),
    Test("WORNHRS", "Worn Hours", "worn_h", "h", 4),
    Test("EGHRMN", "ECG Mean Heart Rate", "mean_rate_bpm", "beats/min", 2),
    Test("VRUNNUM", "Number of Ventricular Runs", "runs", "runs", 0),
    Test("VRUNMAX", "Longest Ventricular Run", "longest_run_beats", "beats", 0),
)

# Variable -> label, in the order of the domain.
VARIABLES = {
    "STUDYID": "Study Identifier",
    "DOMAIN": "Domain Abbreviation",
    "USUBJID": "Unique Subject Identifier",
    "EGSEQ": "Sequence Number",
    "EGTESTCD": "ECG Test or Examination Short Name",
    "EGTEST": "ECG Test or Examination Name",
    "EGCAT": "Category for ECG",
    "EGORRES": "Result or Finding in Original Units",
    "EGORRESU": "Original Units",
    "EGSTRESC": "Character Result/Finding in Std Format",
    "EGSTRESN": "Numeric Result/Finding in Standard Units",
    "EGSTRESU": "Standard Units",
    "EGSTAT": "Completion Status",
    "EGREASND": "Reason ECG Not Done",
    "EGMETHOD": "Method of Test or Examination",
    "EGEVAL": "Evaluator",
    "EGDTC": "Date/Time of ECG",
    "EGENDTC": "End Date/Time of ECG",
}
NUMERIC = ("EGSEQ", "EGSTRESN")


def eg_domain(published: Published, study_id: str) -> pl.DataFrame:
    """Rows of the EG domain, ordered by subject and sequence number; text columns hold '' for what is missing."""
    zones = dict(published.table("patients").iter_rows())
    days = published.table("wear_days").iter_rows(named=True)
    rows = [row for day in days for row in _day_rows(day, zones[day["patient_code"]], study_id)]
    types = {name: pl.Float64() if name in NUMERIC else pl.String() for name in VARIABLES}
    frame = pl.DataFrame(rows, schema=types)
    return frame.with_columns(pl.int_range(1, pl.len() + 1).over("USUBJID").cast(pl.Float64).alias("EGSEQ"))


def _day_rows(day: dict[str, Any], zone: str, study_id: str) -> Iterator[dict[str, Any]]:
    begin = datetime.combine(day["local_day"], time(), ZoneInfo(zone))
    end = datetime.combine(day["local_day"] + timedelta(days=1), time(), ZoneInfo(zone))
    common = {
        "STUDYID": study_id,
        "DOMAIN": "EG",
        "USUBJID": f"{study_id}-{day['patient_code']}",
        "EGSEQ": None,
        "EGCAT": "AMBULATORY SINGLE-LEAD ECG",
        "EGMETHOD": "AUTOMATIC DETECTION, NOT OVER-READ",
        "EGEVAL": "ALGORITHM",
        "EGDTC": begin.isoformat(),
        "EGENDTC": end.isoformat(),
    }
    for test in TESTS:
        yield common | {"EGTESTCD": test.code, "EGTEST": test.name} | _result(test, day[test.column])


def _result(test: Test, value: float | None) -> dict[str, Any]:
    if value is None:
        not_done = {"EGSTAT": "NOT DONE", "EGREASND": "NO ANALYSABLE TIME", "EGSTRESN": None}
        return dict.fromkeys(("EGORRES", "EGORRESU", "EGSTRESC", "EGSTRESU"), "") | not_done
    text = f"{value:.{test.decimals}f}"
    result = {"EGORRES": text, "EGSTRESC": text, "EGSTRESN": float(text)}
    return result | {"EGORRESU": test.unit, "EGSTRESU": test.unit, "EGSTAT": "", "EGREASND": ""}


def export_sdtm_csv(published: Published, folder: Path, study_id: str) -> list[Path]:
    """Write eg.csv and README.txt into `folder`."""
    folder.mkdir(parents=True, exist_ok=True)
    eg_domain(published, study_id).write_csv(folder / "eg.csv", null_value="", quote_style="non_numeric")
    return [folder / "eg.csv", _readme(published, folder)]


def export_sdtm_xpt(published: Published, folder: Path, study_id: str) -> list[Path]:
    """Write eg.xpt and README.txt into `folder`. Raises TransportError for values that the format cannot hold."""
    content = transport.transport_file("EG", "Electrocardiogram", eg_domain(published, study_id), VARIABLES)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "eg.xpt").write_bytes(content)
    return [folder / "eg.xpt", _readme(published, folder)]


def _readme(published: Published, folder: Path) -> Path:
    file = folder / "README.txt"
    file.write_text("\n".join([*provenance(published).lines(), ""]), encoding="utf-8")
    return file
