"""Text files of numbers in columns: comma, semicolon, tab or blank separated, with or without times.

There is no standard; RFC 4180 is followed where it says something. The layout comes from the first lines and from the
site's settings. A file whose rows have different numbers of values is refused, but for a cut last line.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import NamedTuple

import numpy as np
import polars as pl

from flows.readers.channels import ECG_NAME
from flows.readers.codes import Refused
from flows.readers.columns import TIME, VALUE, Layout, layout_of, opened_from, unclear
from flows.readers.recording import Opened, Site, finding

NAME = "text"
_HEAD_BYTES = 65_536
_SEPARATORS = {"comma": ",", "semicolon": ";", "tab": "\t", "blank": " "}
_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?")
_TIME = re.compile(r"\d{1,4}[-./]\d{1,2}[-./]\d{1,4}([T ]\d{1,2}:\d{2}.*)?|\d{1,2}:\d{2}(:\d{2}.*)?")
_SAMPLE_LINES = 50
_MOST_ODD_VALUES = 0.5


class _Form(NamedTuple):
    """How the text is written."""

    skipped_lines: int
    names: list[str]
    are_names: bool
    separator: str
    first_rows: list[list[str]]


def identify(head: bytes) -> bool:
    """Most of the first lines are numbers or times, or the only line is a heading that names an ECG."""
    text = _decoded(head)
    if text is None:
        return False
    lines = [line for line in text.splitlines()[:_SAMPLE_LINES] if line.strip() and not line.startswith("#")]
    if len(lines) == 1:
        return ECG_NAME.search(lines[0]) is not None and len(lines[0]) < 200
    if len(head) >= 4096:
        lines = lines[:-1]  # the last one may be cut
    numeric = sum(_is_row(line) for line in lines[1:])
    return len(lines) > 1 and numeric * 10 >= 8 * (len(lines) - 1)


def _decoded(head: bytes) -> str | None:
    if b"\0" in head:
        return None
    try:
        return head.decode("utf-8-sig")
    except UnicodeDecodeError:
        return head.decode("latin-1")


def _is_row(line: str) -> bool:
    fields = [field.strip(' "') for field in re.split(r"[;\t ]+|,(?!\d+(?:;|$))", line.strip())]
    counted = [field for field in fields if field]
    return bool(counted) and any(_is_value(field) for field in counted)


def _is_value(field: str) -> bool:
    return bool(_NUMBER.fullmatch(field) or _TIME.fullmatch(field))


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG column of one file; raises Refused."""
    path = files[0]
    form = _form(path, site)
    layout = layout_of(form.names, form.are_names, site)
    decimal = _decimal(form, layout, site)
    is_cut = _check_rows(path, form)
    zone, time_format = _time_form(form, layout, site)
    batches = _batches(path, form, layout, decimal, time_format, is_cut)
    findings = (finding("file_cut_short", "the last line is not whole"),) if is_cut else ()
    try:
        return opened_from(batches, layout, site, format_name=NAME, zone=zone, findings=findings)
    except pl.exceptions.PolarsError as problem:
        raise unclear("a row or a time cannot be read as the first ones", "time_format or separator") from problem


def _form(path: Path, site: Site) -> _Form:
    with path.open("rb") as file:
        text = _decoded(file.read(_HEAD_BYTES)) or ""
    lines = text.splitlines()
    if len(text) >= _HEAD_BYTES // 2:
        lines = lines[:-1]
    skipped = next((n for n, line in enumerate(lines) if line.strip() and not line.startswith("#")), 0)
    lines = [line for line in lines[skipped : skipped + _SAMPLE_LINES] if line.strip()]
    separator = _SEPARATORS.get(site.separator, site.separator) or _separator(lines)
    rows = [[field.strip(' "\r') for field in line.split(separator)] if separator else [line] for line in lines]
    are_names = not any(_is_value(field) for field in rows[0])
    names = rows[0] if are_names else [f"column {n + 1}" for n in range(len(rows[0]))]
    if are_names and len(rows) == 1:
        raise Refused("no_samples", "text: a heading and no rows; expected samples. Export the recording again.")
    return _Form(skipped + int(are_names), names, are_names, separator or ",", rows[int(are_names) :])


def _separator(lines: list[str]) -> str:
    """The sign that cuts every line into the same number of fields; empty for a single column."""
    whole = lines[:-1] if len(lines) > 2 else lines
    for separator in (";", "\t", ",", " "):
        counts = {line.strip().count(separator) for line in whole}
        if len(counts) == 1 and counts != {0}:
            return separator
    if any(separator in line for line in whole for separator in ";\t,"):
        raise unclear("rows have different numbers of values; expected one separator and equal rows", "separator")
    return ""


def _decimal(form: _Form, layout: Layout, site: Site) -> str:
    if site.decimal in ("comma", ","):
        return ","
    values = [row[layout.value] for row in form.first_rows if len(row) > layout.value]
    has_comma = any("," in value for value in values)
    if has_comma and not site.decimal:
        raise unclear("values have commas; expected the decimal sign", "decimal = comma")
    odd = sum(not _NUMBER.fullmatch(value) for value in values)
    if odd > _MOST_ODD_VALUES * len(values):
        raise unclear(f"{odd} of the first {len(values)} values of the ECG are no numbers", "ecg_column")
    return "."


def _time_form(form: _Form, layout: Layout, site: Site) -> tuple[str | None, str | None]:
    """Zone of the times (UTC where they carry an offset) and their strptime format, None for numbers."""
    if layout.time is None:
        return None, None
    sample = next((row[layout.time] for row in form.first_rows if len(row) > layout.time), "")
    if layout.ns_per_time is not None:
        return None, None
    if site.time_format:
        return ("UTC" if "%z" in site.time_format else None), site.time_format
    iso = re.fullmatch(r"\d{4}-\d\d-\d\d([T ])\d\d:\d\d:\d\d(\.\d+)?(Z|[+-]\d\d:?\d\d)?", sample)
    if iso is None:
        raise unclear("times are neither ISO 8601 nor seconds by their name; expected a format", "time_format")
    fraction = "%.f" if iso[2] else ""
    return ("UTC" if iso[3] else None), f"%Y-%m-%d{iso[1]}%H:%M:%S{fraction}" + ("%#z" if iso[3] else "")


def _check_rows(path: Path, form: _Form) -> bool:
    """Whether only the last line is cut; raises Refused where rows have different numbers of values."""
    expected = len(form.names) - 1
    mark = form.separator.encode()[0]
    if expected == 0:
        return False
    line_no, carried = 0, b""
    with path.open("rb") as file:
        while piece := file.read(2**22):
            block = carried + piece
            end = block.rfind(b"\n") + 1
            carried = block[end:]
            counts = _counts(np.frombuffer(block[:end], np.uint8), mark)
            for at in np.flatnonzero(counts != expected):
                row = line_no + int(at)
                if row >= form.skipped_lines and not _is_blank(block[:end], int(at)):
                    raise Refused(
                        "text_layout_unclear",
                        f"text: row {row + 1} has {int(counts[at]) + 1} values; expected {expected + 1} as in the "
                        "first. Export the file again.",
                    )
            line_no += counts.size
    return bool(carried.strip()) and carried.count(form.separator.encode()) != expected


def _counts(text: np.ndarray, mark: int) -> np.ndarray:
    """Separators per line."""
    ends = np.flatnonzero(text == 0x0A)
    return np.diff(np.searchsorted(np.flatnonzero(text == mark), ends), prepend=0)


def _is_blank(block: bytes, line: int) -> bool:
    return not block.split(b"\n", line + 1)[line].strip()


def _batches(
    path: Path, form: _Form, layout: Layout, decimal: str, time_format: str | None, is_cut: bool
) -> Iterator[pl.DataFrame]:
    rows = pl.scan_csv(
        path,
        separator=form.separator,
        has_header=False,
        skip_rows=form.skipped_lines,
        new_columns=[f"c{n}" for n in range(len(form.names))],
        infer_schema=False,
        truncate_ragged_lines=True,
        encoding="utf8-lossy",
    )
    value = pl.col(f"c{layout.value}").str.strip_chars()
    if decimal == ",":
        value = value.str.replace(",", ".", literal=True)
    columns = [value.cast(pl.Float64, strict=False).alias(VALUE)]
    if layout.time is not None:
        columns.append(_time_ns(pl.col(f"c{layout.time}").str.strip_chars(), layout, time_format).alias(TIME))
    held: pl.DataFrame | None = None
    for batch in rows.select(columns).collect_batches(maintain_order=True):
        if held is not None:
            yield _timed(held)
        held = batch
    if held is not None:
        yield _timed(held.head(-1) if is_cut else held)


def _time_ns(text: pl.Expr, layout: Layout, time_format: str | None) -> pl.Expr:
    if time_format is None:
        seconds = text.str.replace(",", ".", literal=True).cast(pl.Float64, strict=False)
        return (seconds * (layout.ns_per_time or 1)).round().cast(pl.Int64)
    if time_format.endswith(("%z", "%#z")):
        return text.str.to_datetime(time_format, time_unit="ns", time_zone="UTC", strict=False).cast(pl.Int64)
    return text.str.to_datetime(time_format, time_unit="ns", strict=False).cast(pl.Int64)


def _timed(batch: pl.DataFrame) -> pl.DataFrame:
    if TIME in batch.columns and batch[TIME].null_count():
        raise unclear(f"{batch[TIME].null_count()} times cannot be read in the format of the first", "time_format")
    return batch
