"""Recordings analysed by the workers of a Dask scheduler: they write parts, this process alone commits them.

Every worker has the same burdenline installed and sees the programme folder under the same path, or the lake's store.
"""

from __future__ import annotations

import logging
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from flows import nightly
from flows.detect import fingerprint_of
from flows.nightly import Analysed, Work
from flows.progress import Reporter
from warehouse.cache import noted_url, settle
from warehouse.store import Store

if TYPE_CHECKING:
    from distributed import Client, Future

CONNECT_S = 20.0
WORKERS_AWAY_S = 60.0
RETRIES = 1


class WorkersError(RuntimeError):
    """Recordings cannot be analysed on the Dask scheduler; what was committed before stays, the next run goes on."""


class WorkersAway(WorkersError):
    """Scheduler or workers are not there at the moment: the only trouble with them that can heal by itself."""


def analyse_on_workers(work: Sequence[Work], reporter: Reporter) -> Iterator[Analysed]:
    """Analyse recordings on the scheduler that the settings name; yields them as they are done.

    A recording whose worker dies is given to another one; doing it twice writes the same files. Raises WorkersError.
    """
    if not work:
        return
    address = work[0].settings.workers.scheduler
    with _connected(address) as client:
        _await_workers(client, address)
        # Not pure: each submission has a key of its own, so that programmes that share a scheduler stay apart.
        running = {client.submit(analyse_seen, item, pure=False, retries=RETRIES): item for item in work}
        for number, future in enumerate(_as_done(client, list(running), address), start=1):
            item = running[future]
            yield _analysed(future, item, address)
            reporter.say(f"  analysed {item.recording_id} ({number} of {len(work)})")


def analyse_seen(item: Work) -> Analysed:
    """Analyse one recording in a worker: in the folder where the worker sees it, else out of and into the lake's store."""
    lake, url = item.folder / "lake", item.settings.lake.store
    if (lake / "ledger").is_dir() and noted_url(lake) == url:
        return nightly.analyse_one(item)
    if not url:
        raise WorkersError(
            f"a worker does not see {item.folder}; share the folder with every worker under the same path, "
            "or keep the lake in a store ([lake] store)"
        )
    with tempfile.TemporaryDirectory(prefix="burdenline-") as scratch:
        elsewhere = replace(item, folder=Path(scratch))
        settle(elsewhere.folder / "lake", url)
        analysed = nightly.analyse_one(elsewhere)
        made = [part.path for parts in analysed.loads.values() for part in parts]
        Store(url).push(elsewhere.folder / "lake", made)
        return analysed


def _connected(address: str) -> Client:
    try:
        from distributed import Client
    except ImportError:
        raise WorkersError(
            f"[workers] scheduler = {address!r} needs the extra dask; install burdenline[dask], or empty the setting"
        ) from None
    # The stack traces that its loggers print of a lost connection say less than the sentences below.
    logging.getLogger("distributed.client").setLevel(logging.CRITICAL)
    try:
        return Client(address, timeout=CONNECT_S)
    except (OSError, ValueError):
        raise WorkersAway(
            f"no Dask scheduler answers at {address} within {CONNECT_S:g} s; start `dask scheduler` there, "
            "or empty [workers] scheduler to analyse on this host"
        ) from None


def _await_workers(client: Client, address: str) -> None:
    try:
        client.wait_for_workers(1, timeout=WORKERS_AWAY_S)
    except TimeoutError:
        _refuse_without_workers(client, address)


def _refuse_without_workers(client: Client, address: str) -> None:
    """Raise WorkersAway unless a worker is there that begins what it is given."""
    states = {worker["status"] for worker in client.scheduler_info()["workers"].values()}
    if "running" in states:
        return
    if "paused" in states:
        raise WorkersAway(
            f"the workers at {address} have paused for want of memory; give them more (--memory-limit), "
            "or empty [workers] scheduler to analyse on this host"
        ) from None
    raise WorkersAway(
        f"the scheduler at {address} has had no worker for {WORKERS_AWAY_S:g} s; start `dask worker`"
    ) from None


def _as_done(client: Client, running: Sequence[Future], address: str) -> Iterator[Future]:
    """Futures in the order in which they end, however they end; gives up when every worker stays away."""
    from distributed import CancelledError, wait

    while running:
        try:
            wait(running, timeout=WORKERS_AWAY_S, return_when="FIRST_COMPLETED")
        except CancelledError:
            pass  # the future that was cancelled says so when it is asked for its result
        except TimeoutError:
            _refuse_without_workers(client, address)
        ended = {future for future in running if future.done()}
        yield from ended
        running = [future for future in running if future not in ended]


def _analysed(future: Future, item: Work, address: str) -> Analysed:
    from distributed import CancelledError, KilledWorker

    try:
        analysed = future.result()
    except CancelledError:
        raise WorkersAway(f"the connection to the Dask scheduler at {address} was lost; run again") from None
    except (KilledWorker, MemoryError):
        raise WorkersError(
            f"{item.recording_id} ended every worker that tried it, out of memory perhaps; give the workers more, "
            "or empty [workers] scheduler to analyse on this host"
        ) from None
    expected = ("fingerprints", fingerprint_of(item.settings))
    if expected not in analysed.loads:
        raise WorkersError(f"the workers at {address} run another burdenline; install this one there")
    return analysed
