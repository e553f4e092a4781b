"""Verbs that read the published tables."""

from __future__ import annotations

import argparse
import json
import sys
from datetime import date
from pathlib import Path

from flows.verbs.verb import Verb, folder_argument, json_option


def _sql_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    query = parser.add_argument(
        "query",
        metavar="[QUERY]",
        help="one SQL query over the published tables, - to read it from standard input, nothing for a prompt",
    )
    # Not nargs="?": that takes the query as left out as soon as an option stands before it.
    query.required = False
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--csv", action="store_true", help="print comma-separated values")
    form.add_argument("--json", action="store_true", help="print a list of row objects")
    form.add_argument("--parquet", metavar="FILE", type=Path, help="write the rows to a Parquet file")


def _sql(asked: argparse.Namespace) -> int:
    from flows.answers import print_answer
    from warehouse.published import Published

    published = Published(asked.folder / "published")
    if asked.query is None:
        from flows.prompt import ask

        ask(published)
        return 0
    query = sys.stdin.read() if asked.query == "-" else asked.query
    print_answer(published.frame(query), as_csv=asked.csv, as_json=asked.json, parquet=asked.parquet)
    return 0


def _trace_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("--patient", metavar="CODE", required=True, help="patient code")
    parser.add_argument("--day", metavar="DATE", type=date.fromisoformat, required=True, help="local day, 2026-03-01")
    json_option(parser)


def _trace(asked: argparse.Namespace) -> int:
    from warehouse.published import Published
    from warehouse.trace import trace

    behind = trace(Published(asked.folder / "published"), asked.patient, asked.day)
    if asked.json:
        print(json.dumps({name: rows.to_dicts() for name, rows in behind.items()}, default=str))
        return 0
    from flows.answers import print_answer

    for name, rows in behind.items():
        print(f"\n{name}")
        print_answer(rows)
    return 0


VERBS = (
    Verb(
        "sql",
        "ask the published tables",
        'burdenline sql coast "select patient_code, local_day, v_burden_pct from wear_days" --csv',
        _sql_arguments,
        _sql,
    ),
    Verb(
        "trace",
        "list everything behind the numbers of one patient and day",
        "burdenline trace coast --patient HB-101 --day 2026-02-03",
        _trace_arguments,
        _trace,
    ),
)
