"""Which fingerprint is published: the present detector and settings, or an older one that somebody promoted."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from pathlib import Path

from flows.detect import fingerprint_of
from flows.settings import Settings
from warehouse.audit import Change, change_loads
from warehouse.cache import PROMOTION_FILE, write_shared
from warehouse.ledger import Ledger
from warehouse.owner import refuse_other
from warehouse.parts import read_part

PRESENT = "present"


class PromotionError(ValueError):
    """The fingerprint has no results; the message lists those that have."""


def published_fingerprint(lake: Path, settings: Settings) -> str:
    """The promoted fingerprint, or that of the present detector and settings when none is promoted."""
    path = lake / PROMOTION_FILE
    promoted = json.loads(path.read_text(encoding="utf-8"))["fingerprint"] if path.exists() else PRESENT
    return fingerprint_of(settings) if promoted == PRESENT else promoted


def known_fingerprints(ledger: Ledger) -> list[str]:
    """Fingerprints under which at least one recording has results."""
    return sorted({part.fingerprint for part in ledger.parts("quarter_hours")})


def promote(
    lake: Path, settings: Settings, ledger: Ledger, fingerprint: str, reason: str, actor_code: str | None
) -> None:
    """Publish `fingerprint` from the next run on; `present` follows the detector and the settings again.

    Raises PromotionError for a fingerprint without results, StoreError where the lake's store is another folder's. The
    change is kept in the history with its reason.
    """
    check_known(ledger, fingerprint)
    refuse_other(lake)
    change = Change("promotion", "fingerprint", published_fingerprint(lake, settings), fingerprint, reason)
    now = datetime.now(UTC).replace(tzinfo=None)
    ledger.commit(change_loads(lake, [change], actor_code=actor_code, happened_utc=now), note="promote")
    write_shared(lake, PROMOTION_FILE, json.dumps({"fingerprint": fingerprint}).encode())


def check_known(ledger: Ledger, fingerprint: str) -> None:
    """Refuse a fingerprint without results."""
    known = known_fingerprints(ledger)
    if fingerprint not in (PRESENT, *known):
        raise PromotionError(f"no results under fingerprint {fingerprint!r}; there are: {', '.join(known) or 'none'}")


def settings_behind(lake: Path, ledger: Ledger, fingerprint: str) -> str:
    """The detector version and the settings that a fingerprint stands for, as text."""
    row = read_part(lake, ledger.parts("fingerprints", fingerprint)[0]).row(0, named=True)
    return f"detector {row['detector_version']}, settings {row['settings_json']}"
