"""Every export of the catalogue writes the files that it names, from one publication."""

from pathlib import Path
from typing import Any

import pytest

from warehouse.exports.catalogue import EXPORTS
from warehouse.publish import publish
from warehouse.published import Published


@pytest.mark.parametrize("name", EXPORTS)
def test_an_export_writes_what_it_says(lake: Any, tmp_path: Path, name: str) -> None:
    """The files that are returned exist under the target and are not empty."""
    if name == "excel":
        pytest.importorskip("xlsxwriter", reason="XlsxWriter is an extra")
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    segment = {"recording_id": "R1", "segment": 0, "sample_count": 9, "start_utc": lake.wears[0]["from_utc"]}
    lake.land("segments", "R1", [segment])
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    target = tmp_path / ("out" if EXPORTS[name].writes == "folder" else "out.file")
    files = EXPORTS[name].export(Published(lake.folder / "published"), target, "STUDY-1")
    assert files
    assert all(file.stat().st_size > 0 for file in files)
    assert all(target in (file, *file.parents) for file in files)
