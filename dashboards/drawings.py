"""The strips and averaged beats of one recording, drawn once for all pages that show them."""

from __future__ import annotations

from functools import cached_property
from typing import Any

from dashboards import addresses, marks, strips
from dashboards.tables import Tables


class Drawings:
    """Rows of a recording (a row of `recordings`) with their drawings, made when a page first asks for them."""

    def __init__(self, tables: Tables, recording: dict[str, Any]) -> None:
        self._tables = tables
        self._recording = recording

    @cached_property
    def strips(self) -> list[dict[str, Any]]:
        """Strip rows with their drawing, their zone and the patient's marks within them, in the order of the table."""
        recording_id, zone = self._recording["recording_id"], self._recording["zone"]
        rows = self._tables.large("strips", recording_id)
        pressed = self._tables.of_recording("marks", recording_id).sort("mark_utc", "mark_text").rows(named=True)
        beside = {"zone": zone, "page": addresses.recording_page(recording_id)}
        kept = rows.drop("samples_mv", "beat_samples", "beat_classes").rows(named=True)
        seconds = (rows["samples_mv"].list.len() / rows["fs_hz"]).to_list()
        return [
            row | beside | {"drawing": drawing, "marks": marks.within(row["start_utc"], length_s, pressed, zone)}
            for row, length_s, drawing in zip(kept, seconds, strips.draw_strips(rows), strict=True)
        ]

    @cached_property
    def families(self) -> list[dict[str, Any]]:
        """Family rows with the drawing of their averaged beat, largest first."""
        rows = self._tables.of_recording("families", self._recording["recording_id"])
        ordered = rows.sort("beat_count", "family", descending=[True, False])
        drawn = zip(ordered.drop("shape_mv").rows(named=True), strips.draw_shapes(ordered), strict=True)
        return [row | {"drawing": drawing} for row, drawing in drawn]
