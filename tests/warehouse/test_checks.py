"""Every claim holds on good tables and is contradicted by a table that breaks it."""

from importlib import resources
from typing import Any

import pytest

# claim -> statement that breaks it in the build
BREAKERS = {
    "analysable_time_lies_within_worn_time": "UPDATE lake.quarter_hours SET analysable_s = worn_s + 1",
    "beat_classes_add_up_to_all_beats": "UPDATE counted_quarters SET n_beats = n_beats + 1",
    "every_burden_lies_between_0_and_100": "UPDATE anew.periods SET v_burden_pct = 101",
    "every_day_lies_within_its_interval": "UPDATE anew.wear_days SET v_burden_high_pct = v_burden_pct / 2",
    "every_fall_beyond_chance_exceeds_its_limit": "UPDATE changes SET change_pct = -10, chance_fall_limit_pct = 20",
    "every_hour_lies_within_its_recording": "UPDATE anew.hours SET hour_utc = hour_utc - INTERVAL 3 DAY",
    "every_recording_has_one_fingerprint": "UPDATE lake.quarter_hours SET fingerprint = quarter_utc::VARCHAR",
    "every_therapy_event_has_its_three_periods": "DELETE FROM anew.periods WHERE period = 'settling'",
    "every_verdict_has_its_denominators": "UPDATE changes SET after_days = 0",
    "every_verdict_is_one_of_the_four_words": "UPDATE changes SET verdict = 'better'",
    "hours_hold_every_beat_of_their_recording": "DELETE FROM anew.hours WHERE hour(hour_utc) = 3",
    "no_burden_without_analysable_time": "UPDATE anew.wear_days SET analysable_h = 0",
    "no_day_is_both_before_and_after_a_therapy_event": "UPDATE anew.periods SET last_day = '2026-05-10'",
    "no_wear_day_is_longer_than_its_day": "UPDATE anew.wear_days SET worn_h = 24.5",
    "wear_days_hold_every_counted_beat": "DELETE FROM anew.wear_days WHERE local_day = '2026-05-02'",
    "wear_days_has_one_row_per_key": "INSERT INTO anew.wear_days FROM anew.wear_days",
}
CHANGE = {
    "patient_code": "P1",
    "therapy_id": "T1",
    "measure": "v_burden_pct",
    "verdict": "fell_beyond_chance",
    "change_pct": -90.0,
    "chance_fall_limit_pct": 60.0,
    "chance_rise_limit_pct": 150.0,
    "baseline_days": 2,
    "after_days": 1,
    "baseline_analysable_h": 48.0,
    "after_analysable_h": 24.0,
    "ratio": 0.1,
}


@pytest.fixture
def programme(lake: Any) -> Any:
    """One patient with wear before and after a therapy event."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-04T00:00")
    lake.recording("R2", "P1", "2026-05-20T00:00", "2026-05-22T00:00", v_beats=9)
    lake.therapy("P1", "2026-05-10", settling_days=7)
    return lake


def test_every_claim_holds_on_good_tables(programme: Any) -> None:
    """No check returns a row when nothing is wrong."""
    with programme.built(changes=[CHANGE]) as build:
        assert build.check() == []


@pytest.mark.parametrize("claim", BREAKERS)
def test_a_broken_table_contradicts_its_claim(programme: Any, claim: str) -> None:
    """The check named after the claim returns the rows that break it."""
    with programme.built(changes=[CHANGE]) as build:
        build.connection.execute(BREAKERS[claim])
        failed = {failure.claim: failure.rows for failure in build.check()}
    assert failed[claim].height > 0


def test_every_claim_has_a_breaker() -> None:
    """Each check file has a statement here that proves it can fail."""
    files = resources.files("warehouse").joinpath("checks").iterdir()
    assert {file.name.removesuffix(".sql") for file in files} <= set(BREAKERS)
