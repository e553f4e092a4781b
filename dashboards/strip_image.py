"""One ECG strip as a PNG file that stands alone: the same page as the SVG, a pixel for every 0.1 mm (254 dots an inch)."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from dashboards import words
from dashboards.strip_file import CALIBRATION_ROOM, LINE_HEIGHT, TOP, page
from dashboards.strips import GRID, UNITS_PER_MM, UNITS_PER_MV, Drawing

if TYPE_CHECKING:
    from PIL import ImageDraw

DOTS_PER_INCH = 25.4 * UNITS_PER_MM
PAPER, FINE, COARSE, INK, GREY = "#fffdf7", "#e9dccb", "#d8c3a8", "#16242a", "#566469"

Points = list[tuple[int, int]]


class ImageError(RuntimeError):
    """Images cannot be drawn here; the message says what to install."""


def render(strip: Mapping[str, Any], drawing: Drawing, told: Sequence[str]) -> bytes:
    """Return the PNG file of a row of `strips`; `told` are the sentences below the trace, also kept as its description."""
    try:
        from PIL import Image, ImageDraw, PngImagePlugin
    except ModuleNotFoundError:
        raise ImageError("PNG files need the library Pillow: pip install 'burdenline[png]'") from None
    sheet = page(drawing, told)
    image = Image.new("RGB", (sheet.width, sheet.height), PAPER)
    pen = ImageDraw.Draw(image)
    _grid(pen, drawing)
    zero_y = TOP + drawing.zero_y
    pulse = [(5, 0), (15, 0), (15, -UNITS_PER_MV), (65, -UNITS_PER_MV), (65, 0), (75, 0)]
    pen.line([(x, zero_y + y) for x, y in pulse], INK, 3)
    for line in lines(drawing.path):
        pen.line([(CALIBRATION_ROOM + x, zero_y + y) for x, y in line], INK, 3, joint="curve")
    _texts(pen, strip, drawing, sheet.lines)
    description = PngImagePlugin.PngInfo()
    description.add_itxt("Description", " ".join(told))
    content = io.BytesIO()
    image.save(content, "PNG", dpi=(DOTS_PER_INCH, DOTS_PER_INCH), pnginfo=description)
    return content.getvalue()


def lines(path: str) -> Iterator[Points]:
    """Points of each unbroken line of a drawing's path: absolute starts, then relative steps."""
    for begin, steps in re.findall(r"M(-?\d+ -?\d+)l([^M]*)", path):
        x, y = map(int, begin.split())
        points = [(x, y)]
        figures = [int(figure) for figure in steps.split()]
        for dx, dy in zip(figures[::2], figures[1::2], strict=True):
            x, y = x + dx, y + dy
            points.append((x, y))
        yield points


def _grid(pen: ImageDraw.ImageDraw, drawing: Drawing) -> None:
    """Lines every millimetre, darker ones every five, behind the trace."""
    right, bottom = CALIBRATION_ROOM + drawing.width, TOP + drawing.height
    for spacing, colour in ((UNITS_PER_MM, FINE), (GRID, COARSE)):
        for x in range(CALIBRATION_ROOM, right, spacing):
            pen.line([(x, TOP), (x, bottom - 1)], colour)
        for y in range(TOP, bottom, spacing):
            pen.line([(CALIBRATION_ROOM, y), (right - 1, y)], colour)


def _texts(pen: ImageDraw.ImageDraw, strip: Mapping[str, Any], drawing: Drawing, below: Sequence[str]) -> None:
    from PIL import ImageFont

    title = f"{strip['recording_id']} · {words.sentence(strip['strip_reason'])} · {strip['start_utc']} UTC · 25 mm/s, 10 mm/mV"
    cut = " · part of the trace lies beyond the drawing" if drawing.is_cut else ""
    pen.text((5, 55), title + cut, INK, ImageFont.load_default(32), anchor="ls")
    for mark in drawing.marks:
        pen.text((CALIBRATION_ROOM + mark.x, TOP + 40), mark.beat_class, INK, ImageFont.load_default(34), anchor="ms")
    for number, line in enumerate(below, start=1):
        place = (5, TOP + drawing.height + LINE_HEIGHT * number)
        pen.text(place, line, GREY, ImageFont.load_default(28), anchor="ls")
