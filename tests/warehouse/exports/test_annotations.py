"""Beat annotations read back equal in independent readers of both formats."""

from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from warehouse.exports.annotations import (
    SegmentBeats,
    atr_content,
    edf_content,
    export_atr,
    export_edf_events,
    segment_beats,
)
from warehouse.publish import publish
from warehouse.published import Published, PublishedError

wfdb = pytest.importorskip("wfdb", reason="wfdb is a test library")
edfio = pytest.importorskip("edfio", reason="edfio is a test library")


@pytest.fixture
def published(lake: Any) -> Published:
    """A recording of two segments with beats of every class and one escape beat."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-02T00:00")
    classes = ["N", "V", "S", "F", "Q", "V"]
    beats = [
        {
            "recording_id": "R1",
            "fingerprint": "f1",
            "segment": segment,
            "sample": 100 + 70_000 * number * (number + segment),
            "beat_class": beat_class,
            "is_escape": number == 5,
            "is_analysable": True,
        }
        for segment in (0, 1)
        for number, beat_class in enumerate(classes)
    ]
    starts = datetime.fromisoformat("2026-05-01T00:00:00"), datetime.fromisoformat("2026-05-01T12:00:00.250")
    segments = [
        {"recording_id": "R1", "segment": n, "start_utc": start, "sample_count": 5_000_000}
        for n, start in enumerate(starts)
    ]
    lake.land("beats", "R1", beats, fingerprint="f1")
    lake.land("segments", "R1", segments)
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    return Published(lake.folder / "published")


def test_atr_reads_back_equal(published: Published, tmp_path: Path) -> None:
    """wfdb finds every beat with its symbol at its sample, and a note that names the fingerprint."""
    files = export_atr(published, tmp_path, "R1")
    assert [file.name for file in files] == ["R1_0.atr", "R1_0.hea", "R1_1.atr", "R1_1.hea"]
    for beats in segment_beats(published, "R1"):
        found = wfdb.rdann(str(tmp_path / beats.name), "atr")
        assert found.sample.tolist() == beats.sample.tolist()
        assert found.symbol == beats.symbol.tolist() == ["N", "V", "S", "F", "Q", "E"]
        assert "f1" in found.aux_note[0]
        header = wfdb.rdheader(str(tmp_path / beats.name))
        assert (header.fs, header.sig_len, header.n_sig) == (250, 5_000_000, 0)
        assert any("over-reads" in comment for comment in header.comments)


def test_edf_events_read_back_equal(published: Published, tmp_path: Path) -> None:
    """edfio finds every beat at its second, counted from the first sample, behind the remarks."""
    files = export_edf_events(published, tmp_path, "R1")
    for file, beats in zip(files, segment_beats(published, "R1"), strict=True):
        read = edfio.read_edf(file)
        assert read.starttime.replace(microsecond=0) == beats.start_utc.time().replace(microsecond=0)
        assert read.startdate == beats.start_utc.date()
        events = [event for event in read.annotations if len(event.text) == 1]
        whole_second_s = beats.start_utc.microsecond / 1e6
        assert [event.text for event in events] == beats.symbol.tolist()
        onsets_s = np.array([event.onset for event in events]) - whole_second_s
        assert np.allclose(onsets_s, beats.sample / 250, atol=1e-6)
        assert any("fingerprint: f1" in event.text for event in read.annotations)


@given(st.lists(st.tuples(st.integers(0, 2**31 // 40), st.sampled_from("NVSFQE")), max_size=40))
@settings(max_examples=30, deadline=None)
def test_any_steps_between_beats_survive(
    tmp_path_factory: pytest.TempPathFactory, steps: list[tuple[int, str]]
) -> None:
    """Steps of 0, 1023, 1024 and days of silence read back as they were."""
    folder = tmp_path_factory.mktemp("atr")
    sample = np.cumsum([step for step, _ in steps], dtype=np.int64)
    symbol = np.array([name for _, name in steps], dtype="<U1")
    (folder / "a.atr").write_bytes(atr_content(sample, symbol, note="note"))
    found = wfdb.rdann(str(folder / "a"), "atr")
    assert found.sample.tolist() == sample.tolist()
    assert found.symbol == symbol.tolist()


def test_many_events_fill_many_records() -> None:
    """Ten thousand beats spread over data records of at most 61,440 bytes, none lost."""
    sample = np.arange(10_000) * 250
    beats = SegmentBeats("R", sample, np.full(10_000, "N"), 250.0, 2_500_000, datetime.fromisoformat("2026-05-01"))
    content = edf_content(beats, [])
    # Source: EDF specification: a data record holds at most 61,440 bytes
    assert int(content[236:244]) > 1
    assert (len(content) - 512) / int(content[236:244]) <= 61_440
    assert content.count(b"\x14N\x14") == 10_000


def test_an_unknown_recording_is_named(published: Published, tmp_path: Path) -> None:
    """The message names the recording and how to list those that exist."""
    with pytest.raises(PublishedError, match="no published recording 'R9'"):
        export_atr(published, tmp_path, "R9")
