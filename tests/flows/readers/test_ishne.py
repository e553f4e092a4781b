"""ISHNE files: layout, checksum, and the two ways of counting samples."""

import binascii
import struct
from fractions import Fraction

import numpy as np
import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery


def ishne(samples, *, leads=(6,), resolution_nv=2500, rate=250, count=None, crc=None, start=(8, 30, 0), text=b"note"):
    """Bytes of a file with interleaved samples of shape (n, leads)."""
    frames = np.asarray(samples, "<i2").reshape(-1, len(leads))
    block = bytearray(512)  # bytes 10 to 521
    struct.pack_into("<iiiih", block, 0, len(text), len(frames) if count is None else count, 522, 522 + len(text), 1)
    struct.pack_into("<40s40s20s", block, 18, b"Jane", b"Doe", b"P-0001")
    struct.pack_into("<3h", block, 128, 1, 3, 2026)
    struct.pack_into("<3h", block, 140, *start)
    struct.pack_into("<h", block, 146, len(leads))
    struct.pack_into("<12h", block, 148, *(list(leads) + [-9] * (12 - len(leads))))
    struct.pack_into("<12h", block, 196, *([resolution_nv] * len(leads) + [-9] * (12 - len(leads))))
    struct.pack_into("<40sh", block, 222, b"SRL-1001", rate)
    checked = bytes(block) + text
    if crc is None:
        crc = binascii.crc_hqx(checked, 0xFFFF)
    return b"ISHNE1.0" + struct.pack("<H", crc) + checked + frames.tobytes()


@pytest.fixture
def opened(tmp_path):
    """Function that writes and opens a file."""

    def make(*args, extra=b"", **changes):
        path = tmp_path / "a.ecg"
        path.write_bytes(ishne(*args, **changes) + extra)
        return open_delivery([path])

    return make


def codes(recording):
    return [found.code for found in recording.findings]


def test_checksum_of_the_standard():
    """The checksum over 123456789 is 29B1."""
    # Source: CRC catalogue, CRC-16/CCITT-FALSE check value
    assert binascii.crc_hqx(b"123456789", 0xFFFF) == 0x29B1


def test_fields_of_the_layout(opened):
    """Samples, rate, scale, lead, start and device stand where the paper puts them; the name is not taken."""
    recording = opened(np.arange(-500, 500))
    # Source: Badilini, Ann Noninvasive Electrocardiol 1998;3:263 (field table)
    assert np.array_equal(recording.read(0, 1000), np.arange(-500, 500))
    assert np.array_equal(recording.read(10, 20), np.arange(-490, -480))
    assert (recording.rate, recording.lead) == (Fraction(250), "II")
    assert recording.mv_per_count == pytest.approx(0.0025)
    assert str(recording.start_local) == "2026-03-01 08:30:00"
    assert recording.device_words == ("SRL-1001",)
    assert recording.patient_words == ("P-0001",)
    assert codes(recording) == []


@pytest.mark.parametrize("count", [500, 1000])
def test_sample_count_per_lead_or_of_all_leads(opened, count):
    """Both ways of counting the samples of two leads give the same recording."""
    frames = np.stack([np.arange(500), -np.arange(500)], axis=1)
    recording = opened(frames, leads=(6, 11), count=count)
    assert np.array_equal(recording.read(0, 500), np.arange(500))
    assert codes(recording) == ["first_of_several_leads"]


def test_wrong_checksum_is_a_finding(opened):
    """A wrong header checksum is said, the samples are read."""
    assert codes(opened(np.zeros(500), crc=1)) == ["checksum_wrong"]


def test_other_counts_are_said(opened):
    """A file shorter or longer than its header says is read and said."""
    assert codes(opened(np.zeros(500), count=600)) == ["file_cut_short"]
    assert codes(opened(np.zeros(500), count=400)) == ["more_records_than_header_says"]
    assert codes(opened(np.zeros(500), extra=b"\0")) == ["partial_last_record"]


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"resolution_nv": 0}, "amplitude_scale_missing"),
        ({"resolution_nv": -9}, "amplitude_scale_missing"),
        ({"rate": 0}, "sampling_rate_out_of_range"),
        ({"leads": (0, 0)}, "no_ecg_channel"),
    ],
)
def test_what_cannot_be_right_is_refused(opened, changes, code):
    """A missing scale or rate and leads that cannot be told are refused."""
    with pytest.raises(Refused) as refusal:
        opened(np.zeros(500), **changes)
    assert refusal.value.code == code


def test_impossible_start_is_unknown(opened):
    """An hour of -9 is no start."""
    assert opened(np.zeros(500), start=(-9, 0, 0)).start_local is None
