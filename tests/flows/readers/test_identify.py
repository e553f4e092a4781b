"""Formats are told by their bytes, and what is no recording is named."""

import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (b"", "empty_file"),
        (b"\x00\x01\x02" * 500, "unknown_format"),
        (b"Dear nurse,\nplease find the recording attached.\n", "unknown_format"),
        (b"version https://git-lfs.github.com/spec/v1\noid sha256:0\n", "pointer_not_data"),
        (b"  <!DOCTYPE html><html><body>Sign in</body></html>", "web_page_not_data"),
        (b"%PDF-1.7 ...", "format_not_supported"),
        (b"0       " + b"text that only begins like a header" * 20, "unknown_format"),
    ],
)
@pytest.mark.parametrize("name", ["a.edf", "a.hea", "a"])
def test_what_is_no_recording_is_named_whatever_its_name(tmp_path, content, code, name):
    """The refusal's code follows from the bytes, not from the file name."""
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(Refused) as refusal:
        open_delivery([path])
    assert refusal.value.code == code


def test_an_edf_under_any_name_is_opened(tmp_path, make_edf):
    """A recording opens under a wrong suffix."""
    path = tmp_path / "export.jpg"
    path.write_bytes(make_edf())
    assert open_delivery([path]).format == "EDF"
