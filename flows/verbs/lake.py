"""Verbs about what the lake holds and which results of it are published."""

from __future__ import annotations

import argparse
import json
import sys

from flows.verbs.verb import Verb, actor_option, folder_argument, json_option


def _verify(asked: argparse.Namespace) -> int:
    from warehouse.ledger import verify

    damages = verify(asked.folder / "lake")
    if asked.json:
        print(json.dumps([damage._asdict() for damage in damages]))
    else:
        for damage in damages:
            print(f"{damage.path}: {damage.problem}")
        print(f"{len(damages)} damaged parts" if damages else "every part is as it was landed")
    return 1 if damages else 0


def _verify_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    json_option(parser)


def _tidy_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("--grace-h", type=float, default=24.0, help="keep unreferenced parts younger than this, hours")


def _tidy(asked: argparse.Namespace) -> int:
    from flows.lock import folder_lock
    from warehouse.cuts import kept_parts
    from warehouse.ledger import tidy
    from warehouse.published import Published

    published = asked.folder / "published"
    with folder_lock(asked.folder):
        keep = kept_parts(published)
        if (published / "current").exists():
            keep |= set(Published(published).table("parts")["part_path"])
        removed = tidy(asked.folder / "lake", asked.grace_h * 3600.0, keep=keep)
    print(f"removed {len(removed)} parts that nothing refers to")
    return 0


def _compare_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument("a", metavar="A", help="fingerprint, or `present` for the present detector and settings")
    parser.add_argument("b", metavar="B", help="the other fingerprint")
    json_option(parser)


def _compare(asked: argparse.Namespace) -> int:
    from flows.comparison import compare_fingerprints

    patients, verdicts = compare_fingerprints(asked.folder, asked.a, asked.b)
    if asked.json:
        print(json.dumps({"patients": patients.to_dicts(), "verdicts": verdicts.to_dicts()}, default=str))
        return 0
    from flows.answers import print_answer

    print("what moves per patient")
    print_answer(patients)
    print("\nverdicts that change")
    print_answer(verdicts)
    return 0


def _promote_arguments(parser: argparse.ArgumentParser) -> None:
    folder_argument(parser)
    parser.add_argument(
        "fingerprint", metavar="FINGERPRINT", help="what to publish, or `present` to follow the settings"
    )
    parser.add_argument("--reason", required=True, help="why, kept in the history")
    actor_option(parser)


def _promote(asked: argparse.Namespace) -> int:
    from flows import settings
    from flows.lock import folder_lock
    from flows.promotion import promote
    from warehouse.ledger import Ledger

    programme = settings.load(asked.folder / "programme.toml")
    lake = asked.folder / "lake"
    with folder_lock(asked.folder):
        promote(lake, programme, Ledger(lake), asked.fingerprint, asked.reason, asked.by)
    print(f"{asked.fingerprint} is published from the next run on; now: burdenline run {asked.folder}", file=sys.stderr)
    return 0


VERBS = (
    Verb("verify", "find every part whose bytes changed", "burdenline verify coast", _verify_arguments, _verify),
    Verb("tidy", "remove parts that nothing refers to", "burdenline tidy coast --grace-h 48", _tidy_arguments, _tidy),
    Verb(
        "compare",
        "show what another detector version or other settings move",
        "burdenline compare coast ec68acdd0e0b present",
        _compare_arguments,
        _compare,
    ),
    Verb(
        "promote",
        "choose which fingerprint is published",
        'burdenline promote coast ec68acdd0e0b --reason "trial protocol 2.1" --by qa-2',
        _promote_arguments,
        _promote,
    ),
)
