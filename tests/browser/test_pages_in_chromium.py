"""Pages in a real browser: quiet, still, usable with keys, on a phone and on paper."""

from __future__ import annotations

import re
from importlib import resources

import pytest

PATIENT, RECORDING = "patients/SKERRY-0001.html", "recordings/CN0000-20260302.html"
WIDE, PHONE = {"width": 1280, "height": 900}, {"width": 390, "height": 844}
MM = 96 / 25.4  # CSS pixels


@pytest.mark.parametrize("visit", [{"viewport": WIDE}, {"viewport": PHONE}], indirect=True, ids=["wide", "phone"])
def test_pages_load_quietly_and_stay_inside(visit, pages):
    """No page logs a message, raises an error, asks for anything outside, or is wider than the screen."""
    for address in pages:
        page = visit.open(address)
        visit.scroll_through(page)
        assert page.evaluate("document.documentElement.scrollWidth") <= page.viewport_size["width"], address
    assert visit.complaints == []
    assert all(url.startswith(visit.site.as_uri()) or url.startswith("blob:") for url in visit.asked_for)


def test_hostile_text_does_nothing(visit):
    """Register text with markup opens no dialog and adds no element."""
    for address in ("index.html", "patients/SKERRY-0002.html", "recordings/CN0010-20260302.html"):
        page = visit.open(address)
        visit.scroll_through(page)
        assert page.locator("img").count() == 0
        assert "<script>alert(1)</script>" in page.inner_text("main")
    assert visit.complaints == []


def test_nothing_shifts_while_a_page_loads(visit, pages):
    """Charts are drawn into room that is kept for them."""
    visit.context.add_init_script(
        "window.shift = 0; new PerformanceObserver(list => list.getEntries().forEach("
        "entry => { if (!entry.hadRecentInput) window.shift += entry.value }))"
        ".observe({type: 'layout-shift', buffered: true})"
    )
    for address in pages:
        page = visit.open(address)
        visit.scroll_through(page)
        # Source: web.dev, Cumulative Layout Shift: up to 0.1 is good
        assert page.evaluate("window.shift") < 0.1, address


def test_the_keyboard_reaches_content_and_caliper(visit):
    """Tab leads to the skip link; in a strip, arrows move the caliper and space sets the foot it measures from."""
    page = visit.open(RECORDING)
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    page.locator(".window").first.focus()
    page.keyboard.press(" ")
    for _ in range(10):
        page.keyboard.press("Shift+ArrowRight")
    # Source: paper scale, 25 mm/s: ten steps of 5 mm are 2 s, that is 30 a minute
    assert "2.00 s" in page.locator(".caliper").first.inner_text()
    assert "from the foot 2000 ms" in page.locator(".caliper").first.inner_text()
    assert "30 /min" in page.locator(".caliper").first.inner_text()


def test_the_scheme_is_kept_and_charts_follow(visit):
    """Dark colours chosen on one visit hold on the next, for page and chart."""
    page = visit.open(PATIENT)
    visit.scroll_through(page)
    light = page.evaluate("document.querySelector('#timeline .bars path, #timeline .point path').style.fill")
    page.get_by_role("button", name="Use dark colours").click()
    page.reload()
    visit.scroll_through(page)
    assert page.evaluate("document.documentElement.dataset.scheme") == "dark"
    assert page.evaluate("document.querySelector('#timeline .bars path, #timeline .point path').style.fill") != light


def test_finding_a_patient_hides_the_others(visit):
    """Typing part of a code leaves the rows that hold it."""
    page = visit.open("index.html")
    page.get_by_label("Find a patient").fill("0004")
    assert page.locator("#patient-rows tr:visible").count() == 1


def test_a_patient_is_two_pages_of_a4(visit, tmp_path):
    """A patient's summary with strips and cautions is two A4 pages."""
    page = visit.open(PATIENT)
    visit.scroll_through(page)
    printed = page.pdf(prefer_css_page_size=True, print_background=True)
    assert len(re.findall(rb"/Type\s*/Page\b", printed)) == 2
    boxes = [[float(side) for side in box.split()] for box in re.findall(rb"/MediaBox\s*\[([^\]]+)\]", printed)]
    # Source: ISO 216, A4 is 210 mm by 297 mm; 72 points an inch
    assert all(box[2:] == pytest.approx([210 * 72 / 25.4, 297 * 72 / 25.4], abs=1) for box in boxes)


@pytest.mark.parametrize("medium", ["screen", "print"])
def test_strips_have_true_scale(visit, medium):
    """Ten seconds are 250 mm and the calibration mark is 10 mm by 5 mm, on screen and on paper."""
    page = visit.open(PATIENT)
    page.emulate_media(media=medium)
    # common practice, no source: 25 mm/s, 10 mm/mV
    assert page.locator(".strip:not(.screen) .ecg").first.bounding_box()["width"] == pytest.approx(250 * MM, rel=0.001)
    mark = page.evaluate(
        '(() => { const m = document.querySelector(".strip:not(.screen) .calibration"); '
        "return m.getBoundingClientRect().width / m.viewBox.baseVal.width })()"
    )
    assert (mark * 100, mark * 50) == pytest.approx((10 * MM, 5 * MM), rel=0.001)


@pytest.mark.parametrize(
    "visit",
    [{"viewport": WIDE, "color_scheme": scheme} for scheme in ("light", "dark")] + [{"viewport": PHONE}],
    indirect=True,
    ids=["light", "dark", "phone"],
)
def test_no_serious_barrier(visit, pages):
    """The accessibility rules of axe-core find nothing serious on any page."""
    axe = pytest.importorskip("axe_playwright_python", reason="axe-playwright-python is not installed (extra: test)")
    script = resources.files(axe).joinpath("axe.min.js").read_text("utf-8")
    for address in pages:
        page = visit.open(address)
        visit.scroll_through(page)
        page.evaluate("for (const each of document.querySelectorAll('details')) each.open = true")
        page.evaluate(script)
        found = page.evaluate("axe.run()")["violations"]
        # Source: axe-core rules for WCAG 2.1 A and AA, with their impact
        serious = {
            rule["id"]: rule["nodes"][0]["html"][:200] for rule in found if rule["impact"] in ("serious", "critical")
        }
        assert serious == {}, address
