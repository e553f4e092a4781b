"""Write the whole site of a publication: one folder of static files that works from disk, without a network.

Same tables, same bytes: nothing here reads a clock.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

from dashboards import addresses, cohort, methods, overview, patient, recording, review, trail
from dashboards.drawings import Drawings
from dashboards.press import Press
from dashboards.tables import PublishedTables, Tables


def build_site(
    published: PublishedTables, site: Path, *, programme_name: str, version: str, previous: Path | None = None
) -> None:
    """Write index.html and every other page, asset and data file of a publication into the folder `site`.

    `previous` is the site folder of the standing publication, if any: its unchanged pages are taken over.
    """
    tables = Tables(published)
    press = Press(site, previous, programme_name, version)
    press.write_assets()
    _write_programme(press, tables)
    for code in tables.whole("patients")["patient_code"]:
        _write_patient(press, tables, code)
    press.close()


def _write_programme(press: Press, tables: Tables) -> None:
    press.page(
        overview.PAGE, "overview.html.j2", tables.marks_of_whole(*overview.TABLES),
        lambda: overview.context(tables), lambda: overview.data_files(tables),
    )  # fmt: skip
    press.page(
        cohort.PAGE, "cohort.html.j2", tables.marks_of_whole(*cohort.TABLES),
        lambda: cohort.context(tables), lambda: cohort.data_files(tables),
    )  # fmt: skip
    press.page(
        trail.PAGE, "trail.html.j2", tables.marks_of_whole(*trail.TABLES),
        lambda: trail.context(tables), lambda: trail.data_files(tables),
    )  # fmt: skip
    press.page(
        "methods.html", "methods.html.j2", tables.marks_of_whole("fingerprints", "recordings"),
        lambda: methods.context(tables),
    )  # fmt: skip
    press.page(
        "dictionary.html", "dictionary.html.j2", [*tables.marks_of_whole("data_dictionary"), *map(str, tables.queries)],
        lambda: methods.dictionary_context(tables),
    )  # fmt: skip


def _write_patient(press: Press, tables: Tables, code: str) -> None:
    """Write a patient's page and those of the patient's recordings."""
    recordings = tables.of_patient("recordings", code).rows(named=True)
    drawings = {row["recording_id"]: Drawings(tables, row) for row in recordings}
    press.page(
        addresses.patient_page(code), "patient.html.j2", tables.marks_of_patient(code),
        lambda: patient.context(tables, code, drawings), lambda: patient.data_files(tables, code),
    )  # fmt: skip
    for row in recordings:
        _write_recording(press, tables, row, drawings[row["recording_id"]])


def _write_recording(press: Press, tables: Tables, row: dict[str, Any], drawings: Drawings) -> None:
    """Write a recording's page and its over-read sheet."""
    recording_id = row["recording_id"]
    marks = tables.marks_of_recording(recording_id)
    press.page(
        addresses.recording_page(recording_id), "recording.html.j2", marks,
        lambda: recording.context(tables, row, drawings), lambda: recording.data_files(tables, recording_id),
    )  # fmt: skip
    press.page(
        addresses.review_page(recording_id), "review.html.j2", marks, lambda: review.context(tables, row, drawings)
    )  # fmt: skip
