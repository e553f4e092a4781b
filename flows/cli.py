"""The command `burdenline`: one verb per thing a user does.

Nothing heavy is imported before a verb runs, so that --help answers at once.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NamedTuple

from warehouse.cautions import PURPOSE

ROOMS = ("flows", "detectors", "warehouse", "dashboards")


class Verb(NamedTuple):
    """One verb: its name, what it does in one line, an example, its arguments and its body."""

    name: str
    summary: str
    example: str
    arguments: Callable[[argparse.ArgumentParser], None]
    body: Callable[[argparse.Namespace], int]


def main(words: Sequence[str] | None = None) -> int:
    """Run one verb; returns the exit code: 0 done, 1 failed, 2 wrong usage, 3 done with refusals."""
    asked = _parser().parse_args(words)
    try:
        return asked.verb.body(asked)
    except BrokenPipeError:
        # The reader of our output has gone away (for example `| head`); Python would complain once more at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except KeyboardInterrupt:
        print("burdenline: stopped; nothing half-done is visible, run again to go on", file=sys.stderr)
        return 1
    except Exception as problem:
        if not _is_sentence(problem):
            raise
        print(f"burdenline: {_sentence(problem)}", file=sys.stderr)
        return 1


def _is_sentence(problem: Exception) -> bool:
    """Errors of our own rooms and of the operating system are sentences for the user; all others are bugs."""
    return isinstance(problem, OSError) or type(problem).__module__.split(".")[0] in ROOMS


def _sentence(problem: Exception) -> str:
    if isinstance(problem, OSError) and problem.strerror:
        return f"{problem.filename or 'operating system'}: {problem.strerror}; nothing was lost, mend it and run again"
    return str(problem)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="burdenline",
        description="Ectopy burden of patch recordings, per patient and day, and whether it changed after therapy.",
        epilog=PURPOSE,
    )
    parser.add_argument("--version", action="version", version=_Version())
    verbs = parser.add_subparsers(metavar="VERB", required=True)
    for verb in VERBS:
        sub = verbs.add_parser(
            verb.name,
            help=verb.summary,
            description=verb.summary[0].upper() + verb.summary[1:] + ".",
            epilog=f"example:\n  {verb.example}\n\n{PURPOSE}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        verb.arguments(sub)
        sub.set_defaults(verb=verb)
    return parser


class _Version(str):
    """Reads the installed version only when it is asked for."""

    __slots__ = ()

    def __mod__(self, names: Any) -> str:
        from importlib.metadata import version

        return f"burdenline {version('burdenline')}"


def _folder(parser: argparse.ArgumentParser, meaning: str = "programme folder") -> None:
    parser.add_argument("folder", metavar="DIR", type=Path, help=meaning)


def _json_option(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--json", action="store_true", help="print one JSON object for programs")


# init


def _init_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser, "folder to make")
    parser.add_argument("--name", default="", help="name of the programme on its pages")
    parser.add_argument("--zone", default="UTC", help="IANA time zone of the patients, for example Europe/Lisbon")


def _init(asked: argparse.Namespace) -> int:
    from flows.programme import make_folder

    make_folder(asked.folder, asked.name or asked.folder.resolve().name, asked.zone)
    print(
        f"made {asked.folder}: fill in register/*.csv, drop exports into inbox/, then `burdenline run {asked.folder}`"
    )
    return 0


# run


def _run_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser)
    _json_option(parser)
    parser.add_argument(
        "--wait", metavar="SECONDS", type=float, default=0.0, help="wait this long for another run to end"
    )


def _run(asked: argparse.Namespace) -> int:
    from flows import nightly
    from flows.progress import reporter

    outcome = nightly.run(asked.folder, reporter=reporter(as_json=asked.json), wait_s=asked.wait)
    if asked.json:
        print(json.dumps(outcome.as_dict()))
    else:
        print(_outcome_text(outcome))
    return outcome.exit_code


def _outcome_text(outcome: Any) -> str:
    counts = (
        f"{outcome.accepted} accepted, {outcome.waiting} waiting, {outcome.skipped} skipped, "
        f"{outcome.quarantined} quarantined; {outcome.analysed_recordings} recordings analysed"
    )
    where = f"pages: {outcome.pages}\ndatabase: {outcome.database}"
    return f"{outcome.outcome.replace('_', ' ')}: {counts}\n{where}"


# sql


def _sql_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser)
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


# status


def _status_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser)
    _json_option(parser)


def _status(asked: argparse.Namespace) -> int:
    from flows.status import status, status_text

    found = status(asked.folder)
    print(json.dumps(found) if asked.json else status_text(found))
    return 0


# demo


def _demo_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser, "new folder for the invented programme")
    parser.add_argument("--no-run", action="store_true", help="make folder, register and inbox only")


DEMO_QUERY = (
    "select patient_code, local_day, v_burden_pct, all_beats, round(analysable_h, 2) as analysable_h "
    "from wear_days where is_valid_day order by v_burden_pct desc limit 5"
)


def _demo(asked: argparse.Namespace) -> int:
    from flows.demo import make_programme

    if asked.folder.exists() and any(asked.folder.iterdir()):
        raise FileExistsError(17, "exists and is not empty; name a new folder for the demo", str(asked.folder))
    print(f"making an invented programme in {asked.folder}", file=sys.stderr)
    make_programme(asked.folder)
    if asked.no_run:
        print(f"made {asked.folder}; next: burdenline run {asked.folder}")
        return 0
    return _run_demo(asked.folder)


def _run_demo(folder: Path) -> int:
    from flows import nightly
    from flows.answers import print_answer
    from flows.progress import reporter
    from warehouse.published import Published

    outcome = nightly.run(folder, reporter=reporter(as_json=False))
    print(_outcome_text(outcome))
    print(f'\n$ burdenline sql {folder} "{DEMO_QUERY}"')
    print_answer(Published(folder / "published").frame(DEMO_QUERY))
    return 0


# inspect


def _inspect_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("file", metavar="FILE", type=Path, help="an export")
    _json_option(parser)


def _inspect(asked: argparse.Namespace) -> int:
    from flows.ingest import inspect

    found = inspect(asked.file)
    if asked.json:
        print(json.dumps(found, default=str))
    else:
        width = max(map(len, found))
        print("\n".join(f"{name.ljust(width)}  {value}" for name, value in found.items()))
    return 0


# retry


def _retry_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser)
    parser.add_argument("file", metavar="FILE", help="name of a file in the quarantine folder")


def _retry(asked: argparse.Namespace) -> int:
    from flows.inbox import retry

    retry(asked.folder, asked.file)
    print(f"{asked.file} is back in the inbox; next: burdenline run {asked.folder}")
    return 0


# score


def _score_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("folder", metavar="FOLDER", type=Path, help="folder of WFDB records with .atr beat labels")
    _json_option(parser)
    parser.add_argument("--html", metavar="FILE", type=Path, help="write one page with the tables")
    parser.add_argument(
        "--escape-as", choices=("S", "N"), default="S", help="class of supraventricular escape beats in the reference"
    )
    parser.add_argument("--learning-s", type=float, default=300.0, help="seconds at the start that are not scored")


def _score(asked: argparse.Namespace) -> int:
    from flows import score

    report = score.score_folder(asked.folder, escape_as=asked.escape_as, learning_s=asked.learning_s)
    if asked.html:
        score.write_page(report, asked.html)
    print(json.dumps(report.as_dict()) if asked.json else report.as_text())
    return 0


# schedule


def _schedule_arguments(parser: argparse.ArgumentParser) -> None:
    _folder(parser)
    parser.add_argument("--cron", required=True, metavar="CRON", help='five cron fields, for example "0 3 * * *"')
    parser.add_argument(
        "--zone", default="", help="IANA time zone of the cron fields; the programme's zone when not given"
    )


def _schedule(asked: argparse.Namespace) -> int:
    from flows.schedule import serve_nightly

    serve_nightly(asked.folder, asked.cron, asked.zone)
    return 0


VERBS = (
    Verb(
        "demo",
        "make an invented programme and run the whole job on it",
        "burdenline demo demo-programme",
        _demo_arguments,
        _demo,
    ),
    Verb(
        "init", "make an empty programme folder", "burdenline init coast --zone Europe/Lisbon", _init_arguments, _init
    ),
    Verb(
        "run",
        "ingest what arrived, analyse what is new, publish tables and pages",
        "burdenline run coast",
        _run_arguments,
        _run,
    ),
    Verb(
        "sql",
        "ask the published tables",
        'burdenline sql coast "select patient_code, local_day, v_burden_pct from wear_days" --csv',
        _sql_arguments,
        _sql,
    ),
    Verb(
        "status",
        "tell how fresh the publication is and what waits",
        "burdenline status coast --json",
        _status_arguments,
        _status,
    ),
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
        "burdenline retry coast night.edf",
        _retry_arguments,
        _retry,
    ),
    Verb(
        "score",
        "score the detector on annotated WFDB records by EC57",
        "burdenline score annotated/ --json",
        _score_arguments,
        _score,
    ),
    Verb(
        "schedule",
        "run every night with Prefect on this host",
        'burdenline schedule coast --cron "0 3 * * *"',
        _schedule_arguments,
        _schedule,
    ),
)


if __name__ == "__main__":
    sys.exit(main())
