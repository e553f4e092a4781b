"""EDF, EDF+C, EDF+D and BDF: right or refused, compared with independent readers where one is right."""

from datetime import datetime
from fractions import Fraction

import edfio
import numpy as np
import pyedflib
import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery
from flows.readers.recording import NO_SITE, Site, Stretch


@pytest.fixture
def opened(tmp_path, make_edf):
    """Function that makes, writes and opens an EDF file."""

    def make(*args, site=NO_SITE, cut=None, extra=b"", **changes):
        path = tmp_path / "made.edf"
        path.write_bytes((make_edf(*args, **changes) + extra)[:cut])
        return open_delivery([path], site)

    return make


def codes(recording):
    return [found.code for found in recording.findings]


def seconds(count, first=0):
    return [f"+{first + n}" for n in range(count)]


def test_samples_equal_those_of_an_independent_reader(tmp_path, make_edf):
    """A plain EDF gives the samples, rate and scale that edfio gives."""
    path = tmp_path / "plain.edf"
    path.write_bytes(make_edf())
    recording = open_delivery([path])
    # Source: edfio 0.4.18
    oracle = edfio.read_edf(path).signals[0]
    assert recording.n_samples == 15_000
    assert recording.rate == Fraction(250)
    assert np.array_equal(recording.read(0, 15_000), oracle.digital)
    ecg_mv = (recording.read(0, 15_000) - recording.count_at_zero_mv) * recording.mv_per_count
    assert np.allclose(ecg_mv, oracle.data, atol=1e-9)


@pytest.mark.parametrize(("a", "b"), [(0, 1), (249, 251), (250, 500), (7_777, 14_999), (10, 10)])
def test_any_slice_equals_the_slice_of_the_whole(opened, a, b):
    """Reading a piece gives what the whole read gives there."""
    recording = opened()
    assert np.array_equal(recording.read(a, b), recording.read(0, 15_000)[a:b])


def test_scale_of_the_edf_plus_specification(opened):
    """Counts become millivolts by the specification's line through both range ends."""
    recording = opened(physical=("-5", "5"), digital=("-32768", "32767"))
    # Source: EDF+ specification, section 2.1.3 (physical and digital extremes); worked by hand
    for count, expected_mv in ((0, 7.629510948348e-5), (1000, 0.152666514076445)):
        assert (count - recording.count_at_zero_mv) * recording.mv_per_count == pytest.approx(expected_mv, abs=1e-9)


def test_first_time_stamp_is_the_fraction_of_the_start(opened):
    """A first record at +0.25 starts a quarter second later, and marks are counted from the first sample."""
    onsets = [f"+{n}.25" for n in range(60)]
    recording = opened(kind="EDF+C", onsets=onsets, annotations={1: b"+1.5\x14Button\x14\x00"})
    # Source: EDF+ specification, section 2.2.4 (time keeping of data records)
    assert recording.start_local == datetime.fromisoformat("2026-03-01T08:30:00.25")
    assert recording.start_resolution_ms == 1
    assert [(mark.offset_ns, mark.text) for mark in recording.marks] == [(1_250_000_000, "Button")]


def test_discontinuous_file_becomes_stretches(opened):
    """In an EDF+D with records at +0, +1, +10, +11 sample 500 lies 10 s after the start."""
    recording = opened(np.arange(1000, dtype="<i2"), kind="EDF+D", onsets=["+0", "+1", "+10", "+11"])
    # Source: EDF+ specification, section 2.2.4
    assert recording.stretches == (Stretch(0, 500, 0), Stretch(500, 500, 10_000_000_000))
    assert codes(recording) == []


def test_short_records_with_a_gap(opened):
    """A gap of 7.3 s between tenth-second records is found to the sample."""
    onsets = [f"+{n / 10 if n < 300 else n / 10 + 7.3:.1f}" for n in range(600)]
    recording = opened(kind="EDF+D", per_record=25, record_s="0.1", onsets=onsets, samples=np.zeros(15_000, "<i2"))
    assert [(s.n_samples, s.offset_ns) for s in recording.stretches] == [(7500, 0), (7500, 37_300_000_000)]


def test_gap_in_a_file_declared_continuous_is_kept_and_said(opened):
    """An EDF+C whose times jump is cut there, with a finding."""
    recording = opened(kind="EDF+C", onsets=seconds(30) + seconds(30, first=40))
    assert len(recording.stretches) == 2
    assert codes(recording) == ["gap_in_file_declared_continuous"]


def test_rounded_stamps_are_no_gaps(opened):
    """Record lengths that the stamps cannot say exactly do not cut the signal."""
    onsets = [f"+{n * 0.332:.2f}" for n in range(180)]
    recording = opened(np.zeros(180 * 83, "<i2"), kind="EDF+C", per_record=83, record_s="0.332", onsets=onsets)
    assert len(recording.stretches) == 1
    assert recording.rate == Fraction(250)


def test_stamps_that_drift_against_the_sample_clock_are_no_gaps(opened):
    """A device clock that runs 50 ppm apart from the sample clock leaves one stretch and an end stamp."""
    onsets = [f"+{n * 1.00005:.6f}" for n in range(60)]
    recording = opened(kind="EDF+C", onsets=onsets)
    assert len(recording.stretches) == 1
    assert recording.end_offset_ns == 59_002_950_000 + 1_000_000_000


@pytest.mark.parametrize("kind", ["EDF+C", "EDF+D"])
def test_time_running_backwards_is_refused(opened, kind):
    """A record stamped before the end of the one before is refused."""
    with pytest.raises(Refused) as refusal:
        opened(kind=kind, onsets=seconds(30) + seconds(30, first=20))
    assert refusal.value.code == "time_runs_backwards"


def test_record_without_time(opened):
    """A missing stamp refuses an EDF+D and is a finding in an EDF+C."""
    onsets = [*seconds(10), "", *seconds(49, first=11)]
    with pytest.raises(Refused) as refusal:
        opened(kind="EDF+D", onsets=onsets)
    assert refusal.value.code == "no_time_in_record"
    assert codes(opened(kind="EDF+C", onsets=onsets)) == ["bad_annotation"]


def test_marks_in_any_text_coding(opened):
    """Diary text in UTF-8 or latin-1 is read; two texts of one onset are two marks; rubbish is a finding."""
    notes = {
        2: "+2\x153.5\x14schwindlig, müde\x14lag\x14\x00".encode(),
        3: "+3\x14müde\x14\x00".encode("latin-1"),
        4: b"x",
    }
    recording = opened(kind="EDF+C", onsets=seconds(60), annotations=notes)
    assert [(mark.text, mark.duration_s) for mark in recording.marks] == [
        ("schwindlig, müde", 3.5), ("lag", 3.5), ("müde", None),
    ]  # fmt: skip
    assert codes(recording) == ["bad_annotation"]


def test_marks_in_a_second_annotation_channel(opened):
    """Times stand in the first annotation channel, marks are found in all of them."""
    stamps = b"".join(f"+{n}\x14\x14\x00".encode().ljust(500, b"\0") for n in range(60))
    channels = {"labels": ("ECG", "EDF Annotations"), "units": ("mV", ""), "others": {1: np.frombuffer(stamps, "<i2")}}
    recording = opened(kind="EDF+C", onsets=seconds(60), annotations={7: b"+7.5\x14Button\x14\x00"}, **channels)
    assert [(mark.offset_ns, mark.text) for mark in recording.marks] == [(7_500_000_000, "Button")]
    assert codes(recording) == []


@pytest.mark.parametrize(("kind", "expected"), [("EDF+C", ["bad_annotation"]), ("EDF+D", "no_time_in_record")])
def test_annotation_channel_without_room(tmp_path, make_edf, kind, expected):
    """An annotation channel of no bytes has no times: said in an EDF+C, refused in an EDF+D."""
    whole = bytearray(make_edf(np.zeros(500, "<i2"), kind=kind, onsets=["+0", "+1"]))
    at = 256 + 2 * 216 + 8  # samples per record of the second channel
    assert whole[at : at + 2] == b"60"
    whole[at : at + 8] = b"0       "
    path = tmp_path / "a.edf"
    path.write_bytes(whole)
    if kind == "EDF+C":
        assert expected[0] in codes(open_delivery([path]))
    else:
        with pytest.raises(Refused) as refusal:
            open_delivery([path])
        assert refusal.value.code == expected


@pytest.mark.parametrize(
    ("changes", "cut", "extra", "records", "expected"),
    [
        ({"n_records": "-1"}, None, b"", 60, ["record_count_open"]),
        ({"n_records": "600"}, 512 + 37 * 500 + 101, b"", 37, ["file_cut_short", "partial_last_record"]),
        ({"n_records": "10"}, None, b"", 60, ["more_records_than_header_says"]),
        ({"header_bytes": "768"}, None, b"", 60, ["header_size_field_wrong"]),
        ({"pad": b"\0"}, None, b"", 60, []),
    ],
)
def test_wrong_counts_are_read_and_said(opened, changes, cut, extra, records, expected):
    """Whole records are read whatever the header counts, and the difference is a finding."""
    recording = opened(cut=cut, extra=extra, **changes)
    assert recording.n_samples == records * 250
    assert codes(recording) == expected


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"physical": ("1", "1")}, "amplitude_scale_missing"),
        ({"digital": ("0", "65535")}, "digital_range_wrong"),
        ({"digital": ("7", "7")}, "digital_range_wrong"),
        ({"physical": ("abc", "5")}, "amplitude_scale_missing"),
        ({"units": ("",)}, "unit_unknown"),
        ({"units": ("degC",)}, "unit_unknown"),
        ({"units": ("V",)}, "amplitude_not_plausible"),
        ({"record_s": "0"}, "record_duration_not_positive"),
        ({"record_s": "abc"}, "bad_header_number"),
        ({"record_s": "100"}, "sampling_rate_out_of_range"),
        ({"labels": ("EDF Annotations",)}, "no_signals"),
        ({"labels": ("ECG", "ECG"), "units": ("mV", "mV"), "others": {1: np.zeros(15_000)}}, "several_ecg_channels"),
        ({"labels": ("Acc X", "Acc Y"), "units": ("g", "g"), "others": {1: np.zeros(15_000)}}, "no_ecg_channel"),
    ],
)
def test_what_cannot_be_right_is_refused_by_its_code(opened, changes, code):
    """A header that would give wrong times or amplitudes is refused with the code of the one list."""
    with pytest.raises(Refused) as refusal:
        opened(**changes)
    assert refusal.value.code == code


@pytest.mark.parametrize(("cut", "code"), [(0, "empty_file"), (100, "header_cut_short"), (512, "no_samples")])
def test_files_that_end_early(opened, cut, code):
    """No bytes, half a header and a header alone are told apart."""
    with pytest.raises(Refused) as refusal:
        opened(cut=cut)
    assert refusal.value.code == code


def test_site_scale_replaces_a_missing_one(opened):
    """A scale set by the programme opens a file that has none, with a finding."""
    recording = opened(physical=("1", "1"), site=Site(mv_per_count=0.005))
    assert recording.mv_per_count == 0.005
    assert codes(recording) == ["scale_from_site"]


def test_decimal_comma_in_the_range(opened):
    """A physical range with decimal commas gives 115 µV for 1,150 counts."""
    recording = opened(physical=("-3,2768", "3,2767"))
    # Source: EDF+ specification, section 2.1.3; (3.2767 + 3.2768) mV / 65,535 = 0.1 µV a count
    assert (1150 - recording.count_at_zero_mv) * recording.mv_per_count == pytest.approx(0.115, abs=1e-9)


@pytest.mark.parametrize("unit", ["mV", "uV", "µV".encode(), "μV".encode(), "µV".encode("latin-1"), "nV", "V"])
def test_units_in_every_spelling(opened, unit):
    """All spellings of a voltage give its millivolts."""
    factor = {"mV": 1, "nV": 1e-6, "V": 1e3}.get(unit, 1e-3)
    limit = f"{5 / factor:.8g}"
    recording = opened(units=(unit,), physical=(f"-{limit}"[:8], limit[:8]))
    assert recording.mv_per_count * 65_535 == pytest.approx(10)


@pytest.mark.parametrize(
    ("changes", "start"),
    [
        ({}, datetime.fromisoformat("2026-03-01T08:30:00")),
        ({"date": "01.03.yy"}, datetime.fromisoformat("2026-03-01T08:30:00")),
        ({"date": "31.12.84", "recording": "SRL-1"}, datetime.fromisoformat("2084-12-31T08:30:00")),
        ({"date": "31.12.85", "recording": "SRL-1"}, datetime.fromisoformat("1985-12-31T08:30:00")),
        ({"date": "00.00.00", "recording": "X"}, None),
        ({"date": "01.01.85", "recording": "Startdate X X X X"}, None),
        ({"time": "25.00.00"}, None),
        ({"time": "        "}, None),
    ],
)
def test_start_of_the_recording(opened, changes, start):
    """Two-digit years turn at 1985, a full date wins, and what is no date is unknown rather than guessed."""
    # Source: EDF+ specification, section 2.1.3.2 (clipping year 1985) and 2.1.3.3 (recording identification)
    assert opened(**changes).start_local == start


@pytest.mark.parametrize("patient", ["P-0001 F 02-AUG-1951 Jörg_Ångström", "P-0001 X X Jürgen".encode("latin-1")])
def test_patient_code_is_found_in_any_text_coding(opened, patient):
    """The code is among the patient words whatever the name's text coding."""
    patient = patient.encode() if isinstance(patient, str) else patient
    assert opened(patient=patient).patient_words[0] == "P-0001"


def test_equipment_is_the_first_device_word(opened):
    """The equipment field of an EDF+ recording is tried first as the device serial."""
    assert opened(recording="Startdate 01-MAR-2026 ADM-7 tech_9 SRL-1001").device_words[0] == "SRL-1001"


def test_signals_of_other_rates_side_by_side(tmp_path, ecg):
    """A slow signal beside the ECG in the same records does not shift the ECG's samples."""
    path = tmp_path / "two.edf"
    millivolts = ecg(15_000) / 1000
    breath = edfio.EdfSignal(np.sin(np.arange(1500) / 9), 25, label="Resp", physical_range=(-1, 1))
    heart = edfio.EdfSignal(millivolts, 250, label="ECG", physical_dimension="mV", physical_range=(-5, 5))
    edfio.Edf([breath, heart], data_record_duration=2).write(path)
    recording = open_delivery([path])
    # Source: edfio 0.4.18 (writer)
    assert np.array_equal(recording.read(0, 15_000), edfio.read_edf(path).signals[1].digital)
    assert recording.rate == Fraction(250)


def test_odd_rates_are_exact(opened):
    """4,999 samples in 20 s are 4999/20 Hz, not a rounded number."""
    recording = opened(np.zeros(4999 * 3, "<i2"), per_record=4999, record_s="20")
    assert recording.rate == Fraction(4999, 20)


def test_second_channel_is_taken_when_the_first_is_no_ecg(opened, ecg):
    """An accelerometer before the ECG is left out and named."""
    signal = ecg(15_000)
    recording = opened(signal, labels=("Acc", "ECG"), units=("g", "mV"), others={0: np.full(15_000, 77)})
    assert np.array_equal(recording.read(0, 15_000), signal)
    assert recording.other_channels == ("Acc",)


def test_first_of_two_leads_is_taken_and_said(opened, ecg):
    """Two differently named leads give the first, with a finding."""
    signal = ecg(15_000)
    recording = opened(signal, labels=("ECG II", "ECG V1"), units=("mV", "mV"), others={1: np.zeros(15_000)})
    assert np.array_equal(recording.read(0, 15_000), signal)
    assert codes(recording) == ["first_of_several_leads"]


@pytest.mark.parametrize("wanted", ["ecg b", "#2"])
def test_named_channel_settles_a_tie(opened, ecg, wanted):
    """The channel named or counted off by the programme is taken among several."""
    signal = ecg(15_000)
    recording = opened(
        signal,
        labels=("ECG", "ECG B"),
        units=("mV", "mV"),
        others={0: np.zeros(15_000)},
        site=Site(ecg_channel=wanted),
    )
    assert np.array_equal(recording.read(0, 15_000), signal)


def test_sentinel_below_the_digital_range_is_missing(opened):
    """Where the digital range ends above -32,768 that count means no sample."""
    assert opened(digital=("-2048", "2047")).missing_count == -32768
    assert opened().missing_count is None


def test_bdf_equals_an_independent_reader(tmp_path, make_edf):
    """A 24-bit file gives the millivolts that pyedflib gives, to the step that is kept."""
    samples = (np.sin(np.arange(15_000) / 30) * 100_000).astype(np.int32) + 500_000
    path = tmp_path / "wide.bdf"
    path.write_bytes(
        make_edf(samples, bdf=True, digital=("-8388608", "8388607"), physical=("-262144", "262143"), units=("uV",))
    )
    recording = open_delivery([path])
    # Source: pyEDFlib 0.1.42
    with pyedflib.EdfReader(str(path)) as oracle:
        expected_mv = oracle.readSignal(0) / 1000
    ecg_mv = (recording.read(0, 15_000) - recording.count_at_zero_mv) * recording.mv_per_count
    assert np.abs(ecg_mv - expected_mv).max() <= recording.mv_per_count / 2 + 1e-9
    assert recording.mv_per_count < 0.0005
    assert codes(recording) == ["resolution_reduced"]
    assert recording.format == "BDF"
