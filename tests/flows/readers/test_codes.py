"""The one list of reason codes is the list that the source uses."""

import ast
from pathlib import Path

import pytest

from flows.readers.codes import FINDINGS, REFUSALS, SKIPPED, WAITING

ROOT = Path(__file__).parents[3]
LISTS = {"Refused": REFUSALS, "Waits": WAITING, "finding": FINDINGS, "_Skip": SKIPPED}


def used() -> dict[str, set[str]]:
    """Text constants by the list of the call they stand in, from all modules of flows."""
    found: dict[str, set[str]] = {name: set() for name in LISTS}
    for path in (ROOT / "flows").rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in LISTS and node.args:
                texts = (part.value for part in ast.walk(node.args[0]) if isinstance(part, ast.Constant))
                found[node.func.id] |= {text for text in texts if isinstance(text, str)}
    return found


@pytest.mark.parametrize("name", LISTS)
def test_every_code_that_is_given_is_in_its_list(name):
    """A refusal, wait, skip or finding carries a code of the list for its kind."""
    assert used()[name] <= set(LISTS[name])


def test_every_code_of_the_lists_is_given_somewhere():
    """The lists hold no code that the source never gives."""
    source = "".join(
        path.read_text(encoding="utf-8") for path in (ROOT / "flows").rglob("*.py") if path.name != "codes.py"
    )
    assert [code for codes in LISTS.values() for code in codes if f'"{code}"' not in source] == []
