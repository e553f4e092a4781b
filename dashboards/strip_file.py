"""One ECG strip as an SVG file that stands alone: to paper scale, with what it is and its cautions as text."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from functools import cache
from pathlib import Path
from typing import Any, NamedTuple

import jinja2

from dashboards import words
from dashboards.strips import Drawing

CALIBRATION_ROOM = 80  # left of the trace, in units of 0.1 mm, as all lengths here
LINE_HEIGHT = 45
TOP = 2 * LINE_HEIGHT  # above the trace
SHORTEST_LINE = 60  # characters
_CHARACTER_WIDTH = 17


class Page(NamedTuple):
    """Box of a strip with the text below its trace."""

    lines: list[str]
    width: int
    height: int


def page(drawing: Drawing, told: Sequence[str]) -> Page:
    """Lay out a strip; `told` are the sentences that stand below the trace."""
    characters = max(SHORTEST_LINE, (CALIBRATION_ROOM + drawing.width) // _CHARACTER_WIDTH)
    lines = [line for sentence in told for line in textwrap.wrap(sentence, characters)]
    width = max(CALIBRATION_ROOM + drawing.width, SHORTEST_LINE * _CHARACTER_WIDTH)
    return Page(lines, width, TOP + drawing.height + LINE_HEIGHT * (len(lines) + 1))


def render(strip: Mapping[str, Any], drawing: Drawing, told: Sequence[str]) -> str:
    """Return the SVG text of a row of `strips`; `told` are the sentences that stand below the trace."""
    return _template().render(
        strip=strip, d=drawing, room=CALIBRATION_ROOM, top=TOP, line_height=LINE_HEIGHT, **page(drawing, told)._asdict()
    )


@cache
def _template() -> jinja2.Template:
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(Path(__file__).parent / "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= words.FILTERS
    return environment.get_template("strip.svg.j2")
