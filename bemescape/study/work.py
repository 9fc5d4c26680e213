"""What a worker process does with one case: everything it needs comes with the order, everything it found goes back.

No shared folder is needed: mesh and other files travel as bytes with the order, and the result travels back.
"""

from __future__ import annotations

import os
import socket
import tempfile
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from bemescape.errors import EscapeError
from bemescape.version import __version__

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
    """

    key: str
    name: str
    place: str
    table: Mapping[str, Any]
    files: Mapping[str, bytes]
    version: str


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


#: Solves the case in a folder and leaves the result folder's content there; replaced in tests of the engine.
Solve = Callable[[Order, Path], Mapping[str, Any]]


def solve_order(order: Order, solve: Solve | None = None) -> Outcome:
    """Solve one case on one thread; a failure is part of the outcome, since a study never dies of one case."""
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
            values = (solve or solved_values)(order, folder)
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


def solved_values(order: Order, folder: Path) -> Mapping[str, Any]:
    """Solve the case in `folder`, save the result in `folder/result`, and measure it."""
    from threadpoolctl import threadpool_limits

    from bemescape.case import parse_case
    from bemescape.results.store import save_result
    from bemescape.study.measures import measured
    from bemescape.threads import use_threads

    # One thread a worker: the cases run side by side, and threads within them would only wait for each other.
    with use_threads(1), threadpool_limits(1):
        result = parse_case(order.table, folder=folder, name=order.name, source=order.place).solve()
        save_result(result, folder / "result", pictures=False)
        return measured(result)


def _say_started(order: Order, worker: str) -> None:
    """Tell whoever gave the order; without a scheduler nobody listens."""
    from distributed import get_worker

    try:
        get_worker().log_event(STARTED, {"key": order.key, "by": worker})
    except ValueError:
        return
