"""Written EDF+ files are read the same by two general-purpose libraries, or refused by them for their gaps."""

from datetime import datetime

import edfio
import numpy as np
import pyedflib
import pytest

from flows.edf_write import EdfHeader, Mark, Piece, write_edf

START = datetime.fromisoformat("2026-03-02T09:30:15")  # the clock at the patient's place
HEADER = EdfHeader("DN-301", "SK20417", START, fs_hz=250, mv_per_count=0.0025, record_s=1)


def ramp(n_records, first=0):
    return (np.arange(n_records * 250) + first).astype(np.int16)


def test_continuous_file_is_read_by_two_libraries(tmp_path):
    """Samples, scale, start, patient code and device serial come back through edfio and pyedflib."""
    path = tmp_path / "a.edf"
    write_edf(path, HEADER, [Piece(0, ramp(3)), Piece(3000, ramp(2, 750))])
    by_edfio = edfio.read_edf(path)
    assert by_edfio.signals[0].digital.tolist() == ramp(5).tolist()
    assert by_edfio.signals[0].data[400] == pytest.approx(1.0)
    assert datetime.combine(by_edfio.startdate, by_edfio.starttime) == START
    assert (by_edfio.patient.code, by_edfio.recording.equipment_code) == ("DN-301", "SK20417")
    assert by_edfio.is_continuous
    with pyedflib.EdfReader(str(path)) as by_pyedflib:
        assert by_pyedflib.getNSamples()[0] == 1250
        assert by_pyedflib.readSignal(0, digital=True).tolist() == ramp(5).tolist()
        assert by_pyedflib.getStartdatetime() == START
        assert by_pyedflib.getEquipment() == "SK20417"


def test_gap_makes_the_file_discontinuous(tmp_path):
    """A later piece is stamped with its own time and the file says EDF+D."""
    path = tmp_path / "gap.edf"
    write_edf(path, HEADER, [Piece(0, ramp(2)), Piece(10_000, ramp(2, 500))])
    raw = path.read_bytes()
    # Source: EDF+ specification, section 2.2.4: the time-keeping annotation holds the start of its data record
    stamps = [raw[768 + n * 524 + 500 :][:24].rstrip(b"\0") for n in range(4)]
    assert stamps == [b"+0\x14\x14", b"+1\x14\x14", b"+10\x14\x14", b"+11\x14\x14"]
    # Source: EDF+ specification, section 2.1.1: EDF+D marks interrupted recordings
    assert raw[192:197] == b"EDF+D"
    assert not edfio.read_edf(path).is_continuous


def test_marks_are_read_by_two_libraries(tmp_path):
    """A mark stands in the data record of its instant and comes back with its time and text."""
    path = tmp_path / "marked.edf"
    marks = (Mark(1500, "palpitations"), Mark(2000, "dizzy"))
    write_edf(path, HEADER._replace(has_marks=True), [Piece(0, ramp(4), marks)])
    assert [(a.onset, a.text) for a in edfio.read_edf(path).annotations] == [(1.5, "palpitations"), (2.0, "dizzy")]
    with pyedflib.EdfReader(str(path)) as by_pyedflib:
        onset_s, _, text = by_pyedflib.readAnnotations()
        assert (onset_s.tolist(), text.tolist()) == ([1.5, 2.0], ["palpitations", "dizzy"])


def test_a_mark_without_room_is_refused(tmp_path):
    """A file whose header leaves no room for marks takes none."""
    with pytest.raises(ValueError, match="no room for the mark 'palpitations on the stairs'"):
        write_edf(tmp_path / "n.edf", HEADER, [Piece(0, ramp(1), (Mark(0, "palpitations on the stairs"),))])


def test_start_within_a_second(tmp_path):
    """A start fraction stands in the first annotation."""
    path = tmp_path / "quarter.edf"
    write_edf(path, HEADER._replace(start_local=START.replace(microsecond=250_000)), [Piece(0, ramp(1))])
    # Source: EDF+ specification, section 2.2.4: the first onset may be a fraction of a second
    assert b"+0.25\x14\x14" in path.read_bytes()
    assert edfio.read_edf(path).starttime.microsecond == 250_000


@pytest.mark.parametrize(
    ("change", "told"),
    [
        ({"patient_code": "Mary Sand"}, "code 'Mary Sand'; expected one word"),
        ({"device_serial": "ä1"}, "expected at most 80 printable ASCII"),
        ({"lead": "a lead name of great length"}, "expected at most 16"),
    ],
)
def test_headers_that_cannot_be_written(tmp_path, change, told):
    """Blanks in codes, foreign letters and overlong texts are refused."""
    with pytest.raises(ValueError, match=told):
        write_edf(tmp_path / "b.edf", HEADER._replace(**change), [])


@pytest.mark.parametrize("piece", [Piece(3000, np.zeros(300, np.int16)), Piece(500, ramp(1))])
def test_pieces_that_do_not_fit(tmp_path, piece):
    """A part of a data record, or a piece that begins before the last one ends, is refused."""
    with pytest.raises(ValueError, match="expected a multiple of 250 samples beginning at 1000 ms"):
        write_edf(tmp_path / "c.edf", HEADER, [Piece(0, ramp(1)), piece])
