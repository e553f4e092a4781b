"""Tables go out as CSV, Parquet and Excel with their dictionary, their origin and their cautions."""

from datetime import datetime
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from warehouse.cautions import CAUTIONS
from warehouse.exports import excel
from warehouse.exports.excel import ExcelError, export_excel
from warehouse.exports.table import export_csv, export_parquet
from warehouse.publish import publish
from warehouse.published import Published


@pytest.fixture
def published(lake: Any) -> Published:
    """One recording, a therapy whose text looks like a formula, a family with an averaged shape."""
    lake.patient("P1", "Europe/Lisbon")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-03T00:00")
    lake.therapy("P1", "2026-05-10")
    lake.therapies[0]["therapy_detail"] = "=1+1"
    family = {"recording_id": "R1", "fingerprint": "f1", "family": 0, "shape_mv": [0.5, -1.0]}
    lake.land("families", "R1", [family], fingerprint="f1")
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    return Published(lake.folder / "published")


def test_csv_reads_back_equal(published: Published, tmp_path: Path) -> None:
    """Every value of a trend table comes back from its CSV file; instants carry Z, missing values are empty."""
    files = export_csv(published, tmp_path / "out", ["wear_days", "recordings", "families"])
    days = published.table("wear_days")
    back = pl.read_csv(tmp_path / "out" / "wear_days.csv", schema=days.schema)
    assert back.equals(days)
    recordings = (tmp_path / "out" / "recordings.csv").read_text()
    assert "2026-05-01T00:00:00.000000Z" in recordings
    assert pl.read_csv(tmp_path / "out" / "families.csv")["shape_mv"].to_list() == ["0.5 -1.0"]
    assert {file.name for file in files} == {
        "wear_days.csv", "recordings.csv", "families.csv", "dictionary.csv", "README.txt",
    }  # fmt: skip


def test_parquet_reads_back_equal(published: Published, tmp_path: Path) -> None:
    """Parquet keeps every table as it is, with the dictionary of the exported tables only."""
    export_parquet(published, tmp_path, ["families", "wear_days", "beats"])
    for name in ("families", "wear_days", "beats"):
        assert pl.read_parquet(tmp_path / f"{name}.parquet").equals(published.table(name))
    assert set(pl.read_csv(tmp_path / "dictionary.csv")["table_name"]) == {"families", "wear_days", "beats"}


def test_an_export_names_its_origin_and_cautions(published: Published, tmp_path: Path) -> None:
    """Publication, fingerprint and every caution stand beside the tables."""
    export_csv(published, tmp_path, ["patients"])
    text = (tmp_path / "README.txt").read_text(encoding="utf-8")
    assert published.name in text
    assert "fingerprint: f1" in text
    assert all(caution in text for caution in CAUTIONS)


def test_the_workbook_shows_values_units_and_no_formulas(published: Published, tmp_path: Path) -> None:
    """A sheet holds the table's values with units in its heading, and text that looks like a formula stays text."""
    pytest.importorskip("xlsxwriter", reason="XlsxWriter is an extra")
    openpyxl = pytest.importorskip("openpyxl", reason="openpyxl reads the workbook back")
    (file,) = export_excel(published, tmp_path / "out.xlsx")
    book = openpyxl.load_workbook(file)
    days = list(book["wear_days"].values)
    assert days[0][:3] == ("patient_code", "local_day [patient's local day]", "day_h [h]")
    assert days[1][:3] == ("P1", datetime.fromisoformat("2026-05-01"), 24)
    assert "start_utc [UTC]" in next(book["recordings"].values)
    therapy = list(book["therapies"].values)[1]
    assert "=1+1" in therapy
    assert all(cell.data_type != "f" for sheet in book for row in sheet.iter_rows() for cell in row)
    about = [row[0] for row in book["about"].values]
    assert set(CAUTIONS) <= set(about)


def test_the_same_tables_make_the_same_workbook(published: Published, tmp_path: Path) -> None:
    """Two workbooks of one publication are equal byte for byte."""
    pytest.importorskip("xlsxwriter", reason="XlsxWriter is an extra")
    (a,), (b,) = export_excel(published, tmp_path / "a.xlsx"), export_excel(published, tmp_path / "b.xlsx")
    assert a.read_bytes() == b.read_bytes()


def test_a_table_too_long_for_a_sheet_is_refused(
    published: Published, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The message names the table, its rows and the formats that can hold it."""
    pytest.importorskip("xlsxwriter", reason="XlsxWriter is an extra")
    monkeypatch.setattr(excel, "MAX_ROWS", 1)
    with pytest.raises(ExcelError, match=r"wear_days has 3 rows, a sheet holds 1; export it as CSV or Parquet"):
        export_excel(published, tmp_path / "out.xlsx", ["wear_days"])
    assert not (tmp_path / "out.xlsx").exists()
