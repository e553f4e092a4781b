"""The strips of every recording as SVG or PNG files: the warehouse has the samples, the dashboards draw them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from dashboards import strip_file, strip_image
from dashboards.strips import Drawing, draw_strips
from warehouse.exports.provenance import provenance
from warehouse.parts import write_whole
from warehouse.published import Published


def export_strips(published: Published, folder: Path, form: str) -> list[Path]:
    """Write `<recording>_<segment>_<first sample>.<form>` for every strip of the publication; returns the files.

    `form` is svg or png.
    """
    told = provenance(published).lines()
    files = []
    for recording_id in published.table("recordings")["recording_id"]:
        strips = published.table("strips", {"recording_id": recording_id})
        for row, drawing in zip(strips.iter_rows(named=True), draw_strips(strips), strict=True):
            file = folder / f"{recording_id}_{row['segment']}_{row['first_sample']}.{form}"
            write_whole(file, _drawn(row, drawing, told, form))
            files.append(file)
    return files


def _drawn(row: Mapping[str, Any], drawing: Drawing, told: Sequence[str], form: str) -> bytes:
    if form == "png":
        return strip_image.render(row, drawing, told)
    return strip_file.render(row, drawing, told).encode()
