"""Progress on stderr: one live line on a terminal, a plain line per stage elsewhere."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import typer

from bemescape.progress import Progress, ProgressEvent, silent

__all__ = ["Stopped", "reporting"]

#: Plain output repeats a stage that is still running after this many seconds.
REPEAT_S = 10.0


class Stopped(Exception):
    """Ctrl-C after something was saved; the message says what."""


@contextmanager
def reporting(*, quiet: bool) -> Iterator[Progress]:
    """A receiver of progress events for the duration of one long call."""
    if quiet:
        yield silent
    elif sys.stderr.isatty():
        with _live_line() as receive:
            yield receive
    else:
        lines = PlainLines()
        yield lines
        lines.close()


class PlainLines:
    """Write a line when a stage begins, now and then while it runs, and its last detail when it ends."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._latest: ProgressEvent | None = None
        self._written: ProgressEvent | None = None
        self._written_at = -REPEAT_S

    def __call__(self, event: ProgressEvent) -> None:
        """Receive one event."""
        if self._latest is not None and self._latest.stage != event.stage:
            self.close()
        self._latest = event
        new_stage = self._written is None or self._written.stage != event.stage
        if new_stage or self._clock() - self._written_at >= REPEAT_S:
            self._write(event)

    def close(self) -> None:
        """Write the last detail of the stage that ends."""
        if self._latest is not None and self._latest != self._written and self._latest.detail:
            self._write(self._latest)

    def _write(self, event: ProgressEvent) -> None:
        typer.echo(_text(event), err=True)
        self._written, self._written_at = event, self._clock()


def _text(event: ProgressEvent) -> str:
    done = "" if event.done is None else f" {event.done:.0%}"
    return f"{event.stage}{done}{': ' if event.detail else ''}{event.detail}"


@contextmanager
def _live_line() -> Iterator[Progress]:
    from rich.console import Console
    from rich.progress import BarColumn, SpinnerColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    columns = (
        SpinnerColumn(),
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=24),
        TextColumn("{task.fields[detail]}", markup=False),
        TimeElapsedColumn(),
    )
    with Bars(*columns, console=Console(stderr=True), transient=True) as bars:
        task = bars.add_task("starting", total=None, detail="")

        def receive(event: ProgressEvent) -> None:
            total = None if event.done is None else 1.0
            bars.update(task, description=event.stage, total=total, completed=event.done or 0.0, detail=event.detail)

        yield receive
