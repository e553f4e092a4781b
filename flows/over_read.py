"""Over-read recordings counted anew: the landed analysis with the classes that readers decided, as episodes and tallies.

The same functions as for a new recording find the episodes and add up the quarter hours, so that couplets, runs,
bigeminy and rates follow from the reviewed classes and not only the burden. Which decision meets which beat is said in
SQL (`decided_beats`, `rejected_episodes`).
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from datetime import timedelta
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray

from detectors.analyse import Options
from detectors.relabel import relabelled
from detectors.results import PAUSE_KINDS, Analysis, Beats, Episodes, Families, QualityWindows
from detectors.tally import quarter_hours
from flows.detect import quarters_frame, spans_frame
from warehouse.build import TrendBuild
from warehouse.parts import Part, scan_parts
from warehouse.schema import LAKE

NEAR = timedelta(milliseconds=150)  # as for beats

_NO_FAMILIES = Families._make(np.empty(0) for _ in Families._fields)


class Landed(NamedTuple):
    """An analysis as it landed, and the instant at which each segment begins, microseconds since 1970 UTC."""

    analysis: Analysis
    start_us: NDArray[np.int64]


def add_reviewed(build: TrendBuild) -> None:
    """Give the build the episodes and quarter hours of every recording on which a reader decided."""
    options = _options(build)
    analysed = {part.key for part in build.parts if part.table == "quarter_hours"}
    for recording_id in build.over_read:
        if recording_id in analysed:
            _add(build, recording_id, options)


def _add(build: TrendBuild, recording_id: str, options: Options) -> None:
    decided = build.of_recording("decided_beats", recording_id)
    landed = read_landed(build.lake, build.parts, recording_id)
    analysis = _with_decisions(landed.analysis, decided, options)
    found = spans_frame(analysis.episodes._asdict(), analysis.fs_hz, landed.start_us)
    is_counted = ~_is_rejected(found, build.of_recording("rejected_episodes", recording_id))
    counted = Episodes._make(column[is_counted] for column in analysis.episodes)
    quarters = quarters_frame(quarter_hours(analysis._replace(episodes=counted), landed.start_us)._asdict())
    per_quarter = (
        decided.filter("is_analysable").group_by(quarter_utc=pl.col("beat_utc").dt.truncate("15m")).len("decided_beats")
    )
    named = {"recording_id": pl.lit(recording_id), "fingerprint": pl.lit(build.fingerprint)}
    build.add_reviewed(
        quarters.join(per_quarter, on="quarter_utc", how="left").with_columns(
            pl.col("decided_beats").fill_null(0), **named
        ),
        found.with_columns(is_counted=pl.Series(is_counted), **named),
    )


def _with_decisions(analysis: Analysis, decided: pl.DataFrame, options: Options) -> Analysis:
    beats = pl.DataFrame({"segment": analysis.beats.segment, "sample": analysis.beats.sample})
    said = beats.join(decided.select("segment", "sample", "decision"), on=("segment", "sample"), how="left")["decision"]
    is_beat = (said != "noise").fill_null(True).to_numpy()
    letters = said.fill_null("").to_numpy().astype("<U5")
    beat_class = np.where((letters == "") | ~is_beat, analysis.beats.beat_class, letters).astype("<U1")
    return relabelled(analysis, beat_class, is_beat, options)


def _is_rejected(found: pl.DataFrame, rejected: pl.DataFrame) -> NDArray[np.bool_]:
    """Tell for each episode whether a rejected one of its kind begins within NEAR of it, shape (n_episodes,)."""
    begins = found.select("episode_kind", pl.col("start_utc").cast(pl.Datetime("us"))).with_row_index("row")
    near = begins.sort("start_utc").join_asof(
        rejected.select("episode_kind", "start_utc", is_rejected=pl.lit(True)).sort("start_utc"),
        on="start_utc", by="episode_kind", strategy="nearest", tolerance=NEAR, check_sortedness=False,
    )  # fmt: skip
    return near.sort("row")["is_rejected"].fill_null(False).to_numpy()


def read_landed(lake: Path, parts: Iterable[Part], recording_id: str) -> Landed:
    """Read the analysis of a recording back from its parts, which are of one fingerprint; families and findings stay behind."""
    mine = [part for part in parts if part.key == recording_id]

    def rows(table: str) -> pl.DataFrame:
        return scan_parts(lake, LAKE[table], [part.path for part in mine if part.table == table]).collect()

    fs_hz = rows("recordings")["fs_hz"].item()
    segments = rows("segments").sort("segment")
    samples = tuple(segments["sample_count"].to_list())
    quality = _arrays(rows("quality_windows").sort("segment", "first_sample"))
    bad = QualityWindows._make(quality[name] for name in QualityWindows._fields)
    bad_samples = int((bad.last_sample - bad.first_sample + 1).sum())
    analysis = Analysis(
        _beats(rows("beats").sort("segment", "sample")),
        _NO_FAMILIES,
        _episodes(rows("episodes")),
        bad,
        (),
        fs_hz,
        samples,
        (sum(samples) - bad_samples) / fs_hz,
    )
    return Landed(analysis, segments["start_utc"].dt.timestamp("us").to_numpy())


def _beats(rows: pl.DataFrame) -> Beats:
    kinds = {kind: number for number, kind in enumerate(PAUSE_KINDS)}
    columns = _arrays(rows.with_columns(pl.col("pause_kind").fill_null("").replace_strict(kinds, return_dtype=pl.Int8)))
    return Beats._make(columns[name] for name in Beats._fields)


def _episodes(rows: pl.DataFrame) -> Episodes:
    columns = _arrays(rows)
    return Episodes._make(columns[name] for name in Episodes._fields)


def _arrays(rows: pl.DataFrame) -> dict[str, NDArray[Any]]:
    """Columns as arrays: missing numbers are NaN, text has the width it needs."""
    whole = rows.with_columns(pl.col(pl.Float32, pl.Float64).fill_null(float("nan")))
    return {
        column.name: column.to_numpy().astype(np.str_) if column.dtype == pl.String else column.to_numpy(writable=True)
        for column in whole
    }


def _options(build: TrendBuild) -> Options:
    """Conventions under which the published fingerprint was made."""
    known = build.frame("lake.fingerprints").filter(pl.col("fingerprint") == build.fingerprint)["settings_json"]
    settings = json.loads(known.item()) if known.len() else {}
    return Options(**{name: value for name, value in settings.get("detector", {}).items() if name in Options._fields})
