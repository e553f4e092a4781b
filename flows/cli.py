"""The command `burdenline`: one verb per thing a user does.

Nothing heavy is imported before a verb runs, so that --help answers at once.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Sequence
from typing import Any

from flows.sentences import is_sentence, sentence
from flows.verbs import cuts, deliveries, detector, lake, programme, tables
from warehouse.cautions import PURPOSE

VERBS = (
    *programme.VERBS,
    *deliveries.VERBS,
    *tables.VERBS,
    *cuts.VERBS,
    *lake.VERBS,
    *detector.VERBS,
)


def main(words: Sequence[str] | None = None) -> int:
    """Run one verb; returns the exit code: 0 done, 1 failed, 2 wrong usage, 3 done with refusals."""
    asked = _parser().parse_args(words)
    try:
        _refuse_newer(asked)
        return asked.verb.body(asked)
    except BrokenPipeError:
        # The reader of our output has gone away (for example `| head`); Python would complain once more at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except KeyboardInterrupt:
        print("burdenline: stopped; nothing half-done is visible, run again to go on", file=sys.stderr)
        return 1
    except Exception as problem:
        if not is_sentence(problem):
            raise
        print(f"burdenline: {sentence(problem)}", file=sys.stderr)
        return 1


def _refuse_newer(asked: argparse.Namespace) -> None:
    """Leave a folder alone that a newer version has written, whatever is asked of it."""
    if "folder" in asked:
        from warehouse.layout import refuse_newer

        refuse_newer(asked.folder / "lake")


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


if __name__ == "__main__":
    sys.exit(main())
