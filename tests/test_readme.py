"""The README says what the product does: its commands exist and its queries are those that are tested."""

import re
from pathlib import Path

import pytest

from flows.cli import VERBS
from warehouse.published import worked_queries

README = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")


def test_both_commands_of_a_newcomer_stand_on_the_first_screen():
    """The demo and the tests are one command each, complete in a fresh clone."""
    first_screen = README[:2600]
    install = "python3 -m venv .venv && .venv/bin/pip install -c constraints.txt"
    assert f"{install} . && .venv/bin/burdenline demo demo-programme" in first_screen
    assert f"{install} -e '.[test]' && .venv/bin/python -m pytest" in first_screen


def test_every_command_in_the_readme_exists():
    """Each verb that the README shows is a verb of the command."""
    blocks = "".join(re.findall(r"```sh\n(.*?)```", README, flags=re.S))
    shown = set(re.findall(r"^burdenline (\w+)", blocks, flags=re.M)) | set(re.findall(r"`burdenline (\w+)", README))
    assert shown <= {verb.name for verb in VERBS}
    assert {"init", "run", "sql", "schedule", "score", "freeze", "thaw", "export"} <= shown


def test_every_query_in_the_readme_is_a_worked_query():
    """The SQL of the README is word for word that of warehouse/queries, which the tests run."""
    worked = {query.sql for query in worked_queries()}
    shown = re.findall(r"```sql\n(.*?)\n```", README, flags=re.S)
    assert len(shown) >= 4
    assert set(shown) <= worked


@pytest.mark.parametrize("verb", VERBS, ids=lambda verb: verb.name)
def test_every_example_of_help_is_a_call_of_its_verb(verb):
    """The example in a verb's help begins with the verb."""
    assert verb.example.split()[:2] == ["burdenline", verb.name]
