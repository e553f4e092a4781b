"""DICOM ECG waveforms, written by an independent library and read in place."""

from fractions import Fraction

import numpy as np
import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery

pydicom = pytest.importorskip("pydicom", reason="pydicom of the test extra writes the files")

FRAMES = np.random.default_rng(4).integers(-900, 900, (2500, 2)).astype("<i2")


def channel(label, *, sensitivity="0.0025", unit="mV", baseline="0"):
    """One channel definition."""
    made, source, units = pydicom.Dataset(), pydicom.Dataset(), pydicom.Dataset()
    source.CodeMeaning = label
    units.CodeValue = unit
    made.ChannelSourceSequence = [source]
    if sensitivity:
        made.ChannelSensitivity = sensitivity
        made.ChannelSensitivityUnitsSequence = [units]
        made.ChannelSensitivityCorrectionFactor = "1"
        made.ChannelBaseline = baseline
    return made


@pytest.fixture
def opened(tmp_path):
    """Function that writes, maybe cuts, and opens a file."""

    def make(
        frames=FRAMES, *, labels=("Lead II", "Lead V1"), bits=16, kind="SS", cut=0, implicit=False, sop="3", zone=None,
        stated=None, **scale,
    ):  # fmt: skip
        made, group = pydicom.Dataset(), pydicom.Dataset()
        made.SOPClassUID = f"1.2.840.10008.5.1.4.1.1.9.1.{sop}" if sop == "3" else "1.2.840.10008.5.1.4.1.1.9.2.1"
        made.SOPInstanceUID = "1.2.3"
        made.PatientName, made.PatientID, made.PatientBirthDate = "Doe^Jane", "P-0001", "19510802"
        made.AcquisitionDateTime = "20260301083000.250"
        made.DeviceSerialNumber = "SRL-1001"
        if zone:
            made.TimezoneOffsetFromUTC = zone
        group.NumberOfWaveformChannels = frames.shape[1]
        group.NumberOfWaveformSamples = stated or frames.shape[0]
        group.SamplingFrequency = "250"
        group.ChannelDefinitionSequence = [channel(label, **scale) for label in labels]
        group.WaveformBitsAllocated = bits
        group.WaveformSampleInterpretation = kind
        group.WaveformData = frames.tobytes()
        made.WaveformSequence = [group]
        syntax = pydicom.uid.ImplicitVRLittleEndian if implicit else pydicom.uid.ExplicitVRLittleEndian
        made.file_meta = pydicom.dataset.FileMetaDataset()
        made.file_meta.TransferSyntaxUID = syntax
        path = tmp_path / "a.dcm"
        pydicom.dcmwrite(path, made, enforce_file_format=True)
        if cut:
            path.write_bytes(path.read_bytes()[:-cut])
        return open_delivery([path])

    return make


def codes(recording):
    return [found.code for found in recording.findings]


@pytest.mark.parametrize("implicit", [False, True])
def test_samples_equal_those_that_were_written(opened, implicit):
    """Samples, scale, start and device come back; of two leads the first is taken; the name is not."""
    recording = opened(implicit=implicit)
    # Source: pydicom 3.0.2 (writer)
    assert np.array_equal(recording.read(0, 2500), FRAMES[:, 0])
    assert np.array_equal(recording.read(100, 300), FRAMES[100:300, 0])
    assert recording.rate == Fraction(250)
    assert recording.mv_per_count == pytest.approx(0.0025)
    assert str(recording.start_local) == "2026-03-01 08:30:00.250000"
    assert (recording.device_words, recording.patient_words) == (("SRL-1001",), ("P-0001",))
    assert (recording.lead, codes(recording)) == ("II", ["first_of_several_leads"])


def test_zone_of_the_file(opened):
    """An offset from UTC makes the start an instant."""
    recording = opened(zone="+0130")
    assert (str(recording.start_local), recording.zone) == ("2026-03-01 07:00:00.250000", "UTC")


def test_cut_samples_are_read_and_said(opened):
    """A file that ends within its samples is read as far as it goes."""
    recording = opened(cut=4001)
    assert recording.n_samples == (10_000 - 4001) // 4
    assert codes(recording) == ["first_of_several_leads", "file_cut_short"]


@pytest.mark.parametrize(
    ("bits", "kind", "dtype"), [(8, "SB", "<i1"), (8, "UB", "<u1"), (16, "US", "<u2"), (32, "SL", "<i4")]
)
def test_sample_kinds(opened, bits, kind, dtype):
    """All linear sample kinds give their counts."""
    frames = (np.arange(2500).reshape(-1, 1) % 100).astype(dtype)
    recording = opened(frames, labels=("ECG",), bits=bits, kind=kind, sensitivity="0.0125")
    millivolts = (recording.read(0, 2500) - recording.count_at_zero_mv) * recording.mv_per_count
    assert np.allclose(millivolts, frames[:, 0] * 0.0125)


def test_baseline_shifts_zero(opened):
    """A channel baseline of 1 mV lies on top of every sample."""
    recording = opened(baseline="1")
    # Source: DICOM PS3.3 C.10.9.1.4.3 (channel baseline)
    assert (0 - recording.count_at_zero_mv) * recording.mv_per_count == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"sensitivity": None}, "unit_unknown"),
        ({"sensitivity": "0"}, "amplitude_scale_missing"),
        ({"unit": "mm[Hg]"}, "unit_unknown"),
        ({"kind": "MB", "bits": 8}, "sample_coding_not_supported"),
        ({"sop": "99"}, "no_signals"),
        ({"labels": ()}, "no_signals"),
        ({"cut": 10_000}, "no_samples"),
        ({"labels": ("Lead II", "Lead II")}, "several_ecg_channels"),
    ],
)
def test_what_cannot_be_read_is_refused(opened, changes, code):
    """Files without scale, samples or an ECG are refused with their code."""
    with pytest.raises(Refused) as refusal:
        opened(**({"sop": "3"} | changes))
    assert refusal.value.code == code
