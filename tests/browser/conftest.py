"""A browser and an invented site to open in it; without a browser these tests are skipped."""

from __future__ import annotations

import os
import runpy
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from dashboards.addresses import patient_page
from dashboards.site import build_site

HOSTILE = "<script>alert(1)</script>\"'><img src=x onerror=alert(2)>"
LONG_CODE = "K" * 150 + "\N{HEBREW LETTER ALEF}\N{RIGHT-TO-LEFT OVERRIDE}" + "9" * 48
NAMES = ("chromium", "chromium-browser", "google-chrome")
DASHBOARD_TESTS = Path(__file__).parents[1] / "dashboards"


@pytest.fixture(scope="session")
def pages(site: Path) -> list[str]:
    """One page of each kind, and those of patients with hostile and with endless codes."""
    recording = "CN0000-20260302.html"
    patients = [patient_page(code) for code in ("SKERRY-0001", "SKERRY-0002", LONG_CODE)]
    whole = ["index.html", "cohort.html", "trail.html", "methods.html", "dictionary.html"]
    return [*whole, *patients, f"recordings/{recording}", f"review/{recording}"]


@pytest.fixture(scope="module")  # no longer: while it is open, playwright keeps an event loop running in this thread
def browser() -> Iterator[Any]:
    sync_api = pytest.importorskip("playwright.sync_api", reason="playwright is not installed (extra: test)")
    program = os.environ.get("BURDENLINE_BROWSER") or next(filter(None, map(shutil.which, NAMES)), None)
    if program is None:
        pytest.skip(f"none of {', '.join(NAMES)} is installed, and BURDENLINE_BROWSER is not set")
    with sync_api.sync_playwright() as play:
        started = play.chromium.launch(executable_path=program, args=["--no-sandbox", "--disable-gpu"])
        yield started
        started.close()


@pytest.fixture(scope="session")
def site(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The site of an invented programme, one patient of which has hostile register text."""
    invented = runpy.run_path(str(DASHBOARD_TESTS / "conftest.py"))
    rows = invented["invented_rows"]()
    rows["therapies"][1]["therapy_detail"] = HOSTILE
    rows["attention"][1]["attention_reason"] = HOSTILE
    rows["recordings"][2]["lead"] = HOSTILE
    for row in [row for table in rows.values() for row in table if row.get("patient_code") == "SKERRY-0003"]:
        row["patient_code"] = LONG_CODE
    folder = tmp_path_factory.mktemp("published") / "site"
    build_site(invented["InventedPublication"](rows), folder, programme_name="Skerry Coast Clinics", version="0.1.0")
    return folder


class Visitor:
    """Opens pages and remembers everything a browser complains about or asks for."""

    def __init__(self, context: Any, site: Path) -> None:
        self.context = context
        self.site = site
        self.complaints: list[str] = []
        self.asked_for: list[str] = []

    def open(self, address: str) -> Any:
        page = self.context.new_page()
        page.on("console", lambda message: self.complaints.append(f"{address}: {message.type}: {message.text}"))
        page.on("pageerror", lambda error: self.complaints.append(f"{address}: {error}"))
        page.on("dialog", lambda dialog: (self.complaints.append(f"{address}: dialog"), dialog.dismiss()))
        page.on("request", lambda request: self.asked_for.append(request.url))
        page.goto((self.site / address).as_uri())
        return page

    def scroll_through(self, page: Any) -> None:
        """Let every chart come into view and be drawn."""
        for top in range(0, page.evaluate("document.documentElement.scrollHeight"), 700):
            page.evaluate(f"window.scrollTo(0, {top})")
            page.wait_for_timeout(30)
        page.wait_for_function("[...document.querySelectorAll('.plot')].every(plot => plot.querySelector('svg'))")


@pytest.fixture
def visit(browser: Any, site: Path, request: pytest.FixtureRequest) -> Iterator[Visitor]:
    """A fresh visitor; parametrize indirectly with options of the browser context."""
    context = browser.new_context(**getattr(request, "param", {"viewport": {"width": 1280, "height": 900}}))
    yield Visitor(context, site)
    context.close()
