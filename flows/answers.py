"""How the answer of a query is printed: a table for people, CSV or JSON for programs, or a Parquet file."""

from __future__ import annotations

import io
import json
from pathlib import Path

import polars as pl

from warehouse.parts import write_whole


def print_answer(
    answer: pl.DataFrame, *, as_csv: bool = False, as_json: bool = False, parquet: Path | None = None
) -> None:
    """Print every row of the answer, or write it to `parquet`."""
    if parquet is not None:
        content = io.BytesIO()
        answer.write_parquet(content)
        write_whole(parquet, content.getbuffer())
        print(f"{answer.height} rows written to {parquet}")
    elif as_csv:
        print(answer.write_csv(), end="")
    elif as_json:
        print(json.dumps(answer.to_dicts(), default=str))
    else:
        print(_table(answer))


def _table(answer: pl.DataFrame) -> str:
    with pl.Config(
        tbl_rows=-1,
        tbl_cols=-1,
        tbl_width_chars=-1,
        fmt_str_lengths=100,
        tbl_hide_dataframe_shape=True,
        tbl_hide_column_data_types=True,
        tbl_formatting="MARKDOWN",
    ):
        return f"{answer}\n{answer.height} row{'s' if answer.height != 1 else ''}"
