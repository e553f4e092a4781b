"""What a run tells the person who started it: bars on a terminal, plain lines elsewhere, nothing with --json."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from typing import Protocol


class Reporter(Protocol):
    """Where a run says what it does."""

    def say(self, text: str) -> None:
        """Say one line."""

    def recording(self, recording_id: str, hours: float) -> AbstractContextManager[Callable[[float], None]]:
        """Open the progress of one recording of `hours` of signal; the body calls the value with hours done."""


class Silent:
    """Says nothing."""

    def say(self, text: str) -> None:
        """Swallow the line."""

    @contextmanager
    def recording(self, recording_id: str, hours: float) -> Iterator[Callable[[float], None]]:
        """Count nothing."""
        yield lambda done_h: None


SILENT: Reporter = Silent()


class Lines:
    """One plain line per step and per finished recording, for logs."""

    def say(self, text: str) -> None:
        """Print the line at once."""
        print(text, file=sys.stderr, flush=True)

    @contextmanager
    def recording(self, recording_id: str, hours: float) -> Iterator[Callable[[float], None]]:
        """Print hours of signal and speed when the recording is done."""
        begun = time.monotonic()
        yield lambda done_h: None
        speed = hours / max(time.monotonic() - begun, 1e-3)
        self.say(f"  analysed {recording_id}: {hours:.1f} h of signal, {speed:,.0f} h per second")


class Bars(Lines):
    """A bar per recording with hours of signal per second."""

    @contextmanager
    def recording(self, recording_id: str, hours: float) -> Iterator[Callable[[float], None]]:
        """Draw the bar and move it as hours are done."""
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

        columns = (
            TextColumn("  {task.description}"),
            BarColumn(),
            TextColumn("{task.completed:.1f} of {task.total:.1f} h"),
            TextColumn("{task.fields[speed]:,.0f} h/s"),
            TimeRemainingColumn(),
        )
        with Progress(*columns) as progress:
            task = progress.add_task(recording_id, total=hours, speed=0.0)

            def advance(done_h: float) -> None:
                progress.advance(task, done_h)
                state = progress.tasks[0]
                progress.update(task, speed=state.completed / max(state.elapsed or 0.0, 1e-3))

            yield advance


def reporter(*, as_json: bool) -> Reporter:
    """Choose: nothing when a program reads the output, bars on a terminal, lines otherwise."""
    if as_json:
        return SILENT
    return Bars() if sys.stderr.isatty() else Lines()
