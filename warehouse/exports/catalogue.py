"""Every export by the name under which `burdenline export DIR NAME --to PATH` offers it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple

from warehouse.exports.annotations import export_atr, export_edf_events
from warehouse.exports.excel import export_excel
from warehouse.exports.fhir import export_fhir
from warehouse.exports.sdtm import export_sdtm_csv, export_sdtm_xpt
from warehouse.exports.table import export_csv, export_parquet
from warehouse.published import Published


class Export(NamedTuple):
    """One export: what it writes where, and a function of publication, target and study code that writes it."""

    summary: str
    writes: str
    export: Callable[[Published, Path, str], list[Path]]


def _of_every_recording(export: Callable[[Published, Path, str], list[Path]]) -> Callable[..., list[Path]]:
    def export_all(published: Published, folder: Path, _: str) -> list[Path]:
        names = published.table("recordings")["recording_id"]
        return [file for name in names for file in export(published, folder, name)]

    return export_all


# "folder" and "file" say what --to names. The study code goes into SDTM rows; the other exports do without it.
EXPORTS: dict[str, Export] = {
    "csv": Export("trend tables as CSV", "folder", lambda published, to, _: export_csv(published, to)),
    "parquet": Export("trend tables as Parquet", "folder", lambda published, to, _: export_parquet(published, to)),
    "excel": Export("trend tables as a workbook", "file", lambda published, to, _: export_excel(published, to)),
    "fhir": Export("wear days and changes as FHIR", "file", lambda published, to, _: export_fhir(published, to)),
    "sdtm": Export("wear days as SDTM-like EG domain, CSV", "folder", export_sdtm_csv),
    "sdtm-xpt": Export("the same as a transport file", "folder", export_sdtm_xpt),
    "atr": Export("beats of every recording as WFDB annotations", "folder", _of_every_recording(export_atr)),
    "edf-events": Export("beats of every recording as EDF+", "folder", _of_every_recording(export_edf_events)),
}
