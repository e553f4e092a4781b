"""Verbs that read the published tables."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from flows.verbs.verb import Verb, folder_argument


def _sql_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument(
        "query", metavar="QUERY", help="one SQL query over the published tables, or - to read it from standard input"
    )
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--csv", action="store_true", help="print comma-separated values")
    form.add_argument("--json", action="store_true", help="print a list of row objects")
    form.add_argument("--parquet", metavar="FILE", type=Path, help="write the rows to a Parquet file")


def _sql(asked: argparse.Namespace) -> int:
    from flows.answers import print_answer
    from warehouse.published import Published

    query = sys.stdin.read() if asked.query == "-" else asked.query
    print_answer(
        Published(asked.folder / "published").frame(query), as_csv=asked.csv, as_json=asked.json, parquet=asked.parquet
    )
    return 0


VERBS = (
    Verb(
        "sql",
        "ask the published tables",
        'burdenline sql coast "select patient_code, local_day, v_burden_pct from wear_days" --csv',
        _sql_arguments,
        _sql,
    ),
)
