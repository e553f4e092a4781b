"""One page with the figures of a scoring against expert labels; needs no other file and no network."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from dashboards.alone import render_alone


def render(report: Mapping[str, Any]) -> str:
    """Return the page for a report of plain values, as `burdenline score --json` prints it."""
    return render_alone("score.html.j2", report=report)
