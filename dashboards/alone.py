"""A page that stands alone: one file with its style inside, no script, nothing asked for."""

from __future__ import annotations

import base64
import hashlib
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from dashboards import words

_ROOM = Path(__file__).parent


def render_alone(template: str, **values: Any) -> str:
    """Return the page that a template makes of plain values; it gets `style`, and `style_hash` for its own policy."""
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_ROOM / "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= words.FILTERS
    style = (_ROOM / "assets" / "site.css").read_text(encoding="utf-8")
    return environment.get_template(template).render(
        **values,
        words=words,
        style=Markup(style),  # our own file, no user text
        style_hash=base64.b64encode(hashlib.sha256(style.encode()).digest()).decode(),
    )
