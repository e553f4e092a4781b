"""The invented programme is complete, the same for the same seed, and made of files that general libraries accept."""

import csv
import hashlib
from datetime import datetime

import edfio
import numpy as np
import pyedflib
import pytest

from flows import demo, settings


def shortened(patients):
    """The first and the last patient with one day per wear."""
    return tuple(p._replace(wears=tuple(w._replace(days=1) for w in p.wears)) for p in (patients[0], patients[-1]))


@pytest.fixture
def programme(tmp_path, monkeypatch):
    few = shortened(demo.story())
    monkeypatch.setattr(demo, "story", lambda: few)
    demo.make_programme(tmp_path / "coast")
    return tmp_path / "coast"


def rows(programme, name):
    with (programme / "register" / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_settings_fit_the_story(programme):
    """The demo's settings load, with its zone and a minimum of hours that its patches can reach."""
    found = settings.load(programme / "programme.toml")
    assert found.programme.zone == demo.ZONE
    assert found.wear.min_analysable_h_per_day == demo.MIN_ANALYSABLE_H_PER_DAY
    assert demo.WINDOWS_PER_DAY * demo.WINDOW_S / 3600 > demo.MIN_ANALYSABLE_H_PER_DAY


def test_every_good_file_belongs_to_a_wear(programme):
    """Each EDF+ file of the inbox names a device and patient of the register and starts within that wear."""
    wears = {row["device_serial"]: row for row in rows(programme, "wears.csv")}
    patients = {row["patient_code"] for row in rows(programme, "patients.csv")}
    files = sorted((programme / "inbox").glob("*.edf"))
    good = [file for file in files if file.name.split("_")[0] in wears]
    assert len(good) == len(wears) == 5
    assert len(files) == len(wears) + 2
    for file in good:
        edf = edfio.read_edf(file)
        wear = wears[edf.recording.equipment_code]
        assert edf.patient.code == wear["patient_code"] and edf.patient.code in patients
        assert edf.patient.name == "X"
        assert datetime.combine(edf.startdate, edf.starttime) == datetime.fromisoformat(wear["from_local"])


def test_a_wear_has_one_window_every_three_hours(programme):
    """A file of one day holds eight windows, three hours apart."""
    file = min((programme / "inbox").glob("SK101*.edf"))
    raw = file.read_bytes()
    record_bytes = 10 * 250 * 2 + 64  # marks of the patient have room
    onsets_s = np.array(
        [float(raw[at : at + 24].split(b"\x14")[0]) for at in range(768 + 5000, len(raw), record_bytes)]
    )
    breaks = np.flatnonzero(np.diff(onsets_s) > 10)
    assert raw[192:197] == b"EDF+D"
    assert onsets_s[np.concatenate([[0], breaks + 1])].tolist() == [n * 10_800 for n in range(8)]
    assert len(onsets_s) == 8 * demo.WINDOW_S // 10


def test_presses_of_the_button_stand_in_the_file(programme):
    """The patient's button of the first day is an annotation of its file, as long after the start as the story says."""
    press = demo.story()[0].wears[0].presses[0]
    (mark,) = edfio.read_edf(min((programme / "inbox").glob("SK101*.edf"))).annotations
    assert (mark.onset, mark.text) == (pytest.approx(60 * press.minute), press.text)


def test_three_days_cover_the_clock():
    """The windows of three days fall into each of the 24 clock hours once."""
    wear = demo.story()[0].wears[0]
    hours = [elapsed_h for elapsed_h, _ in demo.true_windows(wear._replace(days=3), 25, seed=1)]
    assert hours == sorted(hours)
    assert sorted((10 + hour) % 24 for hour in hours) == list(range(24))


def test_a_wear_without_nights():
    """A patch that is taken off at night has no window between 22:00 and 7:00."""
    wear = next(wear for patient in demo.story() for wear in patient.wears if not wear.nights)
    clocks = {(10 + elapsed_h) % 24 for elapsed_h, _ in demo.true_windows(wear._replace(days=3), 25, seed=1)}
    assert clocks == set(range(7, 22))


def test_the_same_seed_gives_the_same_programme(programme, tmp_path):
    """Two programmes of one seed agree in every byte and file time."""
    demo.make_programme(tmp_path / "again")
    prints = [
        {
            str(file.relative_to(folder)): (
                hashlib.sha256(file.read_bytes()).hexdigest(),
                file.suffix == ".edf" and file.stat().st_mtime,
            )
            for file in sorted(folder.rglob("*.*"))
        }
        for folder in (programme, tmp_path / "again")
    ]
    assert prints[0] == prints[1]


def test_a_programme_is_never_overwritten(programme):
    """A folder that is a programme already is refused."""
    with pytest.raises(FileExistsError, match="already a programme folder"):
        demo.make_programme(programme)


def test_the_story_has_every_kind_of_patient():
    """The story has 6 to 8 patients with responders, a non-responder, a recurrence and a short wear."""
    patients = demo.story()
    kinds = {therapy.kind for patient in patients for therapy in patient.therapies}
    assert 6 <= len(patients) <= 8
    assert len({patient.code for patient in patients}) == len(patients)
    assert {"medication_start", "medication_stop", "dose_change", "ablation"} <= kinds
    assert any(wear.days == 1 for patient in patients for wear in patient.wears)
    assert len({demo._serial(patient, wear) for patient in patients for wear in patient.wears}) == sum(
        len(patient.wears) for patient in patients
    )


def test_therapies_lie_between_wears():
    """A therapy event falls after the first wear has ended and before the second begins."""
    for patient in demo.story():
        first, *later = patient.wears
        for therapy in patient.therapies:
            assert first.day + first.days < therapy.day < min(wear.day for wear in later)


def test_long_recording_is_continuous(tmp_path):
    """The benchmark recording is one EDF+C file of the asked length that a general library reads."""
    demo.write_long_recording(tmp_path / "long.edf", days=1.5 / 24, fs_hz=100)
    with pyedflib.EdfReader(str(tmp_path / "long.edf")) as edf:
        assert edf.getNSamples()[0] == 1.5 * 3600 * 100
        assert np.abs(edf.readSignal(0)).max() > 0.5
