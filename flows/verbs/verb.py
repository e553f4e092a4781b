"""What a verb is, and the arguments that several verbs share."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple


class Verb(NamedTuple):
    """One verb: its name, what it does in one line, an example, its arguments and its body (returns the exit code)."""

    name: str
    summary: str
    example: str
    arguments: Callable[[argparse.ArgumentParser], None]
    body: Callable[[argparse.Namespace], int]


def folder_argument(parser: argparse.ArgumentParser, meaning: str = "programme folder") -> None:
    """Add the folder that nearly every verb works on."""
    parser.add_argument("folder", metavar="DIR", type=Path, help=meaning)


def json_option(parser: argparse.ArgumentParser) -> None:
    """Add --json."""
    parser.add_argument("--json", action="store_true", help="print one JSON value for programs")


def actor_option(parser: argparse.ArgumentParser) -> None:
    """Add --by: who stands behind a change in the history."""
    parser.add_argument("--by", metavar="CODE", default=None, help="your code, kept in the history beside the change")
