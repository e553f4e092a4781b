"""Landed recording in, landed beats out: run the detector over the lake's samples and write its results as parts.

No detection happens here, only reading, naming and landing.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl

from detectors.analyse import DETECTOR_VERSION, analyse_recording
from detectors.results import PAUSE_KINDS, Analysis, Segment
from detectors.strips import beats_within, choose_strips
from detectors.tally import family_quarters, quarter_hours
from flows.settings import Settings, result_settings
from warehouse.parts import Part, SignalReader, frame_schema, write_part
from warehouse.schema import LAKE

BEATS_PER_PART = 50_000
_WRITERS = 2
_ADDED_LATER = ("recording_id", "fingerprint")
DERIVED_TABLES = (
    "beats", "families", "family_quarters", "episodes", "quality_windows", "findings", "quarter_hours", "strips",
)  # fmt: skip


def fingerprint_of(settings: Settings) -> str:
    """Name the detector version and all settings that change results by 12 hex digits."""
    return hashlib.sha256(_fingerprint_text(settings).encode()).hexdigest()[:12]


def _fingerprint_text(settings: Settings) -> str:
    return json.dumps({"detector": DETECTOR_VERSION, "settings": result_settings(settings)}, sort_keys=True)


def fingerprint_part(lake: Path, settings: Settings) -> Part:
    """Land the row that spells out the fingerprint."""
    name = fingerprint_of(settings)
    row = {
        "fingerprint": name,
        "detector_version": DETECTOR_VERSION,
        "settings_json": json.dumps(result_settings(settings), sort_keys=True),
    }
    return write_part(lake, "fingerprints", name, pl.DataFrame([row]), fingerprint=name)


def analyse_landed(
    lake: Path,
    recording: Mapping[str, Any],
    segments: pl.DataFrame,
    signal: Sequence[Part],
    settings: Settings,
    progress: Callable[[int], None] | None = None,
) -> Analysis:
    """Run the detector over one landed recording; `recording` and `segments` are rows of the lake tables."""
    reader = SignalReader(lake, signal, ahead=True)
    numbers = segments.sort("segment").select("segment", "sample_count")
    return analyse_recording(
        [Segment(samples, partial(reader.read, number)) for number, samples in numbers.iter_rows()],
        fs_hz=recording["fs_hz"],
        mv_per_count=recording["mv_per_count"],
        count_at_zero_mv=recording["count_at_zero_mv"],
        rails=_rails(recording),
        missing_count=recording["missing_count"],
        progress=progress,
        **result_settings(settings)["detector"],
    )


def _rails(recording: Mapping[str, Any]) -> tuple[int, int] | None:
    low, high = recording["rail_low_count"], recording["rail_high_count"]
    return None if low is None or high is None else (low, high)


def land_analysis(
    lake: Path,
    recording: Mapping[str, Any],
    segments: pl.DataFrame,
    signal: Sequence[Part],
    analysis: Analysis,
    fingerprint: str,
) -> dict[tuple[str, str], list[Part]]:
    """Write the derived tables of one recording as parts; returns what the ledger must commit.

    Two tables at a time: one is computed while the other is compressed and flushed to disk.
    """
    recording_id = recording["recording_id"]
    start_us = segments.sort("segment")["start_utc"].dt.timestamp("us").to_numpy()

    def write(made: tuple[str, Callable[[], pl.DataFrame]]) -> Part:
        table, frame = made
        rows = _conform(table, frame(), recording_id, fingerprint)
        return write_part(lake, table, recording_id, rows, fingerprint=fingerprint)

    loads: dict[tuple[str, str], list[Part]] = {}
    with ThreadPoolExecutor(_WRITERS) as pool:
        for part in pool.map(write, _frames(analysis, start_us, recording, SignalReader(lake, signal))):
            loads.setdefault((part.table, recording_id), []).append(part)
    return loads


def _frames(
    analysis: Analysis, start_us: np.ndarray, recording: Mapping[str, Any], reader: SignalReader
) -> Iterator[tuple[str, Callable[[], pl.DataFrame]]]:
    """How to make each derived table, what takes longest first; beats in slices, so that memory does not grow."""
    fs_hz = analysis.fs_hz
    yield "strips", lambda: _strips(analysis, start_us, recording, reader)
    yield "quarter_hours", lambda: quarters_frame(quarter_hours(analysis, start_us)._asdict())
    yield "family_quarters", lambda: quarters_frame(family_quarters(analysis, start_us)._asdict())
    for begin in range(0, max(len(analysis.beats.sample), 1), BEATS_PER_PART):
        yield "beats", partial(_beats, analysis, slice(begin, begin + BEATS_PER_PART), start_us)
    yield "families", lambda: _families(analysis)
    yield "episodes", lambda: spans_frame(analysis.episodes._asdict(), fs_hz, start_us)
    yield "quality_windows", lambda: spans_frame(analysis.quality._asdict(), fs_hz, start_us)
    yield "findings", lambda: _findings(analysis)


def _conform(table: str, frame: pl.DataFrame, recording_id: str, fingerprint: str) -> pl.DataFrame:
    named = frame.with_columns(recording_id=pl.lit(recording_id), fingerprint=pl.lit(fingerprint))
    return named.select(LAKE[table].columns)


def _instants(start_us: np.ndarray, segment: np.ndarray, sample: np.ndarray, fs_hz: float) -> pl.Series:
    instant_us = start_us[segment] + np.rint(sample * (1e6 / fs_hz)).astype(np.int64)
    return pl.Series(instant_us, dtype=pl.Int64).cast(pl.Datetime("us"))


def _number_or_null(frame: pl.DataFrame) -> pl.DataFrame:
    return frame.with_columns(pl.col(pl.Float32, pl.Float64).fill_nan(None))


# Text is picked from short lists by number: turning a million numpy strings into text costs more than all else here.
_LETTERS = pl.Series([chr(code) for code in range(128)])
_PAUSES = pl.Series([kind or None for kind in PAUSE_KINDS])


def _beats(analysis: Analysis, rows: slice, start_us: np.ndarray) -> pl.DataFrame:
    columns = {name: column[rows] for name, column in analysis.beats._asdict().items()}
    letters, pauses = columns["beat_class"].astype("<U1").view(np.uint32), columns["pause_kind"]
    numbers = pl.DataFrame(
        {name: column for name, column in columns.items() if name not in ("beat_class", "pause_kind")}
    )
    return _number_or_null(numbers).with_columns(
        _instants(start_us, columns["segment"], columns["sample"], analysis.fs_hz).alias("beat_utc"),
        _LETTERS.gather(letters).alias("beat_class"),
        _PAUSES.gather(pauses).alias("pause_kind"),
    )


def _families(analysis: Analysis) -> pl.DataFrame:
    families = analysis.families._asdict()
    shapes = pl.Series("shape_mv", families.pop("shape_mv").tolist(), dtype=pl.List(pl.Float32))
    numbers = pl.Series("family", np.arange(len(shapes)), dtype=pl.Int16)
    return _number_or_null(pl.DataFrame(families)).with_columns(numbers, shapes)


def spans_frame(columns: dict[str, np.ndarray], fs_hz: float, start_us: np.ndarray) -> pl.DataFrame:
    segment, first, end = columns["segment"], columns["first_sample"], columns["last_sample"] + 1
    frame = pl.DataFrame(columns).with_columns(
        _instants(start_us, segment, first, fs_hz).alias("start_utc"),
        _instants(start_us, segment, end, fs_hz).alias("end_utc"),
        pl.Series("duration_s", columns.get("duration_s", (end - first) / fs_hz), dtype=pl.Float64),
    )
    return _number_or_null(frame)


def _findings(analysis: Analysis) -> pl.DataFrame:
    rows = [(finding.code, finding.detail) for finding in analysis.findings]
    return pl.DataFrame(rows, schema={"finding_code": pl.String, "finding_detail": pl.String}, orient="row")


def quarters_frame(columns: dict[str, np.ndarray]) -> pl.DataFrame:
    quarter_utc = pl.Series("quarter_utc", columns.pop("quarter_us"), dtype=pl.Int64).cast(pl.Datetime("us"))
    return _number_or_null(pl.DataFrame(columns).with_columns(quarter_utc))


def _strips(
    analysis: Analysis, start_us: np.ndarray, recording: Mapping[str, Any], reader: SignalReader
) -> pl.DataFrame:
    rows = []
    for strip in choose_strips(analysis):
        counts = reader.read(strip.segment, strip.first_sample, strip.first_sample + strip.n_samples)
        beats = beats_within(analysis, strip)
        instant_us = start_us[strip.segment] + round(strip.first_sample * 1e6 / analysis.fs_hz)
        rows.append(
            {
                "segment": strip.segment,
                "first_sample": strip.first_sample,
                "start_utc": int(instant_us),
                "fs_hz": analysis.fs_hz,
                "strip_reason": strip.strip_reason,
                "beat_class": strip.beat_class,
                "samples_mv": ((counts - recording["count_at_zero_mv"]) * recording["mv_per_count"]).tolist(),
                "beat_samples": (analysis.beats.sample[beats] - strip.first_sample).tolist(),
                "beat_classes": analysis.beats.beat_class[beats].tolist(),
                "beat_families": analysis.beats.family[beats].tolist(),
            }
        )
    types = {name: kind for name, kind in frame_schema(LAKE["strips"]).items() if name not in _ADDED_LATER}
    return pl.DataFrame(rows, schema=types | {"start_utc": pl.Int64}).with_columns(
        pl.col("start_utc").cast(pl.Datetime("us"))
    )
