"""The nightly job as Prefect flows: the only module that knows Prefect.

Thin wrappers around `flows.nightly`; a recording is one task, so a failed one is tried again without the others.
Final states: Published, Published with refusals, Unchanged, Not published.
"""

from __future__ import annotations

import asyncio
import os
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import Any
from uuid import UUID

# Read by Prefect when it is imported: nothing is sent anywhere, and a slow host gets time to start the local server.
os.environ.setdefault("DO_NOT_TRACK", "1")
os.environ.setdefault("PREFECT_SERVER_ANALYTICS_ENABLED", "false")
os.environ.setdefault("PREFECT_CLOUD_ENABLE_ORCHESTRATION_TELEMETRY", "false")
os.environ.setdefault("PREFECT_SERVER_EPHEMERAL_STARTUP_TIMEOUT_SECONDS", "120")

from prefect import flow, get_run_logger, task
from prefect.artifacts import (
    create_markdown_artifact,
    create_progress_artifact,
    create_table_artifact,
    update_progress_artifact,
)
from prefect.cache_policies import NO_CACHE
from prefect.client.orchestration import get_client
from prefect.client.schemas.objects import StateType
from prefect.futures import PrefectFuture
from prefect.runtime import flow_run
from prefect.schedules import Cron, Schedule
from prefect.settings import PREFECT_API_URL, temporary_settings
from prefect.states import State

from flows import due, nightly, settings
from flows.local_server import ServerError, local_server
from flows.lock import FolderBusy, schedule_lock
from flows.nightly import Analysed, Work
from flows.notify import notify
from flows.progress import Reporter, Silent
from flows.sentences import is_sentence, sentence
from flows.workers import WorkersAway
from warehouse.published import Published
from warehouse.store import StoreAway

NIGHT_S = 12 * 3600
WAIT_FOR_FOLDER_S = 600.0
RUNS_LOOKED_AHEAD = 2500


class CronError(ValueError):
    """The cron fields cannot be used."""


@task(
    name="analyse one recording",
    task_run_name="{item.recording_id}",
    retries=2,
    retry_delay_seconds=[10, 60],
    timeout_seconds=3600,
    cache_policy=NO_CACHE,
)
def analyse_recording_task(item: Work, analyse: Callable[[Work], Analysed]) -> Analysed:
    """Analyse one recording by `analyse`, which writes its parts; repeating it writes the same files."""
    return analyse(item)


def analyse_as_tasks(work: Sequence[Work], reporter: Reporter) -> Iterator[Analysed]:
    """Run one Prefect task per recording, as many at a time as the settings allow, each in a process where they are several.

    A Dask scheduler repeats failed recordings by itself, so it gets them without tasks around them.
    """
    if work and work[0].settings.workers.scheduler:
        yield from nightly.analyse_where_set(work, reporter)
        return
    processes = min(len(work), work[0].settings.workers.processes) if work else 0
    running: deque[tuple[Work, PrefectFuture[Analysed]]] = deque()
    with nightly.analyser(processes) as analyse:
        for item in work:
            running.append((item, analyse_recording_task.submit(item, analyse)))
            if len(running) >= processes:
                yield _finished(*running.popleft(), reporter)
        while running:
            yield _finished(*running.popleft(), reporter)


def analyse_with_progress(work: Sequence[Work], reporter: Reporter) -> Iterator[Analysed]:
    """The same with a progress artifact that the server's pages show while the night goes on."""
    if not work:
        return
    told = f"{len(work)} recordings to analyse"
    shown = create_progress_artifact(progress=0.0, key="burdenline-recordings", description=told)
    assert isinstance(shown, UUID)  # outside of an event loop it is made at once
    for done, analysed in enumerate(analyse_as_tasks(work, reporter), start=1):
        yield analysed
        update_progress_artifact(artifact_id=shown, progress=100.0 * done / len(work))


def _finished(item: Work, future: PrefectFuture[Analysed], reporter: Reporter) -> Analysed:
    analysed = future.result()
    reporter.say(f"analysed {item.recording_id}")
    return analysed


class _RunLog(Silent):
    """Says its lines in the flow run's log."""

    def say(self, text: str) -> None:
        """Log the line."""
        get_run_logger().info(text)


def _can_heal(task: Any, run: Any, state: State) -> bool:
    """A busy folder, a full disk, a share or workers that are away can heal; wrong settings or a failed check cannot."""
    return isinstance(state.result(raise_on_failure=False), (OSError, FolderBusy, WorkersAway, StoreAway))


@task(
    name="bring the folder up to date",
    task_run_name="{folder}",
    retries=2,
    retry_delay_seconds=[300, 1800],
    retry_condition_fn=_can_heal,
)
def refresh_folder_task(folder: Path) -> dict[str, Any]:
    """Run the whole job on a programme folder, one task per recording; returns what it did."""
    outcome = nightly.run(
        folder,
        reporter=_RunLog(),
        wait_s=WAIT_FOR_FOLDER_S,
        analyse_all=analyse_with_progress,
        flow_run=str(flow_run.id or ""),
    )
    return outcome.as_dict()


@flow(name="burdenline nightly", timeout_seconds=NIGHT_S)
def nightly_flow(folder: str) -> State:
    """Run the whole job on a programme folder; the final state tells whether and how it was published."""
    programme = Path(folder)
    result = refresh_folder_task(programme, return_state=True).result(raise_on_failure=False)
    if isinstance(result, dict):
        outcome = result
        _leave_artifacts(programme, outcome)
    elif is_sentence(result):
        outcome = {"outcome": "not_published", "reason": sentence(result)}
    else:
        raise result
    _tell(programme, outcome)
    return _final_state(outcome)


def _final_state(outcome: dict[str, Any]) -> State:
    kind = StateType.FAILED if outcome["outcome"] == "not_published" else StateType.COMPLETED
    name = outcome["outcome"].replace("_", " ").capitalize()
    return State(type=kind, name=name, message=str(outcome.get("reason", name)))


def _tell(programme: Path, outcome: dict[str, Any]) -> None:
    try:
        wishes = settings.load(programme / "programme.toml").notify
    except settings.SettingsError:
        return  # the outcome already says that the settings cannot be read
    failure = notify(wishes, outcome)
    if failure:
        get_run_logger().warning(failure)


def _leave_artifacts(programme: Path, outcome: dict[str, Any]) -> None:
    deliveries = Published(programme / "published").table("deliveries")
    declined = deliveries.filter(deliveries["status"].is_in(["waiting", "quarantined"]))
    create_table_artifact(
        table=declined.select("file_name", "status", "code", "reason").to_dicts(),
        key="burdenline-not-in-the-numbers",
        description="Deliveries that wait or were refused, and why",
    )
    create_markdown_artifact(
        markdown="\n".join(f"- {name}: {value}" for name, value in outcome.items()),
        key="burdenline-outcome",
        description="What the last run did",
    )


def serve_nightly(folder: Path, cron: str, zone: str = "") -> None:
    """Serve the nightly flow on this host until stopped, with a Prefect server of its own where none is named.

    Raises CronError for cron fields that cannot be read, SettingsError for a folder that is no programme or a zone that
    is not known, ServerError where the server does not answer or start, FolderBusy for a folder that is scheduled already.
    """
    programme = settings.load(folder / "programme.toml").programme
    if zone:
        settings.check_zone("--zone", zone)
    zone = zone or programme.zone
    schedule, gap_h = nightly_schedule(cron, zone), longest_gap_h(cron, zone)
    _refuse_dead_server()
    with schedule_lock(folder):
        due.promise(folder, cron, zone, gap_h)
        with _server(folder):
            nightly_flow.serve(
                name=f"{folder.resolve().name} nightly",
                parameters={"folder": str(folder.resolve())},
                schedule=schedule,
                limit=1,
            )


def _refuse_dead_server() -> None:
    """Raise ServerError where a server is named that does not answer."""
    if not (named := PREFECT_API_URL.value()):
        return
    with get_client(sync_client=True) as client:
        if client.api_healthcheck() is not None:
            raise ServerError(
                f"no Prefect server answers at {named}; start it, mend PREFECT_API_URL, or unset it: "
                "the schedule then brings a server of its own"
            )


@contextmanager
def _server(folder: Path) -> Iterator[None]:
    if PREFECT_API_URL.value():
        yield
        return
    with local_server(folder / "logs" / "prefect-server.log") as api, temporary_settings({PREFECT_API_URL: api}):
        yield


def nightly_schedule(cron: str, zone: str) -> Schedule:
    """Turn five cron fields in a time zone into a schedule; raises CronError."""
    try:
        return Cron(cron, timezone=zone)
    except ValueError:
        raise CronError(
            f"--cron {cron!r} cannot be read; expected five fields, minute 0-59, hour 0-23, day, month and day of the "
            'week, for example "0 3 * * *" for every night at three'
        ) from None


def longest_gap_h(cron: str, zone: str) -> float:
    """Most hours between two of the next runs, a day of 25 hours among them."""
    from prefect.server.schemas.schedules import CronSchedule

    schedule = CronSchedule(cron=cron, timezone=zone)
    a_year_on = datetime.now(UTC) + timedelta(days=366)
    try:
        runs = asyncio.run(schedule.get_dates(n=RUNS_LOOKED_AHEAD, end=a_year_on))
        if len(runs) < 2:
            runs = asyncio.run(schedule.get_dates(n=2))
    except ValueError:
        raise CronError(f"--cron {cron!r} names a day that never comes; expected one of the calendar") from None
    return max((b - a).total_seconds() for a, b in pairwise(runs)) / 3600
