"""Damaged files of every format: read or declined, never another exception, and never a slice of another length."""

import gzip
import io
import zipfile
from pathlib import Path

import numpy as np
import polars as pl
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from flows.readers.codes import Declined
from flows.readers.identify import open_delivery
from flows.readers.recording import Site

AECG = (
    b'<?xml version="1.0"?><AnnotatedECG xmlns="urn:hl7-org:v3" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">'
    b'<component><series><component><sequenceSet><component><sequence><code code="TIME_ABSOLUTE"/>'
    b'<value xsi:type="GLIST_TS"><head value="20260301083000.250"/><increment value="4" unit="ms"/></value></sequence>'
    b'</component><component><sequence><code code="MDC_ECG_LEAD_II"/><value xsi:type="SLIST_PQ"><origin value="0" '
    b'unit="uV"/><scale value="2.5" unit="uV"/><digits>1 2 3 4 5 6 7 8</digits></value></sequence></component>'
    b"</sequenceSet></component></series></component></AnnotatedECG>"
)
TEXT = b"time_s,ecg_mv\n" + b"".join(b"%.3f,0.%03d\n" % (n / 250, n) for n in range(300))


def ishne() -> bytes:
    header = bytearray(522)
    header[:8] = b"ISHNE1.0"
    for offset, kind, value in (
        (14, "<i4", 100), (18, "<i4", 522), (22, "<i4", 522), (138, "<i2", 1), (140, "<i2", 3), (142, "<i2", 2026),
        (156, "<i2", 1), (158, "<i2", 6), (206, "<i2", 2500), (272, "<i2", 250),
    ):  # fmt: skip
        raw = np.array([value], kind).tobytes()
        header[offset : offset + len(raw)] = raw
    return bytes(header) + np.arange(100, dtype="<i2").tobytes()


def dicom() -> bytes:
    def element(tag: int, kind: bytes, value: bytes) -> bytes:
        value += b"\0" * (len(value) % 2)
        head = np.array([tag >> 16, tag & 0xFFFF], "<u2").tobytes() + kind
        long = kind in (b"SQ", b"OW")
        return head + (b"\0\0" + len(value).to_bytes(4, "little") if long else len(value).to_bytes(2, "little")) + value

    def item(content: bytes) -> bytes:
        return b"\xfe\xff\x00\xe0" + len(content).to_bytes(4, "little") + content

    source = element(0x003A0208, b"SQ", item(element(0x00080104, b"LO", b"Lead II")))
    units = element(0x003A0211, b"SQ", item(element(0x00080100, b"SH", b"mV")))
    channel = item(source + element(0x003A0210, b"DS", b"0.0025") + units)
    group = element(0x003A0005, b"US", b"\1\0") + element(0x003A0010, b"UL", b"\x64\0\0\0")
    group += element(0x003A001A, b"DS", b"250") + element(0x003A0200, b"SQ", channel)
    group += element(0x54001004, b"US", b"\x10\0") + element(0x54001006, b"CS", b"SS")
    group += element(0x54001010, b"OW", np.arange(100, dtype="<i2").tobytes())
    body = element(0x00020010, b"UI", b"1.2.840.10008.1.2.1") + element(
        0x00080016, b"UI", b"1.2.840.10008.5.1.4.1.1.9.1.3"
    )
    body += element(0x0008002A, b"DT", b"20260301083000.250") + element(0x54000100, b"SQ", item(group))
    return bytes(128) + b"DICM" + body


def parquet() -> bytes:
    content = io.BytesIO()
    pl.DataFrame({"time_s": np.arange(300) / 250, "ecg_mv": np.arange(300) / 1000}).write_parquet(content)
    return content.getvalue()


def zipped() -> bytes:
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a.csv", TEXT)
    return content.getvalue()


class Wholes(dict):
    """Sound files by format; shown short."""

    def __repr__(self) -> str:
        return f"{len(self)} sound files"


@pytest.fixture(scope="module")
def wholes(make_edf) -> Wholes:
    """One sound small file of each format."""
    stamps = [f"+{n}.5" for n in range(4)]
    notes = {1: b"+1.5\x152.5\x14button\x14\x00"}
    samples = np.arange(1000, dtype="<i2")
    files = {
        "edf": make_edf(samples, kind="EDF+D", onsets=stamps, annotations=notes),
        "bdf": make_edf(samples, bdf=True, digital=("-8388608", "8388607"), kind="BDF+C", onsets=stamps),
        "ishne": ishne(),
        "dicom": dicom(),
        "aecg": AECG,
        "wfdb": b"a/2 1 250/250(0) 8 08:30:00 01/03/2026\na 4\na 4\n",
        "wfdb1": b"a 2 250 4 08:30:00 01/03/2026\n"
        b"a.dat 212x2:1+0 200(0)/mV 12 0 1 5 0 II\na.dat 212 200 12 0 1 5 0 V\n",
        "text": TEXT,
        "parquet": parquet(),
        "gzip": gzip.compress(TEXT),
        "zip": zipped(),
    }
    return Wholes(files)


def damaged(whole: bytes, edits: list[tuple[float, bytes]], cut: float) -> bytes:
    content = bytearray(whole)
    for where, piece in edits:
        at = int(where * len(content))
        content[at : at + len(piece)] = piece
    return bytes(content[: int(cut * len(content))])


def read_or_decline(folder: Path, content: bytes) -> bool:
    """Open and read; True when it was read."""
    path = folder / "a.hea"
    path.write_bytes(content)
    (folder / "a.dat").write_bytes(bytes(range(24)))
    try:
        opened = open_delivery([path], Site(ecg_channel=""), scratch=folder / "unpacked")
        n_samples = min(opened.n_samples, 100_000)
        assert opened.read(0, n_samples).shape == (n_samples,)
        assert opened.read(0, n_samples).dtype == np.int16
        assert all(stretch.n_samples > 0 for stretch in opened.stretches)
    except Declined as declined:
        assert declined.sentence
        return False
    return True


EDITS = st.lists(st.tuples(st.floats(0, 0.9999), st.binary(min_size=1, max_size=6)), max_size=6)
NUMBERS = st.sampled_from(
    [b"-1      ", b"0       ", b"99999999", b"9e999999", b"1e-99999", b"nan     ", b"\xff\xff\xff\xff", b"\0\0\0\0"]
)
SLIPPED = st.lists(st.tuples(st.floats(0, 0.9999), NUMBERS), max_size=3)
CUTS = st.one_of(st.just(1.0), st.floats(0, 1))
FORMATS = ["edf", "bdf", "ishne", "dicom", "aecg", "wfdb1", "text", "parquet", "gzip", "zip"]


@pytest.mark.parametrize("name", FORMATS)
def test_the_sound_file_is_read(wholes, tmp_path, name):
    """Each whole file of this module is one that its reader reads."""
    assert read_or_decline(tmp_path, wholes[name])


@pytest.mark.parametrize("name", [*FORMATS, "wfdb"])
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(edits=st.one_of(EDITS, SLIPPED), cut=CUTS)
def test_damaged_files_are_read_or_declined(wholes, tmp_path_factory, name, edits, cut):
    """Any damage ends in samples or in a reason of the one list."""
    read_or_decline(tmp_path_factory.mktemp("damaged"), damaged(wholes[name], edits, cut))


@settings(max_examples=200, deadline=None)
@given(
    content=st.one_of(st.binary(max_size=600), st.text(max_size=300).map(lambda text: text.encode("utf-8", "replace")))
)
def test_any_bytes_are_read_or_declined(tmp_path_factory, content):
    """Arbitrary bytes and text end in samples or in a reason of the one list."""
    read_or_decline(tmp_path_factory.mktemp("any"), content)
