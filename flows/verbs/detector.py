"""Verbs about the detector itself."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from flows.verbs.verb import Verb, json_option


def _score_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("folder", metavar="FOLDER", type=Path, help="folder of WFDB records with .atr beat labels")
    json_option(parser)
    parser.add_argument("--html", metavar="FILE", type=Path, help="write one page with the tables")
    parser.add_argument(
        "--escape-as", choices=("S", "N"), default="S", help="class of supraventricular escape beats in the reference"
    )
    parser.add_argument(
        "--noise", metavar="FOLDER", type=Path, help="folder of WFDB noise records to add to the signals"
    )
    parser.add_argument("--noise-records", metavar="NAMES", default="118,119", help="records that get the noise")
    parser.add_argument("--learning-s", type=float, default=300.0, help="seconds at the start that are not scored")


def _score(asked: argparse.Namespace) -> int:
    from flows.scoring import score

    report = score.score_folder(
        asked.folder,
        escape_as=asked.escape_as,
        learning_s=asked.learning_s,
        noise_folder=asked.noise,
        noise_records=tuple(asked.noise_records.split(",")),
        say=lambda line: print(line, file=sys.stderr, flush=True),
    )
    if asked.html:
        score.write_page(report, asked.html)
    print(json.dumps(report.as_dict()) if asked.json else report.as_text())
    return 0


VERBS = (
    Verb(
        "score",
        "score the detector on annotated WFDB records by EC57",
        "burdenline score annotated/ --json",
        _score_arguments,
        _score,
    ),
)
