"""From inbox to lake: what is landed, joined, skipped, waited for and refused, and that it ends the same every way."""

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from flows.arrivals import ingest as ingest_module
from flows.arrivals.ingest import inspect
from flows.readers.identify import open_delivery
from warehouse.ledger import Ledger
from warehouse.parts import write_part

ROOT = Path(__file__).parents[2]
RECORDING = "SRL-1001_20260228"


def noise(n_samples, seed=1):
    return np.random.default_rng(seed).integers(-900, 900, n_samples).astype("<i2")


def hours_of(make_edf, signal, hours, rate_hz=50):
    """EDF files of one hour each from a longer signal, with whole-second starts."""
    per_hour = 3600 * rate_hz
    return {
        hour: make_edf(signal[hour * per_hour : (hour + 1) * per_hour], per_record=rate_hz, time=f"{hour:02}.00.00")
        for hour in hours
    }


def test_samples_come_back_equal_from_the_lake(programme, make_edf, ecg):
    """A delivery becomes a recording whose samples, scale, time and zone are those of the file and the register."""
    programme.deliver("SRL-1001.edf", make_edf(ecg(15_000)))
    arrivals = programme.run()
    assert (arrivals.accepted, arrivals.changed) == (1, True)
    (recording,) = programme.rows("recordings")
    assert recording["recording_id"] == RECORDING
    assert str(recording["start_utc"]) == "2026-03-01 08:30:00"
    assert recording["zone_source"] == "programme"
    assert recording["rail_high_count"] == 32767
    (samples,) = programme.samples(RECORDING)
    assert np.array_equal(samples, ecg(15_000))


def test_a_second_run_changes_nothing(programme, make_edf):
    """Running again on the same inbox makes no commit and leaves every row as it was."""
    programme.deliver("SRL-1001.edf", make_edf())
    programme.deliver("x.edf", b"no recording at all", minute=1)
    programme.deliver("SRL-9.edf", make_edf(recording="Startdate 01-MAR-2026 X X SRL-9"), minute=2)
    programme.run()
    before, version = programme.state(), Ledger(programme.folder / "lake").version
    again = programme.run()
    assert not again.changed
    assert (again.accepted, again.quarantined, again.skipped, again.waiting) == (0, 0, 0, 1)
    assert programme.state() == before
    assert Ledger(programme.folder / "lake").version == version
    assert not list((programme.folder / "lake" / "staging").glob("*"))


def test_lost_caches_cost_nothing_but_time(programme, make_edf):
    """Without its caches of hashes a run still knows what it took."""
    programme.deliver("SRL-1001.edf", make_edf())
    programme.run()
    before = programme.state()
    for name in ("seen.json", "assembled.json"):
        (programme.folder / "lake" / name).write_text("damaged")
    assert programme.run().accepted == 0
    assert programme.state() == before


def test_hourly_parts_join_whatever_their_order(make_programme, make_edf):
    """Parts delivered at once, backwards or one a night end in the same rows and samples."""
    signal = noise(6 * 3600 * 50)
    files = hours_of(make_edf, signal, (0, 1, 2, 4, 5))
    states = []
    for name, nights in (("once", [[0, 1, 2, 4, 5]]), ("back", [[5, 4, 2, 1, 0]]), ("late", [[5], [0, 2], [4], [1]])):
        made = make_programme(name)
        for night in nights:
            for hour in night:
                made.deliver(f"SRL-1001_{hour}.edf", files[hour], minute=hour)
            made.run()
        states.append(made.state())
        samples = made.samples(RECORDING)
        assert np.array_equal(np.concatenate(samples[:1]), signal[: 3 * 3600 * 50])
        assert len(samples) == 2
    assert states[0] == states[1] == states[2]


def test_late_part_reuses_landed_samples_and_withdraws_what_was_derived(programme, make_edf):
    """A late part extends the recording: landed blocks stay, derived tables go out of force in the same commit."""
    files = hours_of(make_edf, noise(2 * 3600 * 50), (0, 1))
    programme.deliver("SRL-1001_0.edf", files[0])
    programme.run()
    lake = programme.folder / "lake"
    ledger = Ledger(lake)
    before = {part.path for part in ledger.parts("signal", RECORDING)}
    rows = {"finding_code": "x", "finding_detail": "", "recording_id": RECORDING, "fingerprint": "f"}
    from flows.arrivals.landing import typed_frame

    ledger.commit(
        {
            ("findings", RECORDING): [
                write_part(lake, "findings", RECORDING, typed_frame("findings", [rows]), fingerprint="f")
            ]
        }
    )
    programme.deliver("SRL-1001_1.edf", files[1], minute=1)
    programme.run()
    ledger = Ledger(lake)
    assert before < {part.path for part in ledger.parts("signal", RECORDING)}
    assert ledger.parts("findings", RECORDING) == []


def test_overlap_is_trimmed_when_equal_and_refused_when_not(programme, make_edf):
    """Thirty seconds held twice count once; other samples in the same time are refused and moved."""
    signal = noise(7200 * 50)
    programme.deliver("SRL-1001_1.edf", make_edf(signal[: 3600 * 50], per_record=50, time="08.00.00"))
    programme.deliver("SRL-1001_2.edf", make_edf(signal[3570 * 50 :], per_record=50, time="08.59.30"), minute=1)
    programme.deliver("SRL-1001_3.edf", make_edf(noise(3600 * 50, 9), per_record=50, time="09.30.00"), minute=2)
    programme.run()
    (samples,) = programme.samples(RECORDING)
    assert np.array_equal(samples, signal)
    assert programme.deliveries()["SRL-1001_3.edf"] == ("quarantined", "overlap_with_other_samples")
    assert (programme.quarantine / "SRL-1001_3.edf").exists()
    (finding,) = [row["findings"] for row in programme.rows("deliveries") if row["file_name"] == "SRL-1001_2.edf"]
    assert finding == "overlap_trimmed"
    assert programme.run().changed is False


@pytest.mark.parametrize("nights", [1, 2])
def test_parts_scaled_by_their_own_extremes_join(programme, make_edf, nights):
    """Files whose header range is their own extremes join in the first one's counts; the widest range counts as rails."""
    signal = noise(7200 * 50)
    signal[3600 * 50 :] //= 2
    for n, (first, limit) in enumerate(((0, 1000), (3600 * 50, 700))):
        digital, physical = (str(-limit), str(limit)), (f"{-limit * 0.00488:.4f}"[:8], f"{limit * 0.00488:.4f}"[:8])
        part = signal[first : first + 3600 * 50]
        content = make_edf(part, per_record=50, time=f"{n + 8:02}.00.00", digital=digital, physical=physical)
        programme.deliver(f"SRL-1001_{n}.edf", content, minute=n)
        if nights == 2:
            programme.run()
    programme.run()
    (samples,) = programme.samples(RECORDING)
    assert np.array_equal(samples, signal)
    (recording,) = programme.rows("recordings")
    assert (recording["rail_low_count"], recording["rail_high_count"]) == (-1000, 1000)


def test_a_part_of_twice_the_scale_is_put_into_the_first_one_s(programme, make_edf):
    """A part exported with half the counts per millivolt gives the same millivolts, with a finding."""
    signal = noise(7200 * 50)
    programme.deliver("SRL-1001_0.edf", make_edf(signal[: 3600 * 50], per_record=50, time="08.00.00"))
    halved = make_edf(signal[3600 * 50 :] // 2, per_record=50, time="09.00.00", physical=("-10", "10"))
    programme.deliver("SRL-1001_1.edf", halved, minute=1)
    programme.run()
    (samples,) = programme.samples(RECORDING)
    assert np.abs(samples[3600 * 50 :].astype(int) - signal[3600 * 50 :] // 2 * 2).max() <= 1
    assert "rescaled_to_recording" in programme.rows("recordings")[0]["findings"]


def test_same_bytes_and_same_samples_are_counted_once(programme, make_edf):
    """The same file under another name and the same samples under another header are skipped and linked."""
    programme.deliver("SRL-1001.edf", make_edf())
    programme.deliver("SRL-1001_2.edf", make_edf(), minute=1)
    programme.deliver("SRL-1001_3.edf", make_edf(patient="X X X X"), minute=2)
    programme.run()
    assert programme.deliveries() == {
        "SRL-1001.edf": ("accepted", None),
        "SRL-1001_2.edf": ("skipped", "same_content_again"),
        "SRL-1001_3.edf": ("skipped", "same_samples_other_header"),
    }
    assert {row["recording_id"] for row in programme.rows("deliveries")} == {RECORDING}
    assert len(programme.samples(RECORDING)) == 1


def test_same_samples_at_another_time_or_of_another_device_are_refused(programme, make_edf):
    """A copy with another start or another device is a contradiction, not a second recording."""
    programme.register("P-0001,\nP-0002,", "SRL-1001,P-0001,2026-02-28,,\nSRL-1002,P-0002,2026-02-28,,")
    programme.deliver("SRL-1001.edf", make_edf())
    programme.deliver("1.edf", make_edf(time="12.00.00"), minute=1)
    other = make_edf(patient="X", recording="Startdate 01-MAR-2026 X X SRL-1002")
    programme.deliver("2.edf", other, minute=2)
    programme.run()
    assert programme.deliveries()["1.edf"] == ("quarantined", "same_samples_other_time")
    assert programme.deliveries()["2.edf"] == ("quarantined", "same_start_other_patient")


def test_other_patient_in_the_file_than_in_the_register(programme, make_edf):
    """A file that names another known patient than its wear is refused."""
    programme.register("P-0001,\nP-0002,", "SRL-1001,P-0002,2026-02-28,,")
    programme.deliver("SRL-1001.edf", make_edf())
    programme.run()
    assert programme.deliveries() == {"SRL-1001.edf": ("quarantined", "same_start_other_patient")}


def test_delivery_waits_for_its_wear_and_is_taken_when_the_row_comes(programme, make_edf):
    """Without a wear the file stays in the inbox with its reason; the next run after the register's fix takes it."""
    programme.register("P-0001,", "SRL-1002,P-0001,2026-02-28,,")
    path = programme.deliver("SRL-1002.edf", make_edf())
    assert programme.run().waiting == 1
    (row,) = programme.rows("deliveries")
    assert (row["status"], row["code"]) == ("waiting", "wear_not_in_register")
    assert "SRL-1001" in row["reason"]
    assert path.exists()
    programme.register("P-0001,", "SRL-1001,P-0001,2026-02-28,,")
    assert programme.run().accepted == 1
    assert len(programme.rows("deliveries")) == 1


def test_register_changes_move_and_withdraw_recordings(programme, make_edf):
    """Another patient, other wear dates and a removed wear are followed without the file being read again."""
    path = programme.deliver("SRL-1001.edf", make_edf(patient="X"))
    programme.run()
    path.unlink()
    programme.register("P-0002,Europe/Berlin", "SRL-1001,P-0002,2026-03-01,2026-03-20,")
    programme.run()
    (recording,) = programme.rows("recordings")
    assert recording["recording_id"] == "SRL-1001_20260301"
    assert str(recording["start_utc"]) == "2026-03-01 07:30:00"
    programme.register("P-0002,Europe/Berlin", "SRL-1001,P-0002,2026-03-02,2026-03-20,")
    programme.run()
    assert programme.rows("recordings") == []
    assert programme.rows("signal") != []
    assert programme.deliveries() == {"SRL-1001.edf": ("waiting", "wear_not_in_register")}
    programme.register("P-0001,", "SRL-1001,P-0001,2026-02-28,,")
    programme.run()
    assert [row["recording_id"] for row in programme.rows("recordings")] == [RECORDING]
    assert programme.deliveries() == {"SRL-1001.edf": ("accepted", None)}
    assert programme.run().changed is False


@pytest.mark.parametrize("clock_zone", ["", "UTC"])
def test_zone_of_the_device_clock(make_programme, make_edf, clock_zone):
    """A start is the patient's wall clock unless the site's settings say otherwise, which is then a finding."""
    programme = make_programme("p", zone="Europe/Berlin", toml=f'[site]\nclock_zone = "{clock_zone}"\n')
    programme.deliver("SRL-1001.edf", make_edf())
    programme.run()
    (recording,) = programme.rows("recordings")
    assert str(recording["start_utc"])[11:16] == ("08:30" if clock_zone else "07:30")
    assert (recording["findings"] == "zone_from_site") is bool(clock_zone)


def test_start_from_the_register(programme):
    """A record without date takes the wear's start, or is refused when there is none."""
    samples = noise(2500)
    header = "1001 1 250 2500\n1001.dat 16 200 16 0 0 0 0 II\n# 69 M Jane Doe\n".replace(
        " 0 0 0 0", f" 0 {samples[0]} {int(samples.sum()) % 65536} 0"
    )
    programme.register("P-0001,", "1001,P-0001,2026-02-28,,")
    programme.deliver("1001.dat", samples.tobytes())
    programme.deliver("1001.hea", header.encode(), minute=1)
    programme.run()
    assert programme.deliveries() == {"1001.hea": ("quarantined", "start_time_unknown")}
    assert {path.name for path in programme.quarantine.iterdir()} == {"1001.hea", "1001.dat", "1001.hea.reason.txt"}
    programme.register("P-0001,", "1001,P-0001,2026-02-28,,2026-03-01 10:00")
    from flows.arrivals.quarantine import retry

    retry(programme.folder, "1001.hea")
    programme.run()
    (recording,) = programme.rows("recordings")
    assert str(recording["start_utc"]) == "2026-03-01 10:00:00"
    assert recording["findings"] == "device_from_file_name start_from_register"


def test_a_clock_that_was_never_set(programme, make_edf):
    """A start long before the device was first worn waits, and is replaced once the register has a start."""
    content = make_edf(date="01.01.10", recording="Startdate 01-JAN-2010 X X SRL-1001")
    programme.deliver("SRL-1001.edf", content)
    programme.run()
    (row,) = programme.rows("deliveries")
    assert (row["code"], "start_local" in row["reason"]) == ("wear_not_in_register", True)
    programme.register("P-0001,", "SRL-1001,P-0001,2026-02-28,,2026-03-01 09:15")
    assert programme.run().accepted == 1
    (recording,) = programme.rows("recordings")
    assert (str(recording["start_utc"]), recording["findings"]) == ("2026-03-01 09:15:00", "start_from_register")


def test_marks_become_rows_at_their_instant(programme, make_edf):
    """Patient marks land with their instant; words of the patient field are masked."""
    onsets = [f"+{n}" for n in range(60)]
    notes = {5: b"+5.5\x152\x14Doe felt dizzy\x14\x00"}
    programme.deliver(
        "SRL-1001.edf",
        make_edf(kind="EDF+C", onsets=onsets, annotations=notes, patient="P-0001 F 02-AUG-1951 Jane_Doe"),
    )
    programme.run()
    (mark,) = programme.rows("marks")
    assert str(mark["mark_utc"]) == "2026-03-01 08:30:05.500000"
    assert (mark["mark_text"], mark["duration_s"]) == ("— felt dizzy", 2.0)


def test_nothing_of_the_person_is_kept(programme, make_edf):
    """Name and birth date of headers and file names appear in no file of the lake, no reason and no message."""
    identity = {
        "patient": "X F 02-AUG-1951 Gwendolyn_Featherstone",
        "recording": "Startdate 01-MAR-2026 X Featherstone SRL-1001",
    }
    programme.deliver("Gwendolyn Featherstone.edf", make_edf(**identity))
    programme.deliver("Featherstone 2.edf", make_edf(physical=("1", "1"), **identity), minute=1)
    programme.deliver("Featherstone 3.edf", make_edf(**identity | {"recording": "Gwendolyn Featherstone"}), minute=2)
    programme.run()
    assert sorted(status for status, _ in programme.deliveries().values()) == ["accepted", "quarantined", "waiting"]
    kept = [path for path in programme.folder.rglob("*") if programme.inbox not in path.parents]
    texts = [path.name.encode() for path in kept] + [
        str(programme.said).encode(),
        repr(programme.rows("deliveries")).encode(),
    ]
    texts += [path.read_bytes() for path in kept if path.is_file() and path.suffix not in (".edf",)]
    texts += [repr(programme.rows(table)).encode() for table in ("recordings", "pieces", "marks")]
    for word in (b"Gwendolyn", b"Featherstone", b"1951"):
        assert not [text[:80] for text in texts if word in text]


def test_killed_at_any_step_the_next_run_ends_the_same(make_programme, make_edf, monkeypatch):
    """A run that dies before any of its steps is finished by the next one, with the rows of an undisturbed run."""

    def fill(made):
        for hour, content in hours_of(make_edf, noise(3 * 3600 * 50), (0, 1, 2)).items():
            made.deliver(f"SRL-1001_{hour}.edf", content, minute=hour)
        made.deliver("1.edf", b"rubbish", minute=5)
        made.deliver("2.edf", make_edf(physical=("1", "1")), minute=6)
        return made

    undisturbed = fill(make_programme("whole"))
    undisturbed.run()
    expected = undisturbed.state()
    steps = ("write_part", "write_signal", "commit", "quarantine", "save", "write_whole")
    for step in steps:
        for death in range(1, 4):
            made = fill(make_programme(f"{step}{death}"))
            with monkeypatch.context() as patch:
                _die_at(patch, step, death)
                with pytest.raises(KeyboardInterrupt):
                    made.run()
                    raise KeyboardInterrupt
            made.run()
            assert made.state() == expected, (step, death)
            assert sorted(p.name for p in made.quarantine.iterdir()) == sorted(
                p.name for p in undisturbed.quarantine.iterdir()
            )
            assert sorted(p.name for p in made.inbox.iterdir()) == sorted(p.name for p in undisturbed.inbox.iterdir())


def _die_at(patch, step, death):
    """Make the `death`-th call of a step end the run, as a kill would."""
    from flows.arrivals import deliveries, inbox, ingest, landing, quarantine, recordings

    homes = {
        "write_part": [(deliveries, "write_part"), (recordings, "write_part")],
        "write_signal": [(landing, "write_signal")],
        "commit": [(Ledger, "commit")],
        "quarantine": [(ingest, "quarantine")],
        "save": [(inbox.SeenFiles, "save")],
        "write_whole": [(inbox, "write_whole"), (quarantine, "write_whole"), (recordings, "write_whole")],
    }
    calls = {"left": death}
    for home, name in homes[step]:
        real = getattr(home, name)

        def dying(*args, real=real, **kwargs):
            calls["left"] -= 1
            if not calls["left"]:
                raise KeyboardInterrupt
            return real(*args, **kwargs)

        patch.setattr(home, name, dying)


@pytest.mark.parametrize("after_s", [0.02, 0.15, 0.4])
def test_killed_process_is_harmless(make_programme, make_edf, after_s):
    """kill -9 during a run, then a run: the rows are those of an undisturbed run."""

    def fill(made):
        for hour, content in hours_of(make_edf, noise(6 * 3600 * 50), range(6)).items():
            made.deliver(f"SRL-1001_{hour}.edf", content, minute=hour)
        return made

    undisturbed = fill(make_programme("whole"))
    undisturbed.run()
    made = fill(make_programme("killed"))
    script = (
        "import sys; from pathlib import Path; from flows import settings, register, ingest\n"
        "from warehouse.ledger import Ledger\n"
        "folder = Path(sys.argv[1]); read = settings.load(folder / 'programme.toml'); print('go', flush=True)\n"
        "ingest.ingest(folder, read, register.load(folder, 'UTC'), Ledger(folder / 'lake'))\n"
    )
    process = subprocess.Popen([sys.executable, "-c", script, str(made.folder)], cwd=ROOT, stdout=subprocess.PIPE)
    process.stdout.readline()
    try:
        process.wait(after_s)
    except subprocess.TimeoutExpired:
        process.kill()
    process.wait()
    process.stdout.close()
    made.run()
    assert made.state() == undisturbed.state()


def test_inspect_tells_what_would_be_kept_and_no_name(tmp_path, make_edf):
    """Inspect shows format, times, scale and findings as plain values, and counts the words it would drop."""
    path = tmp_path / "a.edf"
    path.write_bytes(make_edf(patient="P-0001 F 02-AUG-1951 Jane_Doe", n_records="10"))
    found = inspect(path)
    assert found["format"] == "EDF"
    assert found["device_serial"] == "SRL-1001"
    assert found["findings"] == ["more_records_than_header_says: 60, header 10"]
    assert "Doe" not in json.dumps(found)
    path.write_bytes(b"")
    assert inspect(path)["code"] == "empty_file"


def test_real_records_arrive_as_file_sets(programme, reference_ecg):
    """Real annotated records land through the inbox with their samples, start and zone."""
    for name in ("208.hea", "208.dat", "208.atr"):
        programme.deliver(name, (reference_ecg / "mitdb" / name).read_bytes())
    programme.register("P-208,", "208,P-208,2026-01-01,2026-01-02,2026-01-01 09:00")
    assert programme.run().accepted == 1
    (samples,) = programme.samples("208_20260101")
    oracle = open_delivery([reference_ecg / "mitdb" / "208.hea"])
    assert np.array_equal(samples, oracle.read(0, oracle.n_samples))
    assert list(programme.quarantine.iterdir()) == []


def test_no_room_on_the_disk_is_waited_out(programme, make_edf, monkeypatch):
    """A full disk leaves the delivery in the inbox with a clear word, and it is taken when there is room."""
    programme.deliver("SRL-1001.edf", make_edf())

    def full(*args, **kwargs):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(ingest_module, "land", full)
        programme.run()
    assert programme.deliveries() == {"SRL-1001.edf": ("waiting", "no_space_left")}
    assert programme.run().accepted == 1


def test_a_fault_of_a_reader_stops_its_own_delivery_only(programme, make_edf, monkeypatch):
    """An unexpected exception while one file is read quarantines it with a word; the others are taken."""
    real = ingest_module.open_delivery

    def faulty(files, *args, **kwargs):
        if files[0].name == "1.edf":
            raise KeyError("a fault of the program")
        return real(files, *args, **kwargs)

    monkeypatch.setattr(ingest_module, "open_delivery", faulty)
    programme.deliver("1.edf", make_edf())
    programme.deliver("SRL-1001.edf", make_edf(noise(15_000)), minute=1)
    programme.run()
    assert programme.deliveries() == {"1.edf": ("quarantined", "reader_failed"), "SRL-1001.edf": ("accepted", None)}


def test_hostile_text_in_headers_is_only_text(programme, make_edf):
    """SQL and HTML in header fields and file names change nothing and are not kept where they could act."""
    evil = "'; DROP TABLE patients; --"
    page = "<script>alert(1)</script>"
    programme.deliver("<img src=x>.edf", make_edf(patient=evil, recording=f"Startdate 01-MAR-2026 X {page} SRL-1001"))
    programme.deliver("2.edf", make_edf(noise(15_000), recording=f"Startdate 01-MAR-2026 X X {page}9"), minute=1)
    programme.run()
    rows = repr(programme.rows("deliveries")) + repr(programme.rows("recordings"))
    assert "<img" not in rows
    assert "DROP" not in rows
    assert programme.rows("recordings")[0]["recording_id"] == RECORDING


def test_names_that_are_no_text_are_taken(programme, make_edf):
    """A file name with bytes that are no UTF-8 is masked and its file taken."""
    name = os.fsdecode(b"\xff\xfe.edf")
    (programme.inbox / name).write_bytes(make_edf())
    assert programme.run().accepted == 1
    assert programme.run().changed is False


def test_a_zip_of_a_telling_name_keeps_its_device(programme):
    """A refused set with a telling name is archived, and after a fix and a retry its device is still known."""
    samples = noise(2500)
    header = f"1001_doe 1 250 2500 08:30:00 01/03/2026\n1001_doe.dat 16 0 16 0 {samples[0]} 0 0 II\n"
    programme.register("P-0001,", "1001,P-0001,2026-02-28,,")
    programme.deliver("1001_doe.hea", header.encode())
    programme.deliver("1001_doe.dat", samples.tobytes())
    programme.run()
    (name,) = [path.name for path in programme.quarantine.iterdir() if path.suffix == ".zip"]
    assert "doe" not in name
    (programme.folder / "programme.toml").write_text("[site]\nmv_per_count = 0.005\n")
    from flows.arrivals.quarantine import retry

    retry(programme.folder, name)
    assert programme.run().accepted == 1
    (landed,) = programme.samples("1001_20260228")
    assert np.array_equal(landed, samples)
