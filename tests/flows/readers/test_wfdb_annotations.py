"""The annotation reader agrees with the general-purpose WFDB library, symbol by symbol."""

import numpy as np
import pytest
import wfdb
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from flows.readers.wfdb_annotations import AnnotationError, read_annotations

SYMBOLS = [*'NLRaVFJASEj/Q~|sT*D"=pB^t+u?![]en@xf()r']


def written(folder, **options):
    wfdb.wrann("made", "atr", write_dir=str(folder), **options)
    return folder / "made.atr"


def test_every_symbol_comes_back(tmp_path):
    """Each symbol that the library can write is read as the same symbol at the same sample."""
    sample = np.arange(1, len(SYMBOLS) + 1) * 700
    found = read_annotations(written(tmp_path, sample=sample, symbol=SYMBOLS))
    assert found.sample.tolist() == sample.tolist()
    assert found.symbol.tolist() == SYMBOLS


def test_long_steps_texts_and_subtypes(tmp_path):
    """Steps beyond ten bits, rhythm texts and negative subtypes come back."""
    path = written(
        tmp_path,
        sample=np.array([5, 5, 200_000, 90_000_000]),
        symbol=["+", "N", "~", "V"],
        subtype=np.array([0, 0, -1, 0]),
        aux_note=["(AFIB", "", "", ""],
    )
    found = read_annotations(path)
    assert found.sample.tolist() == [5, 5, 200_000, 90_000_000]
    assert found.aux.tolist() == ["(AFIB", "", "", ""]
    # the two bits that mark a shutdown are set
    assert found.subtype[2] & 0x30 == 0x30


def test_real_labels_agree_with_the_library(reference_ecg):
    """All labels of real records are those that the general-purpose library reads."""
    for record in ("101", "201", "207"):
        theirs = wfdb.rdann(str(reference_ecg / "mitdb" / record), "atr")
        ours = read_annotations(reference_ecg / "mitdb" / f"{record}.atr")
        assert ours.sample.tolist() == theirs.sample.tolist()
        assert ours.symbol.tolist() == theirs.symbol
        assert ours.aux.tolist() == [text.rstrip("\0") for text in theirs.aux_note]
        assert ours.subtype.tolist() == theirs.subtype.tolist()


def test_empty_list(tmp_path):
    """A file with nothing but the end mark holds no annotations."""
    (tmp_path / "none.atr").write_bytes(b"\0\0")
    assert len(read_annotations(tmp_path / "none.atr").sample) == 0


@pytest.mark.parametrize(
    "data", [b"", b"\x05\x04", b"\x00\xec\x01", b"<html><body>x</body></html>", bytes([0, 0x44, 0, 0])]
)
def test_what_is_no_annotation_file(tmp_path, data):
    """Cut, foreign and undefined bytes are refused by name."""
    (tmp_path / "bad.atr").write_bytes(data)
    with pytest.raises(AnnotationError, match=r"bad\.atr"):
        read_annotations(tmp_path / "bad.atr")


@given(st.lists(st.integers(0, 0xFFFF), max_size=60).map(lambda words: np.array(words, "<u2").tobytes()))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_bytes_give_annotations_or_a_refusal(tmp_path, data):
    """Whatever the bytes, the reader returns equally long arrays of known symbols or refuses."""
    (tmp_path / "any.atr").write_bytes(data)
    try:
        found = read_annotations(tmp_path / "any.atr")
    except AnnotationError:
        return
    assert len({len(column) for column in found}) == 1
    assert set(found.symbol.tolist()) <= set(SYMBOLS)
