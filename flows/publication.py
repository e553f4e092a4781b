"""From landed parts to the published database and pages: build, compare periods, check, publish.

Nothing is published when a check returns a row; the publication of the day before then stays.
"""

from __future__ import annotations

import hashlib
import tempfile
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict
from importlib.metadata import version
from pathlib import Path

import polars as pl

from dashboards.site import build_site
from flows.change import trends
from flows.change.lending import NOTHING_KEPT, Kept
from flows.change.patient_families import patient_families
from flows.change.visits import responders, unchanged, visit_changes, visits
from flows.over_read import add_reviewed
from flows.promotion import published_fingerprint
from flows.register import Register
from flows.settings import ChangeSettings, Settings
from warehouse.build import TrendBuild
from warehouse.ledger import Ledger
from warehouse.parts import Part
from warehouse.publish import publish
from warehouse.published import Published

SHOWN_ROWS = 3
EVIDENCE_OF_CHANGES, EVIDENCE_OF_VISITS, COMPARED_VISITS = "change_evidence", "visit_evidence", "visits_compared"


class CheckFailed(RuntimeError):
    """A claim about the published tables does not hold; the message names the claim and its first rows."""


def refresh(folder: Path, settings: Settings, people: Register, ledger: Ledger, say: Callable[[str], None]) -> bool:
    """Build all tables from the parts in force, check them, publish them with their pages.

    Returns whether anything changed. Raises CheckFailed when a check returns a row.
    """
    say("building tables")
    fingerprint = published_fingerprint(folder / "lake", settings)
    standing = Published(folder / "published") if (folder / "published" / "current").exists() else None
    with built(folder, settings, people, ledger.parts(), fingerprint, standing) as build:
        build.run_models("marts")
        _check(build)
        say("publishing")
        return publish(
            build,
            folder / "published",
            site=lambda published, site: build_site(
                published,
                site,
                programme_name=settings.programme.name,
                version=version("burdenline"),
                previous=folder / "published" / "site",
            ),
            stamp={"version": version("burdenline"), "settings": asdict(settings)},
        )


@contextmanager
def built(
    folder: Path,
    settings: Settings,
    people: Register,
    parts: Sequence[Part],
    fingerprint: str,
    standing: Published | None = None,
) -> Iterator[TrendBuild]:
    """Build the tables up to `changes` from the given parts under one fingerprint.

    What the edition `standing` already has of patients without changes is taken over from it.
    """
    with (
        tempfile.TemporaryDirectory(prefix="build-", dir=folder / "lake") as workdir,
        TrendBuild(
            folder / "lake",
            parts,
            register=_register_frames(people, settings.change),
            settings=_model_settings(settings),
            fingerprint=fingerprint,
            workdir=Path(workdir),
            standing=standing,
            program=_program(settings),
        ) as build,
    ):
        build.run_models("decided")
        add_reviewed(build)
        build.run_models("staging")
        build.run_models("intermediate")
        measured = {name: build.frame(name) for name in ("local_hours", "wear_days", "periods", "therapies")}
        made = trends.tables(trends.Inputs(**measured), settings.change, settings.wear, _kept_changes(build))
        for name, frame in made.published.items():
            build.add(name, frame)
        build.hand_on(EVIDENCE_OF_CHANGES, made.evidence)
        build.add("patient_families", patient_families(build.frame("family_shapes")))
        for name, frame in _trial_tables(build, people, measured, settings).items():
            build.add(name, frame)
        yield build


def _kept_changes(build: TrendBuild) -> Kept:
    """Rows of changes that the build may take over, with what all patients of the standing edition lent."""
    evidence = build.handed(EVIDENCE_OF_CHANGES)
    if evidence is None or build.standing is None or not build.kept:
        return NOTHING_KEPT
    patients = sorted(build.kept)
    of_kept = pl.col("patient_code").is_in(patients)
    return Kept(patients, evidence, {name: build.standing.table(name).filter(of_kept) for name in trends.PER_PATIENT})


def _program(settings: Settings) -> str:
    """What rows kept per patient follow from beside parts, register and models: settings, libraries, our own source."""
    digest = hashlib.sha256(repr((settings.change, settings.wear, settings.trial)).encode())
    for library in ("numpy", "scipy", "polars"):
        digest.update(version(library).encode())
    for room in ("detectors", "flows"):
        for path in sorted((Path(__file__).parents[1] / room).rglob("*.py")):
            digest.update(path.read_bytes())
    return digest.hexdigest()


def _check(build: TrendBuild) -> None:
    failures = build.check()
    if failures:
        told = "; ".join(f"{failure.claim}: {failure.rows.head(SHOWN_ROWS).to_dicts()}" for failure in failures)
        raise CheckFailed(
            f"not published: {len(failures)} checks of warehouse/checks returned rows; "
            f"the publication before stays: {told}"
        )


def _trial_tables(
    build: TrendBuild, people: Register, measured: dict[str, pl.DataFrame], settings: Settings
) -> dict[str, pl.DataFrame]:
    of_visits = visits(people.visits, measured["wear_days"], settings.trial)
    hours_and_days = measured["local_hours"], measured["wear_days"]
    kept = _kept_visits(build, of_visits)
    table, compared = visit_changes(of_visits, *hours_and_days, settings.change, settings.trial, kept)
    build.hand_on(EVIDENCE_OF_VISITS, compared.evidence)
    build.hand_on(COMPARED_VISITS, compared.published["changes"])
    counted = responders(table, settings.change.success_limit_pct)
    return {"visits": of_visits, "visit_changes": table, "responders": counted}


def _kept_visits(build: TrendBuild, of_visits: pl.DataFrame) -> Kept:
    """The same of visits, for patients whose visits are planned as they were."""
    evidence, rows = build.handed(EVIDENCE_OF_VISITS), build.handed(COMPARED_VISITS)
    if evidence is None or rows is None or build.standing is None:
        return NOTHING_KEPT
    patients = [code for code in unchanged(of_visits, build.standing.table("visits")) if code in build.kept]
    return Kept(patients, evidence, {"changes": rows.filter(pl.col("patient_code").is_in(patients))})


def _register_frames(people: Register, change: ChangeSettings) -> dict[str, pl.DataFrame]:
    return {
        "patients": people.patients,
        "wears": people.wears.select("recording_id", "device_serial", "patient_code", "from_utc", "to_utc"),
        "therapies": people.therapies.with_columns(_settling_days(change).alias("settling_days")),
    }


def _settling_days(change: ChangeSettings) -> pl.Expr:
    kind = pl.col("therapy_kind")
    return (
        pl.when(kind == "ablation")
        .then(change.settling_days_ablation)
        .when(kind.is_in(["medication_start", "medication_stop", "dose_change"]))
        .then(change.settling_days_medication)
        .otherwise(change.settling_days_other)
        .cast(pl.Int32)
    )


def _model_settings(settings: Settings) -> dict[str, float | int | str]:
    attention = {f"attention_{name}": value for name, value in asdict(settings.attention).items()}
    periods = {"baseline_days": settings.change.baseline_days, "after_days": settings.change.after_days}
    return asdict(settings.wear) | periods | attention
