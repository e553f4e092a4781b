"""Verbs about what arrives."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from flows.verbs.verb import Verb, folder_argument, json_option


def _inspect_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("file", metavar="FILE", type=Path, help="an export")
    parser.add_argument("--programme", metavar="DIR", type=Path, help="read it with this programme's settings")
    json_option(parser)


def _inspect(asked: argparse.Namespace) -> int:
    from flows import settings
    from flows.arrivals.ingest import inspect

    found = inspect(asked.file, settings.load(asked.programme / "programme.toml") if asked.programme else None)
    if asked.json:
        print(json.dumps(found, default=str))
    else:
        width = max(map(len, found))
        print("\n".join(f"{name.ljust(width)}  {value}" for name, value in found.items()))
    return 0


def _retry_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("file", metavar="FILE", help="name of a file in the quarantine folder")


def _retry(asked: argparse.Namespace) -> int:
    from flows.arrivals.quarantine import retry

    retry(asked.folder, asked.file)
    print(f"{asked.file} is back in the inbox; next: burdenline run {asked.folder}")
    return 0


VERBS = (
    Verb(
        "inspect",
        "show what an export holds and what would be kept of it",
        "burdenline inspect night.edf",
        _inspect_arguments,
        _inspect,
    ),
    Verb(
        "retry",
        "put a quarantined file back into the inbox",
        "burdenline retry coast delivery-06f694d7.edf",
        _retry_arguments,
        _retry,
    ),
)
