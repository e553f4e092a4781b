"""The whole job over one programme folder: what arrived, what is new in it, what it means, what is published.

`run` and the scheduled flow are this one composition; only who executes `analyse_all` differs.
"""

from __future__ import annotations

import multiprocessing
import socket
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

from flows import settings as programme_settings
from flows.lock import folder_lock
from flows.progress import SILENT, Reporter
from flows.settings import Settings

if TYPE_CHECKING:
    from flows.arrivals.ingest import Arrivals
    from flows.last_run import RunEnd
    from flows.register import Register
    from warehouse.ledger import Ledger

DONE, FAILED, USAGE, DONE_WITH_REFUSALS = 0, 1, 2, 3


class ProcessEnded(RuntimeError):
    """A process of this host that analysed recordings was ended from outside."""


@dataclass(frozen=True)
class Outcome:
    """What one run did."""

    outcome: str  # published, published_with_refusals or unchanged
    accepted: int
    waiting: int
    skipped: int
    quarantined: int
    analysed_recordings: int
    pages: str
    database: str

    @property
    def exit_code(self) -> int:
        """0 done, 3 done with refusals."""
        return DONE_WITH_REFUSALS if self.quarantined else DONE

    def as_dict(self) -> dict[str, Any]:
        """Plain values for --json."""
        return asdict(self)


@dataclass(frozen=True)
class Work:
    """One recording to analyse: everything that a worker process needs, picklable."""

    folder: Path
    recording_id: str
    settings: Settings


class Analysed(NamedTuple):
    """One recording as the detector left it: the loads to commit, and how long that took for how much signal."""

    recording_id: str
    recorded_h: float
    analysed_s: float
    loads: dict


Analyse = Callable[[Sequence[Work], Reporter], Iterator[Analysed]]


def run(
    folder: Path,
    *,
    reporter: Reporter = SILENT,
    wait_s: float = 0.0,
    actor_code: str | None = None,
    analyse_all: Analyse | None = None,
    flow_run: str = "",
    take_over: bool = False,
) -> Outcome:
    """Bring the published tables and pages of a programme folder up to date with inbox, register and settings.

    `actor_code` stands in the history beside edits of register and settings that this run is the first to see.
    `flow_run` names the run in the log (`flows.run_log`). With `take_over` a store of another folder becomes this one's.
    Raises SettingsError, RegisterError, FolderBusy, StoreError, LedgerError or CheckFailed; the publication then stays as
    it was.
    """
    from flows import last_run, run_log
    from warehouse import layout

    if layout.is_older(folder):
        with folder_lock(folder, wait_s):
            copy = layout.migrate(folder)
        reporter.say(f"folder of an older layout brought up to date; as it was: {copy}")
    settings = programme_settings.load(folder / "programme.toml")
    run_id = f"run-{datetime.now(UTC):%Y%m%dT%H%M%S%f}"
    with folder_lock(folder, wait_s), last_run.noted(folder) as end, run_log.opened(folder, flow_run or run_id):
        outcome = _bring_up_to_date(
            folder, settings, reporter, actor_code, analyse_all or analyse_where_set, end, run_id, take_over
        )
        end.outcome = outcome.outcome
        run_log.tell("run ended", outcome=outcome.outcome)
    return outcome


def _bring_up_to_date(
    folder: Path,
    settings: Settings,
    reporter: Reporter,
    actor_code: str | None,
    analyse_all: Analyse,
    end: RunEnd,
    run_id: str,
    take_over: bool,
) -> Outcome:
    from flows import edits, memory, register, run_log
    from flows.arrivals import ingest
    from warehouse import cache, owner
    from warehouse.ledger import Ledger

    memory.give_back()
    people = register.load(folder, settings.programme.zone)
    where = f"the folder {folder.resolve()} of host {socket.gethostname()}"
    owner.claim(folder / "lake", settings.lake.store, run_id, where, take_over=take_over)
    ledger = Ledger(folder / "lake")
    edits.note_edits(folder / "lake", settings, people, ledger, actor_code)
    arrivals = ingest.ingest(folder, settings, people, ledger, reporter.say)
    work = [Work(folder, recording_id, settings) for recording_id in unanalysed(ledger, settings)]
    for analysed in analyse_all(work, reporter):
        ledger.commit(analysed.loads, note="detect")
        end.analysed.append(analysed)
        recording_id, recorded_h, analysed_s = analysed[:3]
        run_log.tell(
            "recording analysed", recording=recording_id, recorded_h=round(recorded_h, 4), seconds=round(analysed_s, 2)
        )
    if arrivals.changed or work:
        _note_run(run_id, folder, ledger, arrivals, _outcome(True, arrivals.quarantined))
    ledger.fill_cache()
    changed = publish(
        folder, settings, people, ledger, reporter, lambda: _note_run(run_id, folder, ledger, arrivals, "not_published")
    )
    if settings.lake.cache_gb:
        cache.shrink(folder / "lake", settings.lake.cache_gb * 1e9)
    return Outcome(
        outcome=_outcome(changed, arrivals.quarantined),
        accepted=arrivals.accepted,
        waiting=arrivals.waiting,
        skipped=arrivals.skipped,
        quarantined=arrivals.quarantined,
        analysed_recordings=len(work),
        pages=str(folder / "published" / "site" / "index.html"),
        database=str(folder / "published" / "burdenline.duckdb"),
    )


def publish(
    folder: Path, settings: Settings, people: Register, ledger: Ledger, reporter: Reporter, failed: Callable[[], None]
) -> bool:
    """Bring tables and pages up to date; returns whether anything changed. `failed` is called where a check fails."""
    # Imported only here: scipy and DuckDB take as much memory as half a recording, and would lie beside it.
    from flows import publication

    try:
        return publication.refresh(folder, settings, people, ledger, reporter.say)
    except publication.CheckFailed:
        failed()
        raise


def _outcome(changed: bool, quarantined: int) -> str:
    if not changed:
        return "unchanged"
    return "published_with_refusals" if quarantined else "published"


def _note_run(run_id: str, folder: Path, ledger: Ledger, arrivals: Arrivals, outcome: str) -> None:
    """Keep one row about this run; a run that found nothing to do leaves no row."""
    import polars as pl

    from warehouse.parts import write_part

    row = {
        "run_id": run_id,
        "finished_utc": datetime.now(UTC).replace(tzinfo=None),
        "accepted_count": arrivals.accepted,
        "waiting_count": arrivals.waiting,
        "skipped_count": arrivals.skipped,
        "quarantined_count": arrivals.quarantined,
        "outcome": outcome,
    }
    part = write_part(folder / "lake", "runs_of_flow", run_id, pl.DataFrame([row]))
    ledger.commit({("runs_of_flow", run_id): [part]}, note="run")


def unanalysed(ledger: Ledger, settings: Settings) -> list[str]:
    """Recordings that hold samples but no tallies under the present fingerprint, in order."""
    from flows.detect import fingerprint_of

    name = fingerprint_of(settings)
    done = {part.key for part in ledger.parts("quarter_hours") if part.fingerprint == name}
    return sorted({part.key for part in ledger.parts("recordings")} - done)


def analyse_where_set(work: Sequence[Work], reporter: Reporter) -> Iterator[Analysed]:
    """Analyse recordings on this host, or on the Dask scheduler that the settings name."""
    if work and work[0].settings.workers.scheduler:
        from flows.workers import analyse_on_workers

        return analyse_on_workers(work, reporter)
    return analyse_here(work, reporter)


def analyse_here(work: Sequence[Work], reporter: Reporter) -> Iterator[Analysed]:
    """Analyse recordings on this host, one after the other or in the processes that the settings allow."""
    processes = min(len(work), work[0].settings.workers.processes) if work else 0
    if processes <= 1:
        yield from (analyse_one(item, reporter) for item in work)
        return
    with _fresh_processes(processes) as pool:
        running = {pool.submit(analyse_one, item): item for item in work}
        for number, finished in enumerate(as_completed(running), start=1):
            with _ends_told():
                analysed = finished.result()
            reporter.say(f"  analysed {analysed.recording_id} ({number} of {len(work)})")
            yield analysed


@contextmanager
def analyser(processes: int) -> Iterator[Callable[[Work], Analysed]]:
    """A function that analyses one recording: here, or in one of several processes, so that threads can call it at once."""
    if processes <= 1:
        yield analyse_one
        return

    def apart(item: Work) -> Analysed:
        with _ends_told():
            return pool.submit(analyse_one, item).result()

    with _fresh_processes(processes) as pool:
        yield apart


def _fresh_processes(count: int) -> ProcessPoolExecutor:
    """A fork would inherit the threads of polars in an unknown state."""
    return ProcessPoolExecutor(count, mp_context=multiprocessing.get_context("spawn"))


@contextmanager
def _ends_told() -> Iterator[None]:
    try:
        yield
    except BrokenProcessPool:
        raise ProcessEnded(
            "a process that analysed recordings was ended, out of memory perhaps; what was done stays: "
            "lower [workers] processes or give this host more memory, and run again"
        ) from None


def analyse_one(item: Work, reporter: Reporter = SILENT) -> Analysed:
    """Run the detector over one landed recording and write its parts.

    Doing it twice writes the same files, so a worker that dies can simply be repeated.
    """
    from flows import detect, memory
    from warehouse.ledger import Ledger
    from warehouse.parts import read_part

    begun_s = time.monotonic()
    memory.give_back()
    lake = item.folder / "lake"
    ledger = Ledger(lake)
    recording = read_part(lake, ledger.parts("recordings", item.recording_id)[0]).row(0, named=True)
    segments = read_part(lake, ledger.parts("segments", item.recording_id)[0])
    signal = ledger.parts("signal", item.recording_id)
    with reporter.recording(item.recording_id, recording["recorded_h"]) as advance:
        per_hour = 3600.0 * recording["fs_hz"]
        analysis = detect.analyse_landed(
            lake, recording, segments, signal, item.settings, lambda samples: advance(samples / per_hour)
        )
    memory.give_back()
    name = detect.fingerprint_of(item.settings)
    loads = detect.land_analysis(lake, recording, segments, signal, analysis, name)
    loads[("fingerprints", name)] = [detect.fingerprint_part(lake, item.settings)]
    return Analysed(item.recording_id, recording["recorded_h"], time.monotonic() - begun_s, loads)
