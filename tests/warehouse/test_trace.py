"""Every published day can be traced to the bytes it came from, and two fingerprints can be compared."""

import re
from datetime import date, datetime
from typing import Any

import numpy as np
import polars as pl
import pytest

from warehouse.compare import compare
from warehouse.parts import write_signal
from warehouse.publish import publish
from warehouse.published import Published, PublishedError
from warehouse.trace import trace


@pytest.fixture
def published(lake: Any) -> Published:
    """Two recordings of one patient in New York, one of another patient."""
    lake.patient("P1", "America/New_York")
    lake.patient("P2")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-03T00:00")
    lake.recording("R2", "P1", "2026-05-03T02:00", "2026-05-04T00:00")
    lake.recording("R3", "P2", "2026-05-02T00:00", "2026-05-03T00:00")
    hours = [datetime.fromisoformat(f"2026-05-03T{hour}:00") for hour in ("02", "03", "23")]
    spans = [{"segment": 0, "start_utc": hours[0], "end_utc": hours[1]}, {"segment": 1, "start_utc": hours[2]}]
    spans[1]["end_utc"] = datetime.fromisoformat("2026-05-04T00:00")
    lake.land("segments", "R2", [{"recording_id": "R2", "delivery_id": "D2"} | span for span in spans])
    for segment in (0, 1):
        part = write_signal(lake.folder / "lake", "R2", segment, 0, np.full(9, segment, np.int16))
        blocks = [*lake.ledger.parts("signal", "R2"), part]
        lake.ledger.commit({("signal", "R2"): blocks})
    lake.land("deliveries", "00", [{"delivery_id": f"D{n}", "recording_id": f"R{n}"} for n in (1, 2, 3)])
    fingerprint = {"fingerprint": "f1", "detector_version": "1", "settings_json": "{}"}
    lake.land("fingerprints", "f1", [fingerprint], fingerprint="f1")
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    return Published(lake.folder / "published")


def test_a_day_is_traced_to_its_recordings_deliveries_and_parts(published: Published) -> None:
    """The local day counts: the evening of 2 May in New York reaches into 3 May UTC."""
    found = trace(published, "P1", date(2026, 5, 2))
    assert found["recordings"]["recording_id"].to_list() == ["R1", "R2"]
    assert found["deliveries"]["delivery_id"].to_list() == ["D1", "D2"]
    assert found["segments"].select("recording_id", "segment").rows() == [("R1", 0), ("R2", 0)]
    assert found["parts"].filter(pl.col("table_name") == "signal")["segment"].to_list() == [0]
    assert set(found["parts"]["part_key"]) == {"R1", "R2"}
    assert found["fingerprints"]["fingerprint"].to_list() == ["f1"]
    assert found["wear_days"]["local_day"].to_list() == [date(2026, 5, 2)]
    assert trace(published, "P1", date(2026, 5, 1))["recordings"]["recording_id"].to_list() == ["R1"]


@pytest.mark.parametrize(
    ("code", "words"),
    [("P9", "patient P9 has no wear day; patients with wear: P1, P2"), ("P1", "days from 2026-04-30 to 2026-05-03")],
)
def test_a_day_that_is_not_there_comes_with_those_that_are(published: Published, code: str, words: str) -> None:
    """The message names the patients or the span of days that exist."""
    with pytest.raises(PublishedError, match=re.escape(words)):
        trace(published, code, date(2026, 1, 1))


def test_two_fingerprints_are_compared_per_patient_and_verdict(lake: Any) -> None:
    """The patient whose burden moved most comes first, with both burdens, and a changed verdict is named."""
    for number, v_beats in ((1, 90), (2, 300)):
        lake.patient(f"P{number}")
        for fingerprint, beats in (("f1", 90), ("f2", v_beats)):
            span = "2026-05-01T00:00", "2026-05-03T00:00"
            lake.recording(f"R{number}", f"P{number}", *span, fingerprint=fingerprint, v_beats=beats)
        lake.wears.pop()
    lake.therapy("P2", "2026-05-02")
    change = {"patient_code": "P2", "therapy_id": "T1", "measure": "v_burden_pct"}
    with (
        lake.built("f1", changes=[change | {"verdict": "within_chance"}]) as a,
        lake.built("f2", "b", changes=[change | {"verdict": "rose_beyond_chance"}]) as b,
    ):
        patients, verdicts = compare(a, b)
    assert patients["patient_code"].to_list() == ["P2", "P1"]
    assert patients["changed_days"].to_list() == [2, 0]
    assert patients.row(0, named=True)["v_burden_pct_a"] == pytest.approx(9)
    assert patients.row(0, named=True)["v_burden_pct_b"] == pytest.approx(100 * 300 / 1210)
    assert verdicts.select("verdict_a", "verdict_b").rows() == [("within_chance", "rose_beyond_chance")]
