"""The strips of every recording as SVG files: the warehouse has the samples, the dashboards draw them."""

from __future__ import annotations

from pathlib import Path

from dashboards.strip_file import render
from dashboards.strips import draw_strips
from warehouse.exports.provenance import provenance
from warehouse.parts import write_whole
from warehouse.published import Published


def export_strips(published: Published, folder: Path) -> list[Path]:
    """Write `<recording>_<segment>_<first sample>.svg` for every strip of the publication; returns the files."""
    told = provenance(published).lines()
    files = []
    for recording_id in published.table("recordings")["recording_id"]:
        strips = published.table("strips", {"recording_id": recording_id})
        for row, drawing in zip(strips.iter_rows(named=True), draw_strips(strips), strict=True):
            file = folder / f"{recording_id}_{row['segment']}_{row['first_sample']}.svg"
            write_whole(file, render(row, drawing, told).encode())
            files.append(file)
    return files
