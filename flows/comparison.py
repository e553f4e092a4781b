"""Two fingerprints side by side: what would move if the other one were published."""

from __future__ import annotations

from pathlib import Path

from flows import register
from flows import settings as programme_settings
from flows.detect import fingerprint_of
from flows.promotion import PRESENT, check_known
from flows.publication import built
from warehouse.compare import Comparison, compare
from warehouse.ledger import Ledger


def compare_fingerprints(folder: Path, a: str, b: str) -> Comparison:
    """Build the tables under both fingerprints and compare them; raises PromotionError for one without results."""
    settings = programme_settings.load(folder / "programme.toml")
    people = register.load(folder, settings.programme.zone)
    ledger = Ledger(folder / "lake")
    for name in (a, b):
        check_known(ledger, name)
    names = [fingerprint_of(settings) if name == PRESENT else name for name in (a, b)]
    parts = ledger.parts()
    with (
        built(folder, settings, people, parts, names[0]) as build_a,
        built(folder, settings, people, parts, names[1]) as build_b,
    ):
        return compare(build_a, build_b)
