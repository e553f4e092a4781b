"""What a build is given beside the parts, as columns and their types: the register, the settings, over-read recordings."""

from __future__ import annotations

from warehouse import schema

REGISTER: dict[str, dict[str, str]] = {
    "patients": {"patient_code": "VARCHAR", "zone": "VARCHAR"},
    "wears": {
        "recording_id": "VARCHAR", "device_serial": "VARCHAR", "patient_code": "VARCHAR", "from_utc": "TIMESTAMP",
        "to_utc": "TIMESTAMP",
    },
    "therapies": {
        "therapy_id": "VARCHAR", "patient_code": "VARCHAR", "therapy_kind": "VARCHAR", "therapy_detail": "VARCHAR",
        "therapy_day": "DATE", "settling_days": "INTEGER",
    },
}  # fmt: skip
"""Tables of the register as models see them."""

SETTINGS: dict[str, str] = {
    "min_analysable_h_per_day": "DOUBLE",
    "min_days_per_period": "INTEGER",
    "baseline_days": "INTEGER",
    "after_days": "INTEGER",
    "attention_v_burden_pct": "DOUBLE",
    "attention_run_beats": "INTEGER",
    "attention_fast_run_bpm": "DOUBLE",
    "attention_pause_ms": "DOUBLE",
    "attention_sustained_run_s": "DOUBLE",
    "attention_short_coupling_ms": "DOUBLE",
    "attention_patch_end_days": "INTEGER",
}
"""Thresholds that models read: the columns of `programme.settings` beside the fingerprint."""

REVIEWED: dict[str, dict[str, str]] = {
    "quarter_hours": {
        name: schema.COLUMNS[name].type for name in (*schema.LAKE["quarter_hours"].columns, "decided_beats")
    },
    "episodes": {name: schema.COLUMNS[name].type for name in (*schema.LAKE["episodes"].columns, "is_counted")},
}
"""What the caller adds of over-read recordings, by the classes decided."""
