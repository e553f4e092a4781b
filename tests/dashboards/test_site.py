"""The site as a whole: complete, closed to the outside, the same for the same tables."""

from __future__ import annotations

import csv
import io
import re
from datetime import date, datetime
from html.parser import HTMLParser
from pathlib import Path

import pytest

from dashboards.site import build_site
from warehouse.cautions import CAUTIONS

HOSTILE = "<script>alert(1)</script>\"'><img src=x onerror=alert(2)> {{ 7 * 7 }} =cmd|x"
RIGHT_TO_LEFT = "\N{HEBREW LETTER ALEF}\N{HEBREW LETTER BET}\N{RIGHT-TO-LEFT OVERRIDE}3-2026"


class PageReader(HTMLParser):
    """Collects what a browser would act on: elements with their attributes, and the text."""

    def __init__(self, html: str) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.feed(html)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def build(publication, site: Path, **more) -> Path:
    build_site(publication, site, programme_name="Skerry Coast Clinics", version="0.1.0", **more)
    return site


def pages_of(site: Path) -> dict[str, PageReader]:
    return {str(path.relative_to(site)): PageReader(path.read_text("utf-8")) for path in sorted(site.rglob("*.html"))}


def bytes_of(site: Path) -> dict[str, bytes]:
    return {str(path.relative_to(site)): path.read_bytes() for path in sorted(site.rglob("*")) if path.is_file()}


@pytest.fixture
def site(rows, publish, tmp_path) -> Path:
    return build(publish(rows), tmp_path / "site")


def test_every_patient_and_recording_has_a_page(site, rows):
    """The site holds one page for each patient and recording, and the pages about the whole programme."""
    found = set(pages_of(site))
    assert {"index.html", "cohort.html", "trail.html", "methods.html", "dictionary.html"} <= found
    assert {f"patients/{row['patient_code']}.html" for row in rows["patients"]} <= found
    assert {f"recordings/{row['recording_id']}.html" for row in rows["recordings"]} <= found


def test_every_link_leads_to_a_file_of_the_site(site):
    """Links, scripts, styles and downloads all point at files inside the site's folder."""
    for address, page in pages_of(site).items():
        for tag, attributes in page.elements:
            target = attributes.get("href") or attributes.get("src")
            if target and not target.startswith("#"):
                assert not re.match(r"[a-z]+:|//", target), f"{address}: <{tag}> leads outside: {target}"
                assert (site / address).parent.joinpath(target).resolve().is_file(), f"{address}: {target}"


def test_every_page_forbids_foreign_content(site):
    """Each page carries a content security policy without foreign sources, and runs no script of its own text."""
    for address, page in pages_of(site).items():
        policies = [a["content"] for tag, a in page.elements if a.get("http-equiv") == "Content-Security-Policy"]
        assert len(policies) == 1 and "default-src 'none'" in policies[0] and "http" not in policies[0], address
        inline = [a for tag, a in page.elements if tag == "script" and not a.get("src")]
        assert all(a.get("type") == "application/json" for a in inline), address
        assert not [a for _, a in page.elements if any(name.startswith("on") for name in a)], address


def test_no_page_has_a_style_of_its_own(site):
    """Styles come from the one style sheet: pages allow no others but those that the chart library brings, text by text."""
    for page in pages_of(site).values():
        (policy,) = [a["content"] for tag, a in page.elements if a.get("http-equiv") == "Content-Security-Policy"]
        has_charts = any(a.get("src", "").endswith("plotly.min.js") for _, a in page.elements)
        assert "'unsafe-inline'" not in policy and ("'unsafe-hashes'" in policy) == has_charts
        assert not [tag for tag, a in page.elements if tag == "style" or "style" in a]


def test_a_patient_with_thirty_recordings_has_a_page(rows, publish, tmp_path):
    """However many patches a patient wore, each has its place on one page of bounded size."""
    code = "SKERRY-0001"
    first = next(row for row in rows["recordings"] if row["patient_code"] == code)
    for table in ("recordings", "families", "hours", "review_sheet", "strips"):
        own = [row for row in rows[table] if row["recording_id"] == first["recording_id"]]
        rows[table] += [row | {"recording_id": f"MANY-{number}"} for number in range(28) for row in own]
    page = pages_of(build(publish(rows), tmp_path / "site"))["patients/SKERRY-0001.html"]
    assert page.text.count("MANY-") >= 28
    assert (tmp_path / "site" / "patients" / "SKERRY-0001.html").stat().st_size < 1_500_000


def test_runs_that_do_not_count_are_told_apart(rows, publish, tmp_path):
    """Episodes that over-reading left out are neither counted nor listed, but their number is told."""
    recording = "CN0000-20260302"
    for row in rows["episodes"]:
        if row["recording_id"] == recording and row["episode_kind"] == "run":
            row["is_counted"] = False
    text = pages_of(build(publish(rows), tmp_path / "site"))[f"recordings/{recording}.html"].text
    assert "1 episode found automatically does not count after over-reading" in " ".join(text.split())
    assert "ventricular run" not in text.split("Episodes")[-1].split("What was not analysed")[0]


def test_families_left_open_are_listed_with_what_they_leave_open(rows, publish, tmp_path):
    """A family marked as mixed stands on the trail, and its recording tells the bounds of the burden."""
    recording = "CN0000-20260302"
    rows["undecided_families"].append(
        {"recording_id": recording, "patient_code": "SKERRY-0001", "family": 2, "reader_codes": "R-07",
         "undecided_v_beats": 420, "undecided_other_beats": 3}
    )  # fmt: skip
    rows["reviewed"].append(
        {"recording_id": recording, "patient_code": "SKERRY-0001", "reader_codes": "R-07", "decided_beats": 0,
         "unmet_decisions": 0, "rejected_episodes": 0, "automatic_v_beats": 10, "automatic_all_beats": 100,
         "automatic_v_burden_pct": 10.0, "v_beats": 10, "all_beats": 100, "v_burden_pct": 10.0, "automatic_couplets": 5,
         "couplets": 4, "automatic_runs": 2, "runs": 1, "undecided_families": 1, "v_burden_least_pct": 8.25,
         "v_burden_most_pct": 11.5}
    )  # fmt: skip
    pages = pages_of(build(publish(rows), tmp_path / "site"))
    assert "1 shape family left open" in pages["trail.html"].text
    told = " ".join(pages[f"recordings/{recording}.html"].text.split())
    assert "couplets 5, now 4; runs 2, now 1" in told
    assert "the burden lies between 8.25 and 11.50 %" in told


def test_every_page_and_download_carries_the_cautions(site):
    """Pages and CSV files say what the numbers may not be used for."""
    for address, page in pages_of(site).items():
        assert all(caution in page.text for caution in CAUTIONS), address
    for path in site.rglob("*.csv"):
        assert all(f"# {caution}" in path.read_text("utf-8") for caution in CAUTIONS), path


def test_a_download_holds_the_rows_of_its_table(site, rows):
    """The wear days of a patient come back from their CSV file as they were published."""
    text = (site / "data/patients/SKERRY-0001/wear_days.csv").read_text("utf-8")
    read = list(csv.DictReader(io.StringIO("".join(line for line in text.splitlines(True) if line[0] != "#"))))
    published = [row for row in rows["wear_days"] if row["patient_code"] == "SKERRY-0001"]
    assert [row["local_day"] for row in read] == [str(row["local_day"]) for row in published]
    assert [float(row["v_burden_pct"]) for row in read] == [row["v_burden_pct"] for row in published]


def test_a_download_starts_no_formula(rows, publish, tmp_path):
    """Register text that a spreadsheet would run as a formula is marked as text in the download."""
    rows["therapies"][0]["therapy_detail"] = "=1+1"
    site = build(publish(rows), tmp_path / "site")
    # Source: OWASP, CSV injection: cells that begin with = + - @ are formulas to spreadsheet programs
    assert ",'=1+1," in (site / "data/patients/SKERRY-0001/therapies.csv").read_text("utf-8")


def test_the_same_tables_make_the_same_bytes(rows, publish, tmp_path):
    """Two sites of one publication do not differ in a byte."""
    assert bytes_of(build(publish(rows), tmp_path / "a")) == bytes_of(build(publish(rows), tmp_path / "b"))


def test_only_changed_pages_are_rendered_again(rows, publish, tmp_path):
    """A new wear day of one patient renders that patient and the overview; other pages are the standing files."""
    old = build(publish(rows), tmp_path / "old")
    changed = dict(rows["wear_days"][-1])
    changed["v_beats"] += 1
    rows["wear_days"][-1] = changed
    new = build(publish(rows), tmp_path / "new", previous=old)
    rendered = {address for address in pages_of(new) if not (new / address).samefile(old / address)}
    assert rendered == {"index.html", f"patients/{changed['patient_code']}.html"}
    assert bytes_of(new) == bytes_of(build(publish(rows), tmp_path / "afresh"))


def test_a_changed_strip_renders_its_recording_again(rows, publish, tmp_path):
    """New strips of one recording render its page, its sheet and its patient, nothing else."""
    old = build(publish(rows), tmp_path / "old")
    rows["strips"][0]["strip_reason"] = "chosen by another rule"
    new = build(publish(rows), tmp_path / "new", previous=old)
    rendered = {address for address in pages_of(new) if not (new / address).samefile(old / address)}
    assert rendered == {
        "patients/SKERRY-0001.html",
        "recordings/CN0000-20260302.html",
        "review/CN0000-20260302.html",
    }


def test_another_programme_name_renders_every_page_again(rows, publish, tmp_path):
    """Pages made for another programme name are not taken over."""
    old = build(publish(rows), tmp_path / "old")
    build_site(publish(rows), tmp_path / "new", programme_name="Other", version="0.1.0", previous=old)
    assert all("Other" in page.text for page in pages_of(tmp_path / "new").values())


def test_hostile_text_is_shown_as_text(rows, publish, tmp_path):
    """Markup in register and header fields becomes no element and no attribute, only text."""
    rows["therapies"][0]["therapy_detail"] = HOSTILE
    rows["recordings"][0]["lead"] = HOSTILE
    rows["attention"][0]["attention_reason"] = HOSTILE
    rows["deliveries"][1] |= {"file_name": HOSTILE, "reason": HOSTILE}
    rows["changes"][0]["reason"] = HOSTILE
    rows["strips"][0]["strip_reason"] = HOSTILE
    rows["marks"][0]["mark_text"] = HOSTILE
    rows["data_dictionary"][0]["meaning"] = HOSTILE
    site = tmp_path / "site"
    build_site(publish(rows), site, programme_name=HOSTILE, version="0.1.0")
    for address, page in pages_of(site).items():
        assert not [tag for tag, _ in page.elements if tag == "img"], address
        assert not [a for tag, a in page.elements if tag == "script" and not a.get("src") and not a.get("type")], (
            address
        )
        assert HOSTILE in page.text, address


@pytest.mark.parametrize("code", ["K" * 200, RIGHT_TO_LEFT, "../../etc/passwd", "a b", "CON/1", HOSTILE])
def test_any_patient_code_gets_a_page(rows, publish, tmp_path, code):
    """A code of any length or script has its page inside the site, and the code is shown as it is."""
    for row in [row for table in rows.values() for row in table if row.get("patient_code") == "SKERRY-0001"]:
        row["patient_code"] = code
    pages = pages_of(build(publish(rows), tmp_path / "site"))
    own = [
        page for address, page in pages.items() if address.startswith("patients/") and f"Patient {code} " in page.text
    ]
    assert len(own) == 1
    assert code in pages["index.html"].text


def test_a_patient_without_anything_has_a_page(rows, publish, tmp_path):
    """A patient of the register without wear or therapy is listed and has a page that says so."""
    rows["patients"].append({"patient_code": "SKERRY-0099", "zone": "UTC"})
    pages = pages_of(build(publish(rows), tmp_path / "site"))
    assert "no wear yet" in pages["index.html"].text
    assert "No wear yet" in pages["patients/SKERRY-0099.html"].text


def test_a_patient_without_therapy_has_the_days_and_no_change(rows, publish, tmp_path):
    """Where the register holds no therapy event the page tells the range of the burden, draws the days and judges nothing."""
    code = "SKERRY-0002"
    for table in ("therapies", "periods", "changes"):
        rows[table] = [row for row in rows[table] if row["patient_code"] != code]
    page = pages_of(build(publish(rows), tmp_path / "site"))[f"patients/{code}.html"]
    (burdens,) = [[row["v_burden_pct"] for row in rows["wear_days"] if row["patient_code"] == code]]
    told = " ".join(page.text.split())
    assert f"Ventricular burden between {min(burdens):.1f} and {max(burdens):.1f} % on 10 wear days" in told
    assert "chance" not in told.split("Before you rely on this page")[0]


def test_decisions_that_meet_nothing_are_named(rows, publish, tmp_path):
    """The trail names what was decided, by whom, when, and why it meets nothing; the recording leads there."""
    at = datetime.fromisoformat
    rows["unmet_decisions"].append(
        {"recording_id": "CN0000-20260302", "patient_code": "SKERRY-0001", "reader_code": "R-07",
         "decision_subject": "episode", "episode_kind": "run", "start_utc": at("2026-03-03T05:00:00"),
         "decision": "reject", "reviewed_utc": at("2026-04-01T07:30:00"), "delivery_id": "D1", "reason": "No such run."}
    )  # fmt: skip
    told = " ".join(pages_of(build(publish(rows), tmp_path / "site"))["trail.html"].text.split())
    assert "1 decision meets nothing in the published analysis" in told
    assert "ventricular run at 3 Mar 2026, 05:00:00" in told
    assert all(word in told for word in ("R-07", "1 Apr 2026, 07:30:00", "No such run."))


def test_missing_burden_is_never_shown_as_a_number(rows, publish, tmp_path):
    """Wear without an analysable hour says that burden is not known."""
    for row in rows["wear_days"] + rows["local_hours"] + rows["recordings"]:
        row |= {"v_burden_pct": None, "s_burden_pct": None, "v_per_h": None, "mean_rate_bpm": None, "analysable_h": 0.0}
        row |= {"v_beats": 0, "all_beats": 0, "is_valid_day": False}
    rows["changes"].clear()
    rows["review_effort"].clear()
    pages = pages_of(build(publish(rows), tmp_path / "site"))
    assert "No analysable beat yet: ventricular burden is not known" in pages["patients/SKERRY-0001.html"].text
    assert "%" not in re.sub(r"over the line of 10 %|11.8 %", "", pages["index.html"].text)


def test_an_empty_programme_has_pages(publish, tmp_path):
    """Before anything arrived the site stands and says that there is nothing yet."""
    pages = pages_of(build(publish({}), tmp_path / "site"))
    assert "Nothing was taken in yet" in pages["index.html"].text


def test_burden_on_the_overview_names_its_denominator(site, rows):
    """Each patient's burden stands with its beats and analysable hours."""
    text = pages_of(site)["index.html"].text
    shown = re.findall(r"(\d+\.\d) % ([\d ]+) V of ([\d ]+) beats", text)
    assert len(shown) == len(rows["patients"]) + len(rows["review_effort"])
    for burden, v_beats, all_beats in shown:
        v, n = (int(figure.replace(" ", "")) for figure in (v_beats, all_beats))
        # Source: burden definition, 100 x ectopic beats / all analysable beats
        assert float(burden) == pytest.approx(100 * v / n, abs=0.05)


def test_a_verdict_stands_with_both_values_and_their_wear(site):
    """The page of a responder names verdict, values, interval, chance limits, valid days and clock coverage."""
    text = pages_of(site)["patients/SKERRY-0001.html"].text
    for part in (
        "fell beyond chance",
        "12.4 → 1.9 %",
        "0.11 to 0.21",
        "−61 to +155",
        "3 of 5",
        "75.2 of 78.7",
        "100 %",
    ):
        assert part in text, part


def test_a_recurrence_is_the_headline(rows, publish, tmp_path):
    """Where ectopy came back the headline says so instead of averaging over both."""
    rows["changes"][0]["recurrence_day"] = date(2026, 3, 22)
    text = pages_of(build(publish(rows), tmp_path / "site"))["patients/SKERRY-0001.html"].text
    said = "Ventricular burden fell beyond chance at first and is back since 22 Mar 2026 after start of bisoprolol 5 mg"
    assert said in text


def test_a_mark_of_the_patient_stands_beside_the_strip_that_holds_it(site):
    """Only the strip in which the patient pressed the button says so, with the local time and the text."""
    for address in ("patients/SKERRY-0001.html", "recordings/CN0000-20260302.html", "review/CN0000-20260302.html"):
        assert pages_of(site)[address].text.count("marked by the patient at 11:00:04: fluttering") == 1, address
    assert "marked by the patient" not in pages_of(site)["recordings/CN0001-20260320.html"].text


def test_coupling_is_named_with_its_beats_and_days(site, rows):
    """The coupling chart is headed by the largest families of the first and the last recording."""
    text = pages_of(site)["patients/SKERRY-0001.html"].text
    said = (
        r"Coupling of the largest family: 470 ms with a spread of 38 ms in [\d\s]+ V beats from 2 Mar 2026, then 470 ms"
    )
    assert re.search(said, text)


def test_planned_visits_stand_on_the_pages(site):
    """A trial's visits are listed with their protocol, for the patient and over all patients."""
    own = pages_of(site)["patients/SKERRY-0001.html"].text
    assert "week 3 masked 25 Mar 2026 25 Mar 2026 0 of 1 10.00 %" in own
    assert "not met: 1 valid day is missing." in own
    assert "1 of 2 planned visits meet the protocol" in pages_of(site)["cohort.html"].text
    assert "Planned visits" not in pages_of(site)["patients/SKERRY-0002.html"].text


def test_too_little_wear_is_said_without_values(site):
    """Where a side has too few days the headline gives no figures to misread."""
    text = pages_of(site)["patients/SKERRY-0004.html"].text
    assert "Ventricular burden: too little wear to judge a change after start of bisoprolol 5 mg" in text
