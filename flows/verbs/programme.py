"""Verbs that make a programme, run it and tell how it stands."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from flows.verbs.verb import Verb, actor_option, folder_argument, json_option


def _init_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser, "folder to make")
    parser.add_argument("--name", default="", help="name of the programme on its pages")
    parser.add_argument("--zone", default="UTC", help="IANA time zone of the patients, for example Europe/Lisbon")


def _init(asked: argparse.Namespace) -> int:
    from flows.programme import make_folder

    make_folder(asked.folder, asked.name or asked.folder.resolve().name, asked.zone)
    print(
        f"made {asked.folder}: fill in register/*.csv, drop exports into inbox/, then `burdenline run {asked.folder}`"
    )
    return 0


def _run_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    json_option(parser)
    actor_option(parser)
    parser.add_argument(
        "--take-over", action="store_true", help="go on with the lake of a store on which another folder worked last"
    )
    parser.add_argument(
        "--wait", metavar="SECONDS", type=float, default=0.0, help="wait this long for another run to end"
    )


def _run(asked: argparse.Namespace) -> int:
    from flows import nightly
    from flows.progress import reporter

    outcome = nightly.run(
        asked.folder,
        reporter=reporter(as_json=asked.json),
        wait_s=asked.wait,
        actor_code=asked.by,
        take_over=asked.take_over,
    )
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


def _status_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    json_option(parser)
    parser.add_argument("--html", type=Path, metavar="FILE", help="also write the status as one page")


def _status(asked: argparse.Namespace) -> int:
    from dashboards.status_page import status_html
    from flows.status import status, status_text
    from warehouse.parts import write_whole

    found = status(asked.folder)
    if asked.html:
        write_whole(asked.html, status_html(found).encode())
    print(json.dumps(found) if asked.json else status_text(found))
    return 0


def _schedule_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("--cron", required=True, metavar="CRON", help='five cron fields, for example "0 3 * * *"')
    parser.add_argument(
        "--zone", default="", help="IANA time zone of the cron fields; the programme's zone when not given"
    )


def _schedule(asked: argparse.Namespace) -> int:
    from flows.schedule import serve_nightly

    serve_nightly(asked.folder, asked.cron, asked.zone)
    return 0


def _demo_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser, "new folder for the invented programme")
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
        "status",
        "tell how fresh the publication is and what waits",
        "burdenline status coast --json",
        _status_arguments,
        _status,
    ),
    Verb(
        "schedule",
        "run every night with Prefect on this host",
        'burdenline schedule coast --cron "0 3 * * *"',
        _schedule_arguments,
        _schedule,
    ),
)
