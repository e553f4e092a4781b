"""Verbs about frozen data cuts, exports and masked trials."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from flows.verbs.verb import Verb, actor_option, folder_argument


def _freeze_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("name", metavar="NAME", help="name of the cut")
    parser.add_argument("--reason", default="", help="why, kept with the cut")
    actor_option(parser)


def _freeze(asked: argparse.Namespace) -> int:
    from flows.data_cuts import freeze_standing

    cut = freeze_standing(asked.folder, asked.name, asked.reason, asked.by)
    print(f"frozen in {cut}; `burdenline thaw {asked.folder} {asked.name} --check` proves it at any time")
    return 0


def _thaw_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("name", metavar="NAME", help="name of the cut")
    parser.add_argument("--check", action="store_true", help="recompute every table from the same bytes and compare")


def _thaw(asked: argparse.Namespace) -> int:
    from flows.data_cuts import check_cut, cut_folder

    if not asked.check:
        print(f"pages: {cut_folder(asked.folder, asked.name) / 'site' / 'index.html'}")
        print(f"tables: {cut_folder(asked.folder, asked.name) / 'tables'}")
        return 0
    problems = check_cut(asked.folder, asked.name)
    for problem in problems:
        print(problem, file=sys.stderr)
    print(f"{len(problems)} problems" if problems else "every number comes out of the same bytes")
    return 1 if problems else 0


def _export_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument(
        "what",
        metavar="WHAT",
        help="csv, parquet, excel, fhir, sdtm, sdtm-xpt, atr, edf-events, strips (SVG) or strips-png",
    )
    parser.add_argument("--to", metavar="PATH", type=Path, required=True, help="file or folder to write")
    parser.add_argument("--cut", metavar="NAME", default="", help="export a frozen cut, not the standing publication")
    parser.add_argument("--study", metavar="CODE", default="STUDY", help="study code in SDTM-like rows")


def _export(asked: argparse.Namespace) -> int:
    from flows.exports import export

    for path in export(asked.folder, asked.what, asked.to, cut=asked.cut, study_code=asked.study):
        print(path)
    return 0


def _unmask_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("--reason", required=True, help="why the arms may be seen now, kept in the history")
    actor_option(parser)


def _unmask(asked: argparse.Namespace) -> int:
    from flows.unmasking import unmask

    unmask(asked.folder, asked.reason, asked.by)
    print(f"the arms are published from the next run on; now: burdenline run {asked.folder}")
    return 0


VERBS = (
    Verb(
        "freeze",
        "keep the standing publication with everything that its numbers follow from",
        'burdenline freeze coast visit-1 --reason "interim look" --by qa-2',
        _freeze_arguments,
        _freeze,
    ),
    Verb(
        "thaw",
        "open a frozen cut, or prove that its numbers still come out",
        "burdenline thaw coast visit-1 --check",
        _thaw_arguments,
        _thaw,
    ),
    Verb(
        "export",
        "write tables or beats for other programs",
        "burdenline export coast fhir --to coast.fhir.json",
        _export_arguments,
        _export,
    ),
    Verb(
        "unmask",
        "show the treatment arms of a masked trial from the next run on",
        'burdenline unmask coast --reason "database lock" --by dm-1',
        _unmask_arguments,
        _unmask,
    ),
)
