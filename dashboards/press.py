"""Render pages into a site folder, and take over from the previous site what was made from the same rows."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Callable, Iterable, Mapping
from importlib.resources import files
from io import BytesIO
from pathlib import Path
from typing import Any

import jinja2
import polars as pl

from dashboards import addresses, words
from warehouse.cautions import CAUTIONS

ROOM = Path(__file__).parent
MANIFEST = "pages.json"

# What plotly.js puts into a page of its own accord: an empty style (it adds its rules to it one by one) and the style of
# the maps, which we do not draw. Only these very texts are allowed; a test in Chromium fails when plotly.js has others.
CHART_STYLE_SOURCES = (
    "'unsafe-hashes' 'sha256-47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU=' "
    "'sha256-ji27qzEtxXZW+7dun6UwjHXJ18e6WAin1VvNtkzIE/o='"
)

# A spreadsheet runs text that begins like a formula; an apostrophe before it makes it text again.
_NO_FORMULA = pl.col(pl.String).str.replace(r"^([=+\-@\t\r])", "'$1")


class Press:
    """Renders pages into a site folder and remembers what each was made from.

    `marks` of a page stand for the rows it shows; a page whose marks stand in the previous site is not rendered.
    """

    def __init__(self, site: Path, previous: Path | None, programme_name: str, version: str) -> None:
        self._site = site
        self._previous = previous
        self._frame = {"programme_name": programme_name, "version": version, "cautions": CAUTIONS}
        self._edition = hashlib.sha256(json.dumps(self._frame).encode() + _source_bytes()).hexdigest()
        self._known: dict[str, Any] = _manifest(previous)
        self._made: dict[str, Any] = {}
        self._templates = _templates()

    def page(
        self,
        address: str,
        template: str,
        marks: Iterable[str],
        context: Callable[[], Mapping[str, Any]],
        data_files: Callable[[], Mapping[str, pl.DataFrame]] = dict,
    ) -> None:
        """Write a page and its data files, or take both over from the previous site when its marks are the same."""
        made_from = hashlib.sha256("\n".join([self._edition, *marks]).encode()).hexdigest()
        known = self._known.get(address)
        if known and known["made_from"] == made_from and self._take_over(known["files"]):
            self._made[address] = known
            return
        frames = data_files()
        downloads = {name: addresses.data_file(address, name) for name in frames}
        for name, frame in frames.items():
            self._write(downloads[name], self._csv(frame))
        up = "../" * address.count("/")
        html = self._templates.get_template(template).render(
            **self._frame, **context(), address=address, up=up, downloads={n: up + d for n, d in downloads.items()}
        )
        self._write(address, html)
        self._made[address] = {"made_from": made_from, "files": [address, *downloads.values()]}

    def write_assets(self) -> None:
        """Copy style sheet, scripts and the one shared copy of plotly.js."""
        for asset in sorted((ROOM / "assets").iterdir()):
            self._write(f"assets/{asset.name}", asset.read_text(encoding="utf-8"))
        with (files("plotly") / "package_data" / "plotly.min.js").open("rb") as library:
            (self._site / "assets" / "plotly.min.js").write_bytes(library.read())

    def close(self) -> None:
        """Write what each page was made from, for the next publication."""
        self._write(MANIFEST, json.dumps(self._made, indent=0, sort_keys=True, ensure_ascii=True))

    def _take_over(self, names: list[str]) -> bool:
        if self._previous is None or not all((self._previous / name).is_file() for name in names):
            return False
        for name in names:
            target = self._site / name
            target.parent.mkdir(parents=True, exist_ok=True)
            _link_or_copy(self._previous / name, target)
        return True

    def _csv(self, frame: pl.DataFrame) -> str:
        head = [f"{self._frame['programme_name']}, burdenline {self._frame['version']}", *CAUTIONS]
        rows = BytesIO()
        frame.lazy().with_columns(_NO_FORMULA).sink_csv(rows)
        return "".join(f"# {' '.join(line.split())}\n" for line in head) + rows.getvalue().decode()

    def _write(self, name: str, text: str) -> None:
        target = self._site / name
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_text(text, encoding="utf-8", newline="\n")


def _link_or_copy(source: Path, target: Path) -> None:
    """Share the file's bytes where the file system can; pages are never changed in place."""
    try:
        os.link(source, target)
    except OSError:
        shutil.copyfile(source, target)


def _manifest(previous: Path | None) -> dict[str, Any]:
    if previous is None or not (previous / MANIFEST).is_file():
        return {}
    return json.loads((previous / MANIFEST).read_text(encoding="utf-8"))


def _source_bytes() -> bytes:
    """Return the bytes of everything in this room: a change of a template or of the code renders every page again."""
    sources = sorted(path for path in ROOM.rglob("*") if path.suffix in {".py", ".j2", ".css", ".js", ".json"})
    return b"".join(path.read_bytes() for path in sources)


def _templates() -> jinja2.Environment:
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(ROOM / "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        auto_reload=False,
    )
    environment.filters |= words.FILTERS
    environment.globals |= {"words": words, "chart_style_sources": CHART_STYLE_SOURCES}
    environment.policies["json.dumps_kwargs"] = {"sort_keys": True, "allow_nan": False, "separators": (",", ":")}
    return environment
