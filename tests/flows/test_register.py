"""The register files: tolerant of spreadsheets, strict about meaning, errors that lead to the cell."""

import contextlib
from datetime import date, datetime

import pytest
from hypothesis import given
from hypothesis import strategies as st

from flows.register import RegisterError, load

PATIENTS = "patient_code,zone\nP-1,Europe/Berlin\nP-2,\n"
WEARS = "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01 08:00,2026-03-15 08:00,\n"
THERAPIES = "therapy_id,patient_code,therapy_kind,therapy_detail,at_local\nT1,P-1,ablation,,2026-03-08\n"


@pytest.fixture
def loaded(tmp_path):
    """Function that writes register files and loads them."""

    def make(patients=PATIENTS, wears=WEARS, therapies=THERAPIES):
        folder = tmp_path / "register"
        folder.mkdir(exist_ok=True)
        for name, text in (("patients", patients), ("wears", wears), ("therapies", therapies)):
            path = folder / f"{name}.csv"
            path.unlink(missing_ok=True)
            if text is not None:
                path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return load(tmp_path, "Europe/Lisbon")

    return make


def test_a_register_is_read(loaded):
    """Patients get their zone or the programme's, wears their UTC span and code, therapies their local day."""
    register = loaded()
    assert register.patients.rows() == [("P-1", "Europe/Berlin"), ("P-2", "Europe/Lisbon")]
    (wear,) = register.wears_of("SRL-1")
    assert wear.recording_id == "SRL-1_20260301"
    assert wear.from_utc == datetime.fromisoformat("2026-03-01T07:00")
    assert wear.zone_source == "patient"
    assert register.therapies.rows() == [("T1", "P-1", "ablation", "", date(2026, 3, 8))]


def test_what_spreadsheets_do_is_tolerated(loaded):
    """BOM, CRLF, blanks, empty lines, semicolons, other column order and a missing therapies file are read."""
    register = loaded(
        patients="\ufeffzone ;patient_code\r\n Europe/Berlin ; P-1 \r\n;;\r\n;P-2\r\n".replace(";;", ";"),
        wears="device_serial,patient_code,from_local\nSRL-1,P-1,2026-03-01\n",
        therapies=None,
    )
    assert register.patients.rows() == [("P-1", "Europe/Berlin"), ("P-2", "Europe/Lisbon")]
    assert register.wears_of("SRL-1")[0].to_utc is None
    assert register.therapies.is_empty()


def test_a_day_alone_means_the_whole_day(loaded):
    """A wear from one date to another ends with the last day's end."""
    register = loaded(wears="device_serial,patient_code,from_local,to_local\nSRL-1,P-2,2026-03-01,2026-03-02\n")
    (wear,) = register.wears_of("SRL-1")
    assert wear.covers(datetime.fromisoformat("2026-03-02T23:59"))
    assert not wear.covers(datetime.fromisoformat("2026-03-03T00:00"))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"patients": None}, ["patients.csv", "missing"]),
        ({"patients": ""}, ["patients.csv", "empty"]),
        ({"patients": b"patient_code\nP\xff1\n"}, ["patients.csv", "UTF-8"]),
        ({"patients": "patient_cod\nP-1\n"}, ["row 1", "patient_cod", "did you mean patient_code?"]),
        ({"patients": "patient_code,birth_date\nP-1,1951\n"}, ["row 1", "birth_date", "unknown column"]),
        ({"patients": PATIENTS + "P-1,\n"}, ["row 4", "patient_code", "row 2"]),
        ({"patients": PATIENTS + "Jane Doe,\n"}, ["row 4", "without blanks"]),
        ({"patients": PATIENTS + "P-3,Europe/Berlim\n"}, ["row 4", "column zone", "IANA"]),
        ({"wears": WEARS + "SRL-2,P-9,2026-03-01,,\n"}, ["wears.csv row 3", "patient_code", "did you mean"]),
        ({"wears": WEARS + "SRL-2,P-1,1.3.2026,,\n"}, ["row 3", "from_local", "'1.3.2026'", "2026-03-01"]),
        ({"wears": WEARS + "SRL-2,P-1,,,\n"}, ["row 3", "from_local"]),
        ({"wears": WEARS + "SRL-2,P-1,2026-03-01T08:00+01:00,,\n"}, ["row 3", "without a zone"]),
        ({"wears": WEARS + "SRL-2,P-1,2026-03-02,2026-03-01,\n"}, ["row 3", "to_local", "after"]),
        ({"wears": WEARS + "SRL-1,P-2,2026-03-10,2026-03-20,\n"}, ["row 3", "from_local", "row 2"]),
        ({"wears": WEARS.replace("2026-03-15 08:00", "") + "SRL-1,P-2,2026-05-10,,\n"}, ["row 2", "to_local", "row 3"]),
        ({"wears": WEARS.replace("03-15", "03-01 07:59\nSRL-1,P-2,2026-03-01")}, ["wears.csv row"]),
        ({"wears": WEARS + "SRL-2,P-1,2026-03-01,,,more\n"}, ["row 3", "6 values", "expected 5"]),
        ({"therapies": THERAPIES + "T2,P-1,ablatoin,,2026-03-08\n"}, ["row 3", "did you mean ablation?"]),
        ({"therapies": THERAPIES + "T1,P-1,ablation,,2026-03-08\n"}, ["row 3", "therapy_id", "row 2"]),
        ({"therapies": THERAPIES + "T2,P-1,ablation,,\n"}, ["row 3", "at_local"]),
    ],
)
def test_errors_lead_to_the_cell(loaded, changes, words):
    """Every error names file, row, column, what was found and what is expected."""
    with pytest.raises(RegisterError) as error:
        loaded(**changes)
    for word in words:
        assert word in str(error.value)


def test_codes_of_any_make_give_a_path_safe_recording(loaded):
    """A serial with signs that no path should hold gives a safe recording code."""
    register = loaded(wears="device_serial,patient_code,from_local\nA/1:7@x,P-1,2026-03-01\n")
    assert register.wears_of("A/1:7@x")[0].recording_id == "A-1-7-x_20260301"


@given(text=st.text(max_size=200))
def test_no_text_ends_in_another_error(tmp_path_factory, text):
    """Any text as a register file loads or gives a RegisterError."""
    folder = tmp_path_factory.mktemp("programme")
    (folder / "register").mkdir()
    (folder / "register" / "patients.csv").write_text(PATIENTS)
    (folder / "register" / "wears.csv").write_bytes(
        ("device_serial,patient_code,from_local\n" + text).encode("utf-8", "replace")
    )
    with contextlib.suppress(RegisterError):
        load(folder, "UTC")
