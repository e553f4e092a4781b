"""Archives: unpacked once and within limits, or refused without leaving anything outside."""

import gzip
import io
import zipfile
import zlib

import numpy as np
import pytest

from flows.readers.archive import Limits, unpack
from flows.readers.codes import Refused
from flows.readers.identify import open_delivery


def zipped(**members):
    """Bytes of a zip archive; member names are the keys with __ for a point."""
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, body in members.items():
            archive.writestr(name.replace("__", "."), body)
    return content.getvalue()


@pytest.fixture
def opened(tmp_path):
    """Function that writes an archive and opens the recording in it."""

    def make(content, name="a.bin", **limits):
        path = tmp_path / "in" / name
        path.parent.mkdir(exist_ok=True)
        path.write_bytes(content)
        return open_delivery([path], scratch=tmp_path / "in" / "unpacked", limits=Limits(**limits))

    return make


def refused(opened, content, **limits):
    with pytest.raises(Refused) as refusal:
        opened(content, **limits)
    return refusal.value.code


@pytest.mark.parametrize("name", ["a.edf.gz", "a.csv", "a"])
def test_gzip_whatever_its_name(opened, make_edf, ecg, name):
    """A packed recording opens by its bytes, also under a wrong name."""
    recording = opened(gzip.compress(make_edf()), name)
    assert np.array_equal(recording.read(0, 15_000), ecg(15_000))


def test_zip_of_one_recording_with_papers_beside_it(opened, make_edf):
    """The recording in an archive is found among other files."""
    content = zipped(readme__txt="please read", x__pdf=b"%PDF-1.7", folder__edf=make_edf(), __MACOSX="x")
    assert opened(content).format == "EDF"


def test_zip_of_a_file_set(opened):
    """A WFDB header finds its signal file inside the archive."""
    header = "a 1 250 3\na.dat 16 200 16 0 0 0 0 II\n"
    recording = opened(zipped(a__hea=header, a__dat=np.array([1, 2, 3], "<i2").tobytes()))
    assert recording.read(0, 3).tolist() == [1, 2, 3]


def test_damaged_archives(opened, make_edf):
    """A cut archive, a wrong checksum and rubbish behind the mark are refused."""
    packed = gzip.compress(make_edf())
    wrong_crc = packed[:-8] + bytes([packed[-8] ^ 1]) + packed[-7:]
    whole = zipped(a__edf=make_edf())
    at = whole.index(zlib.compress(make_edf())[2:10]) + 40
    flipped = whole[:at] + bytes([whole[at] ^ 0xFF]) + whole[at + 1 :]
    for content in (packed[:2000], wrong_crc, packed[:10] + b"xx", whole[: len(whole) // 2], flipped, b"PK\x03\x04xx"):
        assert refused(opened, content) == "damaged_archive"


def test_bombs_are_stopped(opened, tmp_path):
    """An archive that grows beyond its ratio or size is refused before it fills the disk."""
    bomb = gzip.compress(bytes(80_000_000))
    assert refused(opened, bomb) == "archive_unsafe"
    assert refused(opened, zipped(a=bytes(80_000_000))) == "archive_unsafe"
    assert refused(opened, bomb, largest_ratio=100_000, largest_bytes=10_000_000) == "archive_unsafe"
    assert sum(path.stat().st_size for path in tmp_path.rglob("*")) < 60_000_000


@pytest.mark.parametrize("name", ["../up.edf", "/etc/x.edf", "a\\b.edf", "x/../../y.edf"])
def test_names_that_lead_outside_are_refused(opened, tmp_path, make_edf, name):
    """A member whose name leaves the folder is refused and nothing is written outside."""
    before = set(tmp_path.rglob("*"))
    assert refused(opened, zipped(**{name: make_edf()})) == "archive_unsafe"
    assert {path.name for path in tmp_path.rglob("*")} - {path.name for path in before} <= {"in", "a.bin", "unpacked"}


def test_links_twins_and_nests_are_refused(opened, make_edf, tmp_path):
    """A link, two members of one name, and an archive in an archive are refused."""
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w") as archive:
        link = zipfile.ZipInfo("a.edf")
        link.external_attr = 0o120777 << 16
        archive.writestr(link, "/etc/passwd")
    assert refused(opened, content.getvalue()) == "archive_unsafe"
    assert refused(opened, zipped(**{"a/1.edf": b"x", "b/1.EDF": b"y"})) == "archive_unsafe"
    assert refused(opened, gzip.compress(gzip.compress(make_edf()))) == "archive_unsafe"


def test_several_recordings_are_refused(opened, make_edf):
    """One delivery is one recording; an archive of two says so."""
    assert refused(opened, zipped(a__edf=make_edf(), b__edf=make_edf())) == "archive_holds_several"


def test_too_many_members(tmp_path):
    """An archive of thousands of files is refused before it is unpacked."""
    path = tmp_path / "a.zip"
    path.write_bytes(zipped(**{f"f{n}": b"" for n in range(2001)}))
    with pytest.raises(Refused) as refusal:
        unpack(path, tmp_path / "out", Limits())
    assert refusal.value.code == "archive_unsafe"
