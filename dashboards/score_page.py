"""One page with the figures of a scoring against expert labels; needs no other file and no network."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from dashboards import words

_ROOM = Path(__file__).parent


def render(report: Mapping[str, Any]) -> str:
    """Return the page for a report of plain values, as `burdenline score --json` prints it."""
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_ROOM / "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= words.FILTERS
    style = Markup((_ROOM / "assets" / "site.css").read_text(encoding="utf-8"))  # our own file, no user text
    return environment.get_template("score.html.j2").render(report=report, style=style, words=words)
