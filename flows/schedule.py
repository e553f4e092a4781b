"""The nightly job as Prefect flows: the only module that knows Prefect.

Thin wrappers around `flows.nightly`; a recording is one task, so a failed one is tried again without the others.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from pathlib import Path
from zoneinfo import ZoneInfo

# Read by Prefect when it is imported: nothing is sent anywhere, and a slow host gets time to start the local server.
os.environ.setdefault("DO_NOT_TRACK", "1")
os.environ.setdefault("PREFECT_SERVER_ANALYTICS_ENABLED", "false")
os.environ.setdefault("PREFECT_CLOUD_ENABLE_ORCHESTRATION_TELEMETRY", "false")
os.environ.setdefault("PREFECT_SERVER_EPHEMERAL_STARTUP_TIMEOUT_SECONDS", "120")

from prefect import flow, get_run_logger, task
from prefect.artifacts import create_table_artifact
from prefect.schedules import Cron, Schedule
from prefect.states import Completed, State

from flows import nightly, settings
from flows.nightly import Outcome, Work
from flows.progress import Reporter, Silent


class CronError(ValueError):
    """The cron fields or the zone cannot be used."""


@task(name="analyse one recording", retries=2, retry_delay_seconds=[10, 60], task_run_name="{item.recording_id}")
def analyse_recording_task(item: Work) -> dict:
    """Analyse one recording and write its parts; repeating it writes the same files."""
    return nightly.analyse_one(item)


def analyse_as_tasks(work: Sequence[Work], reporter: Reporter) -> Iterator[dict]:
    """Run one Prefect task per recording; yields loads as they are done."""
    futures = [analyse_recording_task.submit(item) for item in work]
    for item, future in zip(work, futures, strict=True):
        loads = future.result()
        reporter.say(f"analysed {item.recording_id}")
        yield loads


class _RunLog(Silent):
    """Says its lines in the flow run's log."""

    def say(self, text: str) -> None:
        """Log the line."""
        get_run_logger().info(text)


@flow(name="burdenline nightly", flow_run_name="{folder}", timeout_seconds=12 * 3600)
def nightly_flow(folder: str) -> State:
    """Run the whole job on a programme folder; the final state tells whether and how it was published."""
    outcome = nightly.run(Path(folder), reporter=_RunLog(), wait_s=600.0, analyse_all=analyse_as_tasks)
    create_table_artifact(
        table=[outcome.as_dict()], key="burdenline-deliveries", description="What was new, waiting and refused"
    )
    return _final_state(outcome)


def _final_state(outcome: Outcome) -> State:
    return Completed(name=outcome.outcome.replace("_", " ").capitalize(), message=str(outcome.as_dict()))


def serve_nightly(folder: Path, cron: str, zone: str = "") -> None:
    """Serve the nightly flow on this host until stopped; needs no server to be installed.

    Raises CronError for cron fields that cannot be read and SettingsError for a folder that is no programme or a zone
    that is not known.
    """
    programme = settings.load(folder / "programme.toml").programme
    if zone:
        settings.check_zone("--zone", zone)
    schedule = _schedule(cron, zone or programme.zone)
    nightly_flow.serve(
        name=f"{folder.resolve().name} nightly",
        parameters={"folder": str(folder.resolve())},
        schedule=schedule,
        limit=1,
    )


def _schedule(cron: str, zone: str) -> Schedule:
    try:
        return Cron(cron, timezone=str(ZoneInfo(zone)))
    except ValueError:
        raise CronError(
            f'--cron {cron!r} cannot be read; expected five fields, for example "0 3 * * *" for every night at three'
        ) from None
