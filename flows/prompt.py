"""Ask query after query at a prompt; what was asked is remembered from one time to the next."""

from __future__ import annotations

import os
import readline
import sys
from collections.abc import Iterator
from pathlib import Path

from flows.answers import print_answer
from warehouse.published import Published, QueryError

GREETING = "End a query with ; and leave with Ctrl-D. `from data_dictionary` lists every table and column."
_PROMPT, _MORE = "ask> ", "...> "


def ask(published: Published) -> None:
    """Answer queries until the end of input; a query that cannot be answered is said and does not end the prompt."""
    print(GREETING, file=sys.stderr)
    history = Path(os.environ.get("XDG_STATE_HOME", Path.home())) / ".burdenline_history"
    if history.exists():
        readline.read_history_file(history)
    for query in _queries():
        try:
            print_answer(published.frame(query))
        except QueryError as problem:
            print(problem, file=sys.stderr)
    if sys.stdin.isatty():
        readline.write_history_file(history)


def _queries() -> Iterator[str]:
    lines: list[str] = []
    while True:
        try:
            lines.append(input(_MORE if lines else _PROMPT))
        except EOFError:
            break
        if lines[-1].rstrip().endswith(";"):
            yield "\n".join(lines).strip().removesuffix(";")
            lines.clear()
    if any(line.strip() for line in lines):
        yield "\n".join(lines)
