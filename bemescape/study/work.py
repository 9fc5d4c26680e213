"""What a worker process does with one case: everything it needs comes with the order, everything it found goes back.

No shared folder is needed: mesh and other files travel as bytes with the order, and the result travels back.
"""

from __future__ import annotations

import math
import os
import socket
import tempfile
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bemescape.errors import EscapeError
from bemescape.version import __version__

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["STARTED", "Order", "Outcome", "solve_order"]

#: Topic of the events by which a worker says that it has begun a case.
STARTED = "bemescape-case-started"


@dataclass(frozen=True)
class Order:
    """One case to solve.

    Attributes
    ----------
    key, name : str
    place : str
        Row or pattern that names the shape, for messages.
    table : mapping
        The case file.
    files : mapping of str to bytes
        The files it names.
    version : str
        Of the program that gives the order.
    twins : tuple of (str, mapping)
        Keys and case files that differ from this one by D alone, where every time is in proportion to 1/D: they are
        answered from the same solve.
    """

    key: str
    name: str
    place: str
    table: Mapping[str, Any]
    files: Mapping[str, bytes]
    version: str
    twins: tuple[tuple[str, Mapping[str, Any]], ...] = ()

    @property
    def parts(self) -> tuple[Order, ...]:
        """The order and its twins, each by itself."""
        alone = replace(self, twins=())
        return (alone, *(replace(alone, key=key, table=table) for key, table in self.twins))


@dataclass(frozen=True)
class Outcome:
    """What became of an order.

    Attributes
    ----------
    key : str
    values : mapping of str to number
        Row of the table; empty for a failure.
    files : mapping of str to bytes
        Content of the result folder.
    failure : str
        One sentence; empty for a success.
    seconds : float
        From receiving the order to handing back, without the travel.
    worker : str
        Host and process.
    """

    key: str
    values: Mapping[str, Any] = field(default_factory=dict)
    files: Mapping[str, bytes] = field(default_factory=dict)
    failure: str = ""
    seconds: float = 0.0
    worker: str = ""


#: Answers one case: writes its result into the folder "result" and returns its row; replaced in tests of the engine.
Solve = Callable[[Order, Path], Mapping[str, Any]]


def solve_order(order: Order, solve: Solve | None = None) -> list[Outcome]:
    """Solve one case and its twins on one thread.

    A failure is part of the outcome, since a study never dies of one case.
    """
    chosen = solve or _Solver()
    return [_outcome(part, chosen) for part in order.parts]


def _outcome(order: Order, solve: Solve) -> Outcome:
    began = time.perf_counter()
    worker = f"{socket.gethostname()} process {os.getpid()}"
    _say_started(order, worker)
    if order.version != __version__:
        failure = f"{worker} runs bemescape {__version__}, the study {order.version}; install one version everywhere"
        return Outcome(order.key, failure=failure, worker=worker)
    values: Mapping[str, Any] = {}
    files: dict[str, bytes] = {}
    failure = ""
    with tempfile.TemporaryDirectory(prefix="bemescape-") as name:
        folder = Path(name)
        try:
            for file, content in order.files.items():
                (folder / file).write_bytes(content)
            result = folder / "result"
            result.mkdir()
            values = solve(order, folder)
            files = {path.name: path.read_bytes() for path in sorted(result.iterdir())}
        except EscapeError as error:
            failure = str(error)
        except MemoryError:
            failure = "the memory of the worker did not suffice; give more per worker (fewer workers)"
        except Exception as error:  # noqa: BLE001 (an unforeseen fault of one case must not end the study)
            failure = f"unforeseen fault, please report: {type(error).__name__}: {error}"
        if failure:
            failure = f"{order.place}: {' '.join(failure.replace(f'{name}{os.sep}', '').split())}"
    seconds = time.perf_counter() - began
    return Outcome(order.key, {} if failure else values, {} if failure else files, failure, seconds, worker)


class _Solver:
    """Solves at D = 1 where times only scale with D, and keeps what the twins have in common."""

    def __init__(self) -> None:
        self._known: EscapeResult | None = None
        self._lengths: Mapping[str, float] | None = None

    def __call__(self, order: Order, folder: Path) -> Mapping[str, Any]:
        from threadpoolctl import threadpool_limits

        from bemescape.results.store import save_result
        from bemescape.study.measures import measured, shape_lengths
        from bemescape.threads import use_threads

        # One thread a worker: the cases run side by side, and threads within them would only wait for each other.
        with use_threads(1), threadpool_limits(1):
            result = self._result(order, folder)
            save_result(result, folder / "result", pictures=False)
            if self._known is not None and self._lengths is None:
                self._lengths = shape_lengths(self._known)
            return measured(result, self._lengths)

    def _result(self, order: Order, folder: Path) -> EscapeResult:
        from bemescape.case import parse_case

        case = parse_case(order.table, folder=folder, name=order.name, source=order.place)
        if not all(math.isinf(window.permeability_um_s) for window in case.document.window):
            return case.solve()
        if self._known is None:
            # Always at D = 1, so that a case has the same digits with twins and without.
            table = {**order.table, "motion": {"diffusion": "1 um^2/s"}}
            self._known = parse_case(table, folder=folder, name=order.name, source=order.place).solve()
        return self._known.with_diffusion(case.document.motion.diffusion_um2_s)


def _say_started(order: Order, worker: str) -> None:
    """Tell whoever gave the order; without a scheduler nobody listens."""
    from distributed import get_worker

    try:
        get_worker().log_event(STARTED, {"key": order.key, "by": worker})
    except ValueError:
        return
