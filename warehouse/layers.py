"""Where each published table comes from: a SQL model of a layer, the parts as they lie, or statistics made outside SQL."""

from __future__ import annotations

from importlib import resources

from warehouse import schema

MODELS: dict[str, tuple[str, ...]] = {
    "decided": ("latest_reviews", "met_reviews", "latest_decisions", "decided_beats", "rejected_episodes"),
    "staging": ("patients", "therapies", "recording_wears", "counted_quarters", "patient_quarters"),
    "intermediate": ("hours", "recording_tallies", "local_hours", "burden_intervals", "wear_days", "period_spans", "periods",
        "family_days", "family_shapes",
    ),
    "marts": (
        "deliveries", "recordings", "segments", "families", "episodes", "findings", "marks", "attention_from_days",
        "attention_from_therapies", "attention_from_recordings", "attention", "review_sheet", "decisions", "reviews",
        "undecided_families", "unmet_decisions", "reviewed", "review_effort", "reader_conflicts", "reader_agreement",
        "runs_of_flow", "audit", "fingerprints",
    ),
}  # fmt: skip
"""Models by layer, in the order in which they run: each is the SQL file of its name and makes the table of its name."""

READ_IN_PLACE = ("beats", "quality_windows", "strips")
"""Published tables that are too large to copy: views over the parts, in the build and in the publication."""

COMPUTED_OUTSIDE = tuple(
    name
    for name in schema.PUBLISHED
    if name
    not in (*READ_IN_PLACE, "parts", "data_dictionary", *(model for layer in MODELS.values() for model in layer))
)
"""Published tables that no model makes: statistics, which the caller adds between intermediate and marts."""


def model_sql(layer: str, name: str) -> str:
    """Text of the SQL file of a model."""
    return resources.files("warehouse").joinpath("models", layer, f"{name}.sql").read_text(encoding="utf-8")
