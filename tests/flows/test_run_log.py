"""The log tells operators which delivery and recording a run worked on, and not a word about a patient."""

import json

import pytest

from flows import run_log
from flows.nightly import run
from flows.register import RegisterError

PERSON = ("P-0001", "Jane", "Doe", "Jane_Doe.edf")


def lines(folder):
    """Every line of the log, decoded."""
    return [json.loads(line) for line in run_log.log_file(folder).read_text().splitlines()]


@pytest.fixture
def coast(programme, make_edf):
    """A programme with an export whose name and header tell a person, and a letter."""
    programme.deliver("Jane_Doe.edf", make_edf(patient="P-0001 F 01-JAN-1950 Jane_Doe"))
    programme.deliver("Dear Jane Doe.txt", b"Dear Jane Doe, P-0001")
    return programme.folder


def test_a_run_is_told_step_by_step(coast):
    """Each line names the run; deliveries carry their id, status and code, recordings their id and seconds."""
    run(coast, flow_run="flow-7")
    told = lines(coast)
    assert {line["run"] for line in told} == {"flow-7"}
    assert [line["event"] for line in told] == [
        "run began", "delivery decided", "delivery decided", "recording analysed", "run ended",
    ]  # fmt: skip
    refused, accepted, analysed, ended = told[1:]
    assert (refused["status"], accepted["status"]) == ("quarantined", "accepted") and refused["code"]
    assert len(accepted["delivery"]) == 16 and accepted["recording"] == analysed["recording"]
    assert analysed["seconds"] >= 0 and ended["outcome"] == "published_with_refusals"
    run(coast)
    assert [line["event"] for line in lines(coast)[5:]] == ["run began", "run ended"]


def test_no_word_about_a_patient_is_written(coast):
    """Neither code, name nor file name reaches the log, also when a run fails on a sentence that holds them."""
    run(coast)
    (coast / "register" / "patients.csv").write_text("patient_code,zone\nP-0001,Moon/Jane_Doe\n")
    with pytest.raises(RegisterError, match="Jane_Doe"):
        run(coast)
    assert lines(coast)[-1]["event"] == "run failed" and lines(coast)[-1]["error"] == "RegisterError"
    text = run_log.log_file(coast).read_text()
    assert not [word for word in PERSON if word in text]


def test_a_field_that_is_not_named_is_refused():
    """Nothing reaches the log but the fields that were chosen for it."""
    with pytest.raises(ValueError, match="no field patient_code in the log"):
        run_log.tell("delivery decided", patient_code="P-0001")


def test_old_lines_move_beside(coast, monkeypatch):
    """The file does not grow beyond its limit; older lines lie beside it."""
    monkeypatch.setattr(run_log, "LARGEST_BYTES", 400)
    with run_log.opened(coast, "r"):
        for _ in range(20):
            run_log.tell("recording analysed", recording="SRL-1_20260301", seconds=1.0)
    files = sorted(path.name for path in (coast / "logs").iterdir())
    assert files[:2] == ["runs.jsonl", "runs.jsonl.1"] and len(files) <= 1 + run_log.KEPT_FILES
    assert all(path.stat().st_size <= 400 for path in (coast / "logs").iterdir())
