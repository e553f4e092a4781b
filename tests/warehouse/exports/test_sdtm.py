"""The EG domain holds every wear day and test, and its transport file reads back equal in an independent reader."""

from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from warehouse.exports.sdtm import TESTS, VARIABLES, eg_domain, export_sdtm_csv, export_sdtm_xpt
from warehouse.exports.transport import TransportError, ibm_float, transport_file
from warehouse.publish import publish
from warehouse.published import Published


@pytest.fixture
def published(lake: Any) -> Published:
    """Two patients; one day of the first is pure noise."""
    lake.patient("P1", "Europe/Berlin")
    lake.patient("P2")
    lake.recording("R1", "P1", "2026-05-01T22:00", "2026-05-02T22:00")
    nothing = dict.fromkeys(("n_beats", "s_beats", "v_beats", "rr_count"), 0) | {"rr_sum_s": 0.0, "analysable_s": 0.0}
    lake.recording("R2", "P1", "2026-05-02T22:00", "2026-05-03T22:00", **nothing)
    lake.recording("R3", "P2", "2026-05-01T00:00", "2026-05-02T00:00", v_beats=1)
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={})
    return Published(lake.folder / "published")


def test_every_day_and_test_is_a_row(published: Published) -> None:
    """Sequence numbers count per subject; what could not be computed is NOT DONE with its reason."""
    rows = eg_domain(published, "COAST-1")
    assert rows.columns == list(VARIABLES)
    assert rows.height == 3 * len(TESTS)
    first = rows.filter(pl.col("USUBJID") == "COAST-1-P1")
    assert first["EGSEQ"].to_list() == list(range(1, 2 * len(TESTS) + 1))
    burdens = first.filter(pl.col("EGTESTCD") == "VBURDEN")
    assert burdens["EGSTRESC"].to_list() == ["9.0000", ""]
    assert burdens["EGSTAT"].to_list() == ["", "NOT DONE"]
    assert burdens["EGDTC"].to_list() == ["2026-05-02T00:00:00+02:00", "2026-05-03T00:00:00+02:00"]


def test_names_labels_and_codes_keep_their_limits() -> None:
    """Variable names and test codes have at most 8 characters, labels and test names at most 40."""
    # Source: SDTM implementation guide 3.4: variable names and test codes 8, labels and test names 40 characters
    assert all(len(name) <= 8 and len(label) <= 40 for name, label in VARIABLES.items())
    assert all(len(test.code) <= 8 and len(test.name) <= 40 and not test.code[0].isdigit() for test in TESTS)


def test_the_transport_file_reads_back_equal(published: Published, tmp_path: Path) -> None:
    """An independent reader finds the same rows, labels and missing numbers."""
    pyreadstat = pytest.importorskip("pyreadstat", reason="pyreadstat reads the transport file back")
    file, _ = export_sdtm_xpt(published, tmp_path, "COAST-1")
    back, meta = pyreadstat.read_xport(str(file))
    rows = eg_domain(published, "COAST-1")
    assert meta.column_names == rows.columns
    assert meta.column_labels == list(VARIABLES.values())
    assert meta.table_name == "EG"
    for name in rows.columns:
        found = [None if value != value else value for value in back[name]]
        assert found == rows[name].to_list(), name


def test_csv_holds_the_same_rows(published: Published, tmp_path: Path) -> None:
    """The CSV file reads back as the domain."""
    file, readme = export_sdtm_csv(published, tmp_path, "COAST-1")
    rows = eg_domain(published, "COAST-1")
    back = pl.read_csv(file, schema=rows.schema)
    assert back.with_columns(pl.col(pl.String).fill_null("")).equals(rows)
    assert "fingerprint: f1" in readme.read_text()


def test_the_same_rows_make_the_same_bytes(published: Published, tmp_path: Path) -> None:
    """No clock goes into a transport file."""
    files = [export_sdtm_xpt(published, tmp_path / name, "COAST-1")[0] for name in "ab"]
    assert files[0].read_bytes() == files[1].read_bytes()
    assert len(files[0].read_bytes()) % 80 == 0


def test_ibm_floats_of_known_values() -> None:
    """Sign, base-16 exponent and fraction are laid out as the format asks."""
    # Source: IBM hexadecimal floating point, worked example -118.625 = C276A000 (single), zeros added for double
    assert bytes(ibm_float(np.array([-118.625]))[0]).hex() == "c276a00000000000"
    # Source: definition: 1 = 16**1 * 1/16, missing is '.' and zeros
    assert bytes(ibm_float(np.array([1.0]))[0]).hex() == "4110000000000000"
    assert bytes(ibm_float(np.array([0.0]))[0]).hex() == "0000000000000000"
    assert bytes(ibm_float(np.array([np.nan]))[0]).hex() == "2e00000000000000"


@given(st.floats(min_value=-1e60, max_value=1e60).filter(lambda value: value == 0 or abs(value) > 1e-60))
def test_ibm_floats_hold_every_double(value: float) -> None:
    """Fraction times sixteen to the exponent is the value itself, without rounding."""
    word = int.from_bytes(bytes(ibm_float(np.array([value]))[0]), "big")
    sign, power, fraction = word >> 63, (word >> 56 & 0x7F) - 64, word & (2**56 - 1)
    assert (-1) ** sign * (fraction / 2**56) * 16.0**power == value
    assert value == 0 or fraction >= 2**52  # normalised: the first hexadecimal digit is not 0


@pytest.mark.parametrize(
    ("frame", "labels", "words"),
    [
        (pl.DataFrame({"TOOLONGNAME": ["a"]}), {"TOOLONGNAME": "x"}, "name 'TOOLONGNAME'"),
        (pl.DataFrame({"A": ["a"]}), {"A": "x" * 41}, "label 'xxx"),
        (pl.DataFrame({"A": ["Größe"]}), {"A": "x"}, "A: 'Größe'; expected at most 200 ASCII"),
        (pl.DataFrame({"A": ["a" * 201]}), {"A": "x"}, "expected at most 200"),
        (pl.DataFrame({"A": [1e80]}), {"A": "x"}, "not below 16"),
    ],
)
def test_what_the_format_cannot_hold_is_refused(frame: pl.DataFrame, labels: dict[str, str], words: str) -> None:
    """Names, labels, long or non-ASCII text and too large numbers are named with the limit."""
    with pytest.raises(TransportError, match=words):
        transport_file("EG", "x", frame, labels)
