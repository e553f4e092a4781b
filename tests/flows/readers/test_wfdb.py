"""WFDB records: every coding, segments, checksums, and what must be refused."""

from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
import wfdb

from flows.readers import wfdb as reader
from flows.readers.codes import Refused
from flows.readers.identify import open_delivery
from flows.readers.recording import Site, Stretch


def write(folder: Path, header: str, **files: bytes) -> Path:
    """Write a header and signal files (a__dat is a.dat) and return the header's path."""
    for name, content in files.items():
        (folder / name.replace("__", ".")).write_bytes(content)
    path = folder / "a.hea"
    path.write_text(header)
    return path


def refused(path: Path) -> str:
    with pytest.raises(Refused) as refusal:
        open_delivery([path])
    return refusal.value.code


def test_first_samples_of_the_212_example(tmp_path):
    """Bytes E3 33 F3 are 995 and 1011 counts, -0.145 and -0.065 mV."""
    path = write(tmp_path, "a 1 360 2\na.dat 212 200 11 1024 995 0 0 MLII\n", a__dat=bytes.fromhex("E333F3"))
    recording = open_delivery([path])
    counts = recording.read(0, 2)
    # Source: WFDB specification, signal files, format 212; sample record 100s
    assert counts.tolist() == [995, 1011]
    assert (counts - recording.count_at_zero_mv) * recording.mv_per_count == pytest.approx([-0.145, -0.065])


@pytest.mark.parametrize("coding", ["16", "24", "32", "80", "212"])
@pytest.mark.parametrize("n_signals", [1, 2])
def test_every_coding_equals_an_independent_reader(tmp_path, coding, n_signals):
    """Samples written by an independent library come back, whole and in pieces."""
    limit = 120 if coding == "80" else 2000
    digital = np.random.default_rng(1).integers(-limit, limit, (999, n_signals))
    wfdb.wrsamp(
        "a", fs=250, units=["mV"] * n_signals, sig_name=["II", "V1"][:n_signals], d_signal=digital,
        fmt=[coding] * n_signals, adc_gain=[200.0] * n_signals, baseline=[0] * n_signals, write_dir=str(tmp_path),
    )  # fmt: skip
    recording = open_delivery([tmp_path / "a.hea"])
    # Source: wfdb 4.3.1 (writer)
    assert np.array_equal(recording.read(0, 999), digital[:, 0])
    assert np.array_equal(recording.read(333, 712), digital[333:712, 0])
    assert [found.code for found in recording.findings if found.code == "checksum_wrong"] == []


@pytest.mark.parametrize("coding", ["508", "516", "524"])
def test_compressed_codings(tmp_path, coding):
    """FLAC-compressed samples come back, whole and in pieces, and a cut file is refused."""
    pytest.importorskip("soundfile", reason="the extra flac is not installed")
    digital = np.random.default_rng(1).integers(-120, 120, (999, 2))
    wfdb.wrsamp(
        "a", fs=250, units=["mV"] * 2, sig_name=["II", "V1"], d_signal=digital, fmt=[coding] * 2,
        adc_gain=[200.0] * 2, baseline=[0] * 2, write_dir=str(tmp_path),
    )  # fmt: skip
    recording = open_delivery([tmp_path / "a.hea"])
    # Source: wfdb 4.3.1 (writer)
    assert np.array_equal(recording.read(0, 999), digital[:, 0])
    assert np.array_equal(recording.read(333, 712), digital[333:712, 0])
    path = next(each for each in tmp_path.iterdir() if each.suffix != ".hea")
    path.write_bytes(path.read_bytes()[:200])
    assert refused(tmp_path / "a.hea") in ("samples_cut_short", "no_samples")


@pytest.mark.parametrize(("coding", "dtype", "shift"), [("61", ">i2", 0), ("160", "<u2", 32768)])
def test_codings_that_only_the_oracle_reads(tmp_path, coding, dtype, shift):
    """Big-endian and offset-binary samples equal those of an independent reader."""
    samples = np.random.default_rng(2).integers(-2000, 2000, 500)
    header = f"a 1 250 500\na.dat {coding} 200 16 0 {samples[0]} {samples.sum() % 65536} 0 II\n"
    recording = open_delivery([write(tmp_path, header, a__dat=(samples + shift).astype(dtype).tobytes())])
    # Source: wfdb 4.3.1 (reader)
    oracle = wfdb.rdrecord(str(tmp_path / "a"), physical=False).d_signal[:, 0]
    assert np.array_equal(recording.read(0, 500), samples)
    assert np.array_equal(oracle, samples)


def test_reference_records_equal_an_independent_reader(reference_ecg):
    """Real records read the same as by the wfdb library."""
    path = reference_ecg / "mitdb" / "208.hea"
    recording = open_delivery([path])
    # Source: wfdb 4.3.1 (reader)
    oracle = wfdb.rdrecord(str(path.with_suffix("")), physical=False).d_signal[:, 0]
    assert np.array_equal(recording.read(0, recording.n_samples), oracle)
    assert recording.lead == "MLII"
    assert [found.code for found in recording.findings] == ["first_of_several_leads"]


def test_wrong_checksum_is_a_finding(tmp_path):
    """A sum that does not match is said, the samples are read; signed and unsigned writing are both right."""
    samples = np.array([-5, 7, -9, 4], "<i2")
    for checksum, expected in ((-3, []), (65533, []), (5, ["checksum_wrong"])):
        path = write(tmp_path, f"a 1 250 4\na.dat 16 200 16 0 -5 {checksum} 0 II\n", a__dat=samples.tobytes())
        assert [found.code for found in open_delivery([path]).findings] == expected


def test_null_segment_is_a_gap(tmp_path):
    """A segment named ~ leaves two stretches with its length between them."""
    path = write(tmp_path, "a/3 1 250 1500\ns1 500\n~ 250\ns2 750\n")
    for name, n_samples in (("s1", 500), ("s2", 750)):
        (tmp_path / f"{name}.hea").write_text(f"{name} 1 250 {n_samples}\n{name}.dat 16 200 16 0 0 0 0 II\n")
        (tmp_path / f"{name}.dat").write_bytes(np.zeros(n_samples, "<i2").tobytes())
    recording = open_delivery([path])
    # Source: WFDB specification, header files, multi-segment records
    assert recording.stretches == (Stretch(0, 500, 0), Stretch(500, 750, 3_000_000_000))


def test_segments_without_a_gap_are_one_stretch(tmp_path):
    """Segments that follow each other read as one, across their border."""
    path = write(tmp_path, "a/2 1 250 1000\ns1 500\ns2 500\n")
    samples = np.arange(1000, dtype="<i2")
    for name, half in (("s1", samples[:500]), ("s2", samples[500:])):
        (tmp_path / f"{name}.hea").write_text(f"{name} 1 250 500\n{name}.dat 16 200\n")
        (tmp_path / f"{name}.dat").write_bytes(half.tobytes())
    recording = open_delivery([path], Site(ecg_channel="signal 1"))
    assert recording.stretches == (Stretch(0, 1000, 0),)
    assert np.array_equal(recording.read(400, 600), samples[400:600])


@pytest.mark.parametrize("place", [1, 2])
def test_signals_of_one_label_are_told_by_their_place(tmp_path, place):
    """Of two signals of one name the one counted off is read."""
    frames = np.arange(30, dtype="<i2").reshape(15, 2)
    header = "a 2 250 15\na.dat 16 200 16 0 0 0 0 ECG\na.dat 16 200 16 0 0 0 0 ECG\n"
    recording = open_delivery([write(tmp_path, header, a__dat=frames.tobytes())], Site(ecg_channel=f"#{place}"))
    assert np.array_equal(recording.read(0, 15), frames[:, place - 1])


def test_several_samples_per_frame(tmp_path):
    """A signal with two samples per frame beside one with one has twice the frame rate."""
    frames = np.arange(30, dtype="<i2").reshape(10, 3)
    header = "a 2 100 10\na.dat 16x2 200 16 0 0 0 0 II\na.dat 16 200 16 0 0 0 0 resp\n"
    recording = open_delivery([write(tmp_path, header, a__dat=frames.tobytes())])
    # Source: WFDB specification, header files, samples per frame
    assert recording.rate == Fraction(200)
    assert np.array_equal(recording.read(0, 20), frames[:, :2].reshape(-1))


@pytest.mark.parametrize(
    ("header", "code"),
    [
        ("a 1 250 4\nb.dat 16 200 16 0 0 0 0 II\n", "part_missing"),
        ("a 1 250 4\n../a.dat 16 200 16 0 0 0 0 II\n", "file_name_points_outside"),
        ("a 1 250 4\n/etc/passwd 16 200 16 0 0 0 0 II\n", "file_name_points_outside"),
        ("a/1 1 250 4\n../../s1 4\n", "file_name_points_outside"),
        ("a 1 250 4\na.dat 16 0 16 0 0 0 0 II\n", "amplitude_scale_missing"),
        ("a 1 250 4\na.dat 16\n", "amplitude_scale_missing"),
        ("a 1 250 4\na.dat 16 200/mmHg 16 0 0 0 0 II\n", "unit_unknown"),
        ("a 1 250 4\na.dat 311 200 16 0 0 0 0 II\n", "sample_coding_not_supported"),
        ("a 1 5 4\na.dat 16 200 16 0 0 0 0 II\n", "sampling_rate_out_of_range"),
        ("a 0 250 4\n", "no_signals"),
        ("a 2 250 4\na.dat 16 200 16 0 0 0 0 II\n", "header_cut_short"),
    ],
)
def test_what_cannot_be_read_is_refused(tmp_path, header, code):
    """Headers that lead outside, lack a part or cannot be scaled are refused with their code."""
    assert refused(write(tmp_path, header, a__dat=np.zeros(4, "<i2").tobytes())) == code


def test_cut_signal_file_is_read_and_said(tmp_path):
    """A signal file shorter than its header says is read as far as it goes."""
    path = write(tmp_path, "a 1 250 400\na.dat 16 200 16 0 0 0 0 II\n", a__dat=np.zeros(300, "<i2").tobytes())
    recording = open_delivery([path])
    assert recording.n_samples == 300
    assert [found.code for found in recording.findings] == ["file_cut_short"]


def test_start_needs_time_and_date(tmp_path):
    """A base time without a date is no start."""
    line = "\na.dat 16 200 16 0 0 0 0 II\n"
    dated = write(tmp_path, f"a 1 250 4 08:30:00.500 01/03/2026{line}", a__dat=bytes(8))
    assert str(open_delivery([dated]).start_local) == "2026-03-01 08:30:00.500000"
    assert open_delivery([write(tmp_path, f"a 1 250 4 08:30:00{line}")]).start_local is None


def test_names_in_a_header_are_the_set(tmp_path):
    """The header names the files that belong to its delivery."""
    path = write(tmp_path, "a 2 250 4\na.dat 16 200\nb.dat 16 200\n")
    assert reader.names_in_header(path) == ["a.dat", "b.dat"]
