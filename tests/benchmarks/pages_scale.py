"""How the site grows with the programme: CPU per patient, bytes per page, cost of unchanged patients, first paint.

python -m tests.benchmarks.pages_scale --patients 1000
"""

from __future__ import annotations

import argparse
import os
import runpy
import shutil
import tempfile
import time
from pathlib import Path
from typing import Any

from dashboards.site import build_site

INVENTED = runpy.run_path(str(Path(__file__).parents[1] / "dashboards" / "conftest.py"))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--patients", type=int, default=1000)
    asked = parser.parse_args()
    publication = INVENTED["InventedPublication"](INVENTED["invented_rows"](asked.patients))
    with tempfile.TemporaryDirectory() as folder:
        first, second = Path(folder) / "first", Path(folder) / "second"
        afresh_s = cpu_s(lambda: build(publication, first))
        unchanged_s = cpu_s(lambda: build(publication, second, previous=first))
        print(f"{asked.patients} patients with two recordings each")
        print(f"rendered afresh: {1000 * afresh_s / asked.patients:.0f} ms of CPU a patient with all its pages")
        print(f"nothing changed: {1000 * unchanged_s / asked.patients:.1f} ms of CPU a patient")
        for kind in ("patients", "recordings", "review"):
            sizes = [page.stat().st_size for page in (first / kind).iterdir()]
            print(f"largest page of {kind}: {max(sizes) / 1e6:.2f} MB")
        print(f"overview: {(first / 'index.html').stat().st_size / 1e6:.2f} MB")
        print(first_paint(first / "index.html"))


def build(publication: Any, site: Path, **more: Any) -> None:
    build_site(publication, site, programme_name="Skerry Coast Clinics", version="benchmark", **more)


def cpu_s(work: Any) -> float:
    begin = time.process_time()
    work()
    return time.process_time() - begin


def first_paint(page: Path) -> str:
    """Return the median first contentful paint of five fresh visits, or why it was not measured."""
    program = os.environ.get("BURDENLINE_BROWSER") or shutil.which("chromium")
    if program is None:
        return "first paint: not measured, no chromium here"
    from playwright.sync_api import sync_playwright

    with sync_playwright() as play:
        browser = play.chromium.launch(executable_path=program, args=["--no-sandbox", "--disable-gpu"])
        paints = sorted(_visit(browser, page) for _ in range(5))
        browser.close()
    return f"first contentful paint of the overview: {paints[2] / 1000:.2f} s (median of five)"


def _visit(browser: Any, page: Path) -> float:
    tab = browser.new_context(viewport={"width": 1280, "height": 900}).new_page()
    tab.goto(page.as_uri())
    tab.wait_for_function("performance.getEntriesByName('first-contentful-paint').length")
    return tab.evaluate("performance.getEntriesByName('first-contentful-paint')[0].startTime")


if __name__ == "__main__":
    main()
