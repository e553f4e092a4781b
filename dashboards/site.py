"""Write the whole site of a publication: one folder of static files that works from disk, without a network.

Same tables, same bytes: nothing here reads a clock. A page whose inputs did not change since the previous site is taken
over from there instead of being rendered again.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Callable, Iterable, Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

import jinja2
import polars as pl

from dashboards import addresses, methods, overview, patient, recording, review, words
from dashboards.tables import PublishedTables, Tables
from warehouse.cautions import CAUTIONS

ROOM = Path(__file__).parent
MANIFEST = "pages.json"


def build_site(
    published: PublishedTables, site: Path, *, programme_name: str, version: str, previous: Path | None = None
) -> None:
    """Write index.html and every other page, asset and data file of a publication into the folder `site`.

    `previous` is the site folder of the standing publication, if any: its unchanged pages are taken over.
    """
    tables = Tables(published)
    press = Press(site, previous, programme_name, version)
    press.write_assets()
    press.page(
        overview.PAGE, "overview.html.j2", [tables.whole(name) for name in _OVERVIEW],
        lambda: overview.context(tables), lambda: overview.data_files(tables),
    )  # fmt: skip
    for code in tables.patients["patient_code"]:
        _write_patient(press, tables, code)
    for row in tables.whole("recordings").sort("recording_id").iter_rows(named=True):
        _write_recording(press, tables, row)
    made_of = [tables.whole("fingerprints"), tables.whole("recordings").select(pl.len())]
    press.page("methods.html", "methods.html.j2", made_of, lambda: methods.context(tables))
    dictionary = [tables.whole("data_dictionary"), pl.DataFrame(tables.queries, orient="row")]
    press.page("dictionary.html", "dictionary.html.j2", dictionary, lambda: methods.dictionary_context(tables))
    press.close()


_OVERVIEW = ("patients", "wear_days", "recordings", "therapies", "changes", "attention", "deliveries", "runs_of_flow")


def _write_patient(press: Press, tables: Tables, code: str) -> None:
    of_patient = [tables.of_patient(name, code) for name in Tables.BY_PATIENT]
    recordings = tables.of_patient("recordings", code)["recording_id"]
    of_recordings = [
        rows for each in recordings for rows in (tables.of_recording("families", each), tables.large("strips", each))
    ]
    zone = tables.patients.filter(pl.col("patient_code") == code)
    press.page(
        addresses.patient_page(code), "patient.html.j2", [zone, *of_patient, *of_recordings],
        lambda: patient.context(tables, code), lambda: patient.data_files(tables, code),
    )  # fmt: skip


def _write_recording(press: Press, tables: Tables, row: dict[str, Any]) -> None:
    """Write a recording's page and its over-read sheet."""
    recording_id = row["recording_id"]
    inputs = [tables.of_recording(name, recording_id) for name in Tables.BY_RECORDING]
    inputs += [tables.large(name, recording_id) for name in ("strips", "episodes", "quality_windows")]
    press.page(
        addresses.recording_page(recording_id), "recording.html.j2", [pl.DataFrame([row]), *inputs],
        lambda: recording.context(tables, row), lambda: recording.data_files(tables, recording_id),
    )  # fmt: skip
    press.page(
        addresses.review_page(recording_id), "review.html.j2", [pl.DataFrame([row]), *inputs],
        lambda: review.context(tables, row),
    )  # fmt: skip


# A spreadsheet runs text that begins like a formula; an apostrophe before it makes it text again.
_NO_FORMULA = pl.col(pl.String).str.replace(r"^([=+\-@\t\r])", "'$1")


class Press:
    """Renders pages into a site folder and remembers what each was made from."""

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
        inputs: Iterable[pl.DataFrame],
        context: Callable[[], Mapping[str, Any]],
        data_files: Callable[[], Mapping[str, pl.DataFrame]] = dict,
    ) -> None:
        """Write a page and its data files, or take both over from the previous site when their inputs are the same."""
        made_from = self._digest(inputs)
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

    def _digest(self, inputs: Iterable[pl.DataFrame]) -> str:
        digest = hashlib.sha256(self._edition.encode())
        for frame in inputs:
            digest.update(frame.write_ipc(None, compression="uncompressed").getbuffer())
        return digest.hexdigest()

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
        return "".join(f"# {' '.join(line.split())}\n" for line in head) + frame.with_columns(_NO_FORMULA).write_csv()

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
    environment.globals["words"] = words
    environment.policies["json.dumps_kwargs"] = {"sort_keys": True, "allow_nan": False, "separators": (",", ":")}
    return environment
