"""Trend tables as one Excel workbook: one sheet a table, headings with units and zones, no formulas."""

from __future__ import annotations

import io
from collections.abc import Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

import polars as pl

from warehouse import schema
from warehouse.exports.provenance import provenance
from warehouse.parts import write_whole
from warehouse.published import Published

SHEETS = ("patients", "recordings", "wear_days", "local_hours", "therapies", "periods", "changes", "attention")
MAX_ROWS = 1_048_576 - 1
"""Rows of an Excel sheet below its heading."""

# Text stays text: a register entry that begins with "=" or "http" must not become a formula or a link.
_OPTIONS = {
    "strings_to_formulas": False,
    "strings_to_urls": False,
    "strings_to_numbers": False,
    "constant_memory": True,
}
# The file says nothing about when it was written, so that the same tables make the same workbook.
_CREATED = datetime.fromisoformat("2000-01-01T00:00")
_FORMATS = {"DATE": "yyyy-mm-dd", "TIMESTAMP": "yyyy-mm-dd hh:mm:ss"}


class ExcelError(ValueError):
    """A workbook cannot be written; the message says why and what to do."""


def export_excel(published: Published, file: Path, tables: Sequence[str] = SHEETS) -> list[Path]:
    """Write a workbook with a sheet about its origin, one sheet per table, and the dictionary.

    Needs the library XlsxWriter. Raises ExcelError when it is missing or a table has too many rows for a sheet.
    """
    try:
        import xlsxwriter
    except ModuleNotFoundError:
        raise ExcelError("Excel files need the library XlsxWriter: pip install 'burdenline[excel]'") from None
    frames = {name: published.table(name) for name in tables}
    for name, frame in frames.items():
        if frame.height > MAX_ROWS:
            raise ExcelError(
                f"{name} has {frame.height:,} rows, a sheet holds {MAX_ROWS:,}; export it as CSV or Parquet"
            )
    file.parent.mkdir(parents=True, exist_ok=True)
    options = {**_OPTIONS, "default_date_format": _FORMATS["TIMESTAMP"], "tmpdir": str(file.parent)}
    content = io.BytesIO()
    dictionary = published.table("data_dictionary").filter(pl.col("table_name").is_in(list(tables)))
    try:
        with xlsxwriter.Workbook(content, options) as book:
            book.set_properties({"title": "burdenline export", "created": _CREATED})
            _write_about(book, published)
            for name, frame in {**frames, "data_dictionary": dictionary}.items():
                _write_table(book, name, frame)
    except xlsxwriter.exceptions.FileCreateError as problem:  # the library's word for a full disk
        raise OSError(str(problem)) from problem
    write_whole(file, content.getbuffer())
    return [file]


def _write_about(book: Any, published: Published) -> None:
    sheet = book.add_worksheet("about")
    sheet.set_column(0, 0, 120)
    for row, line in enumerate(provenance(published).lines()):
        sheet.write_string(row, 0, line)


def _write_table(book: Any, name: str, frame: pl.DataFrame) -> None:
    sheet = book.add_worksheet(name)
    columns = [schema.COLUMNS[column] for column in frame.columns]
    formats = [book.add_format({"num_format": _FORMATS[c.type]}) if c.type in _FORMATS else None for c in columns]
    bold = book.add_format({"bold": True, "text_wrap": True})
    sheet.freeze_panes(1, 0)
    for number, column in enumerate(columns):
        sheet.set_column(number, number, max(12, len(column.name)))
        sheet.write_string(0, number, heading(column), bold)
    for row_number, row in enumerate(frame.iter_rows(), start=1):
        for number, value in enumerate(row):
            if value is not None:
                sheet.write(row_number, number, value, formats[number])


def heading(column: schema.Column) -> str:
    """Heading of a column with its unit; days name whose calendar they follow, instants their zone."""
    unit = "patient's local day" if column.type == "DATE" else column.unit
    return f"{column.name} [{unit}]" if unit else column.name
