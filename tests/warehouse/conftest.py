"""A small lake with invented tallies, and the build and publication over it."""

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from flows.over_read import add_reviewed
from warehouse import parts, schema
from warehouse.build import TrendBuild
from warehouse.layers import COMPUTED_OUTSIDE
from warehouse.ledger import Ledger
from warehouse.parts import write_part
from warehouse.publish import publish
from warehouse.published import Published

SETTINGS = {
    "min_analysable_h_per_day": 10.0,
    "min_days_per_period": 2,
    "baseline_days": 28,
    "after_days": 90,
    "attention_v_burden_pct": 10.0,
    "attention_run_beats": 3,
    "attention_fast_run_bpm": 120.0,
    "attention_pause_ms": 3000,
    "attention_sustained_run_s": 30.0,
    "attention_short_coupling_ms": 300.0,
    "attention_patch_end_days": 2,
}
QUARTER = timedelta(minutes=15)
FS_HZ = 250


class Lake:
    """Lands invented recordings and keeps the register that goes with them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.ledger = Ledger(folder / "lake")
        self.patients: dict[str, str] = {}
        self.wears: list[dict[str, Any]] = []
        self.therapies: list[dict[str, Any]] = []

    def patient(self, code: str, zone: str = "UTC") -> None:
        """Register a patient."""
        self.patients[code] = zone

    def therapy(self, code: str, day: str, settling_days: int = 0, kind: str = "medication_start") -> str:
        """Register a therapy event; returns its code."""
        therapy_id = f"T{len(self.therapies) + 1}"
        self.therapies.append(
            {
                "therapy_id": therapy_id,
                "patient_code": code,
                "therapy_kind": kind,
                "therapy_detail": "invented 5 mg",
                "therapy_day": date.fromisoformat(day),
                "settling_days": settling_days,
            }
        )
        return therapy_id

    def recording(
        self, recording_id: str, code: str, start: str, end: str, fingerprint: str = "f1", **tally: Any
    ) -> None:
        """Land a recording of equal quarter hours from `start` to `end` (UTC); `tally` overrides their columns."""
        start_utc, end_utc = datetime.fromisoformat(start), datetime.fromisoformat(end)
        quarters = [start_utc + n * QUARTER for n in range(int((end_utc - start_utc) / QUARTER))]
        tallies = pl.DataFrame({"quarter_utc": quarters}).with_columns(
            pl.lit(recording_id).alias("recording_id"), pl.lit(fingerprint).alias("fingerprint"), **_tally(tally)
        )
        self.wears.append(
            {
                "recording_id": recording_id,
                "device_serial": recording_id,
                "patient_code": code,
                "from_utc": start_utc,
                "to_utc": end_utc,
            }
        )
        self.land("recordings", recording_id, [_recording(recording_id, start_utc, end_utc)])
        self.segments(recording_id, [(start_utc, end_utc)])
        self.land("quarter_hours", recording_id, tallies, fingerprint)
        of_family = tallies.select(
            "recording_id", "fingerprint", "quarter_utc", family=pl.lit(0, dtype=pl.Int16), beat_count="all_beats"
        )
        self.land("family_quarters", recording_id, of_family, fingerprint)

    def segments(self, recording_id: str, spans: list[tuple[datetime, datetime]]) -> None:
        """Land the gap-free stretches of a recording."""
        rows = [
            {"recording_id": recording_id, "segment": number, "start_utc": start, "end_utc": end}
            | {"sample_count": round((end - start).total_seconds() * FS_HZ)}
            for number, (start, end) in enumerate(spans)
        ]
        self.land("segments", recording_id, rows)

    def land(self, table: str, key: str, rows: pl.DataFrame | list[dict[str, Any]], fingerprint: str = "") -> None:
        """Land rows of any lake table; columns that are not given are NULL."""
        frame = rows if isinstance(rows, pl.DataFrame) else pl.DataFrame(rows)
        absent = [name for name in schema.LAKE[table].columns if name not in frame.columns]
        frame = frame.with_columns(pl.lit(None).alias(name) for name in absent)
        part = write_part(self.folder / "lake", table, key, frame, fingerprint=fingerprint)
        self.ledger.commit({(table, key): [part]})

    def register(self) -> dict[str, pl.DataFrame]:
        """Register frames as the build takes them."""
        patients = [{"patient_code": code, "zone": zone} for code, zone in self.patients.items()]
        return {
            "patients": pl.DataFrame(patients, schema=["patient_code", "zone"]),
            "wears": pl.DataFrame(
                self.wears, schema=["recording_id", "device_serial", "patient_code", "from_utc", "to_utc"]
            ),
            "therapies": pl.DataFrame(self.therapies) if self.therapies else _no_therapies(),
        }

    @contextmanager
    def built(
        self,
        fingerprint: str = "f1",
        work: str = "work",
        changes: list[dict[str, Any]] | None = None,
        standing: Published | None = None,
        **settings: Any,
    ) -> Iterator[TrendBuild]:
        """A finished build over everything that was landed; `changes` stands for the statistics."""
        build = TrendBuild(
            self.folder / "lake",
            self.ledger.parts(),
            register=self.register(),
            settings=SETTINGS | settings,
            fingerprint=fingerprint,
            workdir=self.folder / work,
            standing=standing,
        )
        with build:
            build.run_models("decided")
            add_reviewed(build)
            build.run_models("staging")
            build.run_models("intermediate")
            build.add("changes", _changes(changes or []))
            for name in set(COMPUTED_OUTSIDE) - {"changes"}:
                build.add(name, parts.empty_frame(schema.PUBLISHED[name]))
            build.run_models("marts")
            yield build


def _no_therapies() -> pl.DataFrame:
    names = ["therapy_id", "patient_code", "therapy_kind", "therapy_detail", "therapy_day", "settling_days"]
    return pl.DataFrame(schema=dict.fromkeys(names, pl.Null))


def _changes(rows: list[dict[str, Any]]) -> pl.DataFrame:
    described = schema.PUBLISHED["changes"]
    filled = [dict.fromkeys(described.columns) | row for row in rows]
    return pl.DataFrame(filled, schema=parts.frame_schema(described))


def _tally(given: dict[str, Any]) -> dict[str, pl.Expr]:
    seconds = dict.fromkeys(("recorded_s", "worn_s", "analysable_s"), 900.0)
    beats = {"n_beats": 900, "s_beats": 10, "v_beats": 90, "f_beats": 0, "q_beats": 0}
    rhythm = {"rr_sum_s": 900.0, "rr_count": 1000, "couplets": 1, "runs": 0, "sv_runs": 0, "pauses": 0}
    more = {"longest_run_beats": 0, "bigeminy_s": 0.0, "trigeminy_s": 0.0, "irregular_s": 0.0}
    values = seconds | beats | rhythm | more | {"fastest_run_bpm": None, "longest_pause_ms": None} | given
    classes = sum(values[name] for name in beats)
    values = {"all_beats": classes} | values
    return {name: value if isinstance(value, pl.Expr) else pl.lit(value) for name, value in values.items()}


def _recording(recording_id: str, start_utc: datetime, end_utc: datetime) -> dict[str, Any]:
    return {
        "recording_id": recording_id,
        "device_serial": recording_id,
        "start_utc": start_utc,
        "end_utc": end_utc,
        "zone": "UTC",
        "fs_hz": float(FS_HZ),
        "recorded_h": (end_utc - start_utc) / timedelta(hours=1),
    }


@pytest.fixture
def lake(tmp_path: Path) -> Lake:
    """An empty lake in a programme folder."""
    return Lake(tmp_path)


@pytest.fixture(scope="session")
def make_lake() -> type[Lake]:
    """Makes an empty lake in a given folder, for tests that need several."""
    return Lake


@pytest.fixture
def programme(lake: Lake) -> Lake:
    """A lake with one patient, two recordings with beats, and one therapy event."""
    return filled_lake(lake)


@pytest.fixture(scope="session")
def standing(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Published folder of that programme, for tests that only read."""
    lake = filled_lake(Lake(tmp_path_factory.mktemp("standing")))
    with lake.built() as build:
        publish(build, lake.folder / "published", site=lambda _, folder: folder.mkdir(), stamp={"version": "7"})
    return lake.folder / "published"


def filled_lake(lake: Lake) -> Lake:
    """Land a small programme."""
    lake.patient("P1", "Europe/Lisbon")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-03T00:00")
    lake.recording("R2", "P1", "2026-06-01T00:00", "2026-06-02T00:00")
    lake.therapy("P1", "2026-05-10", settling_days=7)
    for number, name in enumerate(("R1", "R2")):
        beats = [
            {
                "recording_id": name,
                "fingerprint": "f1",
                "segment": 0,
                "sample": 200 * n,
                "beat_utc": datetime.fromisoformat(f"2026-0{5 + number}-01T00:00"),
                "beat_class": "NV"[n % 2],
                "is_escape": False,
                "is_analysable": True,
            }
            for n in range(4 + number)
        ]
        lake.land("beats", name, beats, fingerprint="f1")
    return lake
