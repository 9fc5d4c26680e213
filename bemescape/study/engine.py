"""Solving the cases of a study on the processes of a dask cluster, here or elsewhere.

The study's own process hands out orders and writes what comes back, so that workers share nothing with it: a worker
may die at any moment, and its case is given to another one.
"""

from __future__ import annotations

import contextlib
import logging
import os
import queue
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from bemescape.errors import SettingsError
from bemescape.study.events import StudyEvents, unheard
from bemescape.study.plan import PlannedCase
from bemescape.study.work import STARTED, Order, Outcome, Solve, solve_order
from bemescape.version import __version__

if TYPE_CHECKING:
    from distributed import Client, Future

__all__ = ["Crew", "Engine", "crew", "default_workers", "refuse_unguarded_script"]

#: Part of the free memory that a study may take.
MEMORY_PART = 0.8
#: A case is given up after so many workers died while they had it.
MOST_DEATHS = 3
#: Without any worker for so long, the study stops instead of waiting for ever.
PATIENCE_S = 60.0
_TICK_S = 0.5
#: An outcome whose worker dies on the way is waited for so long at a time.
_TRAVEL_S = 20.0
#: Local workers that have been missing for so long are replaced; most are started again at once by themselves.
_MISSING_S = 30.0
_ONE_THREAD = {"BEMESCAPE_THREADS": "1"} | {
    f"{library}_NUM_THREADS": "1" for library in ("NUMBA", "OMP", "OPENBLAS", "MKL")
}


@dataclass(frozen=True)
class Crew:
    """Workers to give orders to.

    Attributes
    ----------
    client : distributed.Client
    workers : int
        Processes of one thread at the start.
    memory_mb : float
        What all cases that run side by side may take together.
    address : str
        Of the scheduler.
    replace : callable
        Starts so many workers more; does nothing for workers that others have started.
    """

    client: Client
    workers: int
    memory_mb: float
    address: str
    replace: Callable[[int], object] = lambda _count: None


def default_workers(cases: int) -> int:
    """One worker for each core that this process may use, and no more than there are cases."""
    available = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return max(1, min(available, cases))


@contextmanager
def crew(
    *, workers: int, scheduler: str | None = None, memory_mb: float | None = None, patience_s: float = PATIENCE_S
) -> Iterator[Crew]:
    """A local cluster of `workers` processes, or the workers of an existing scheduler.

    Raises
    ------
    SettingsError
        The scheduler cannot be reached or has no workers, or processes cannot be started.
    """
    import dask
    import distributed

    settings = {
        "distributed.scheduler.allowed-failures": MOST_DEATHS,
        # A worker that holds a large mesh is not to be paused or killed by a share of the memory: the study counts.
        "distributed.worker.memory.target": False,
        "distributed.worker.memory.spill": False,
        "distributed.worker.memory.pause": False,
        "distributed.worker.memory.terminate": False,
        "distributed.comm.timeouts.connect": "10s",
        "distributed.admin.large-graph-warning-threshold": "1GB",
        "logging": {"distributed": "critical"},
    }
    with dask.config.set(settings):
        _quiet_distributed()
        if scheduler is None:
            try:
                cluster = distributed.LocalCluster(
                    n_workers=workers,
                    threads_per_worker=1,
                    processes=True,
                    dashboard_address=":0",
                    memory_limit=None,
                    silence_logs=logging.CRITICAL,
                    env=_ONE_THREAD,
                    preload=["bemescape.study.worker_setup"],
                )
            except (OSError, RuntimeError, TimeoutError) as error:
                raise SettingsError(
                    f"no worker processes can be started here: {_line(error)}; a script must call run_study under "
                    'if __name__ == "__main__":'
                ) from error
            client = distributed.Client(cluster, set_as_default=False)
            try:
                budget = memory_mb if memory_mb is not None else MEMORY_PART * _free_mb()
                yield Crew(
                    client,
                    workers,
                    budget,
                    cluster.scheduler_address,
                    # The places of those that could not be started again stay taken: one more place for each.
                    lambda count: cluster.scale(len(cluster.worker_spec) + count),
                )
            finally:
                # A busy machine may not end its workers in time; they end with this process, and all is stored.
                with contextlib.suppress(TimeoutError, OSError, RuntimeError):
                    client.close()
                with contextlib.suppress(TimeoutError, OSError, RuntimeError):
                    cluster.close()
            return
        try:
            client = distributed.Client(scheduler, timeout="10s", set_as_default=False)
        except (OSError, ValueError, TimeoutError, RuntimeError, ImportError) as error:
            raise SettingsError(
                f"--scheduler is {scheduler!r}, and nothing answers there ({_line(error)}); give the address that the "
                "scheduler printed, like tcp://host:8786"
            ) from error
        with client:
            try:
                client.wait_for_workers(1, timeout=patience_s)
            except TimeoutError as error:
                raise SettingsError(f"the scheduler {scheduler} has no workers; start some and run again") from error
            found = client.scheduler_info(n_workers=-1)["workers"].values()
            limits = [float(worker["memory_limit"]) / 1e6 for worker in found if worker["memory_limit"]]
            budget = memory_mb if memory_mb is not None else (sum(limits) if limits else float("inf"))
            yield Crew(client, len(found), budget, scheduler)


def _quiet_distributed() -> None:
    """Lost connections are reported by the study in its own words."""
    for name in ("distributed", "tornado", "asyncio"):
        logging.getLogger(name).setLevel(logging.CRITICAL)


def _line(error: BaseException) -> str:
    return " ".join(str(error).split())[:200] or type(error).__name__


def _free_mb() -> float:
    import psutil

    return float(psutil.virtual_memory().available) / 1e6


def refuse_unguarded_script() -> None:
    """A worker that is being started runs the caller's script again; there it must not start workers itself."""
    import multiprocessing

    if getattr(multiprocessing.current_process(), "_inheriting", False):
        raise SettingsError(
            "run_study is called at the top of a script that worker processes load too; put the call under "
            'if __name__ == "__main__":'
        )


@dataclass
class Engine:
    """One run over the cases that are not finished yet.

    Attributes
    ----------
    crew : Crew
    keep : callable
        Stores an outcome before it counts.
    events : callable
    solve : callable or None
        Replaces the solver; for tests of the engine.
    """

    crew: Crew
    keep: Callable[[Outcome, PlannedCase], None]
    events: StudyEvents = unheard
    solve: Solve | None = None
    patience_s: float = PATIENCE_S
    failures: dict[str, str] = field(default_factory=dict)
    _arrived: queue.SimpleQueue[tuple[str, Any]] = field(default_factory=queue.SimpleQueue)
    _running: dict[str, tuple[list[PlannedCase], Future]] = field(default_factory=dict)
    _begun: dict[str, str] = field(default_factory=dict)
    _lost: set[str] = field(default_factory=set)
    _recent: deque[tuple[float, float]] = field(default_factory=lambda: deque(maxlen=16))

    def run(self, cases: Sequence[PlannedCase]) -> None:
        """Solve all; returns when each is stored or has failed.

        Raises
        ------
        SettingsError
            An outcome cannot be stored, or all workers are gone.
        KeyboardInterrupt
            Outcomes that had arrived are stored first.
        """
        twins: dict[str, list[PlannedCase]] = {}
        for case in cases:
            twins.setdefault(case.solve_key, []).append(case)
        # The longest first: what is left to wait for at the end is then short.
        waiting = sorted(twins.values(), key=lambda group: -group[0].estimated_s)
        total, last_tick, last_seen = len(cases), 0.0, time.monotonic()
        last_complete = last_seen
        client = self.crew.client
        client.subscribe_topic(STARTED, lambda event: self._arrived.put(("started", event[1])))
        try:
            while waiting or self._running:
                self._hand_out(waiting)
                try:
                    kind, content = self._arrived.get(timeout=_TICK_S)
                    self._take(kind, content)
                except queue.Empty:
                    pass
                now = time.monotonic()
                if now - last_tick >= _TICK_S:
                    last_tick = now
                    self._tell_progress(total, waiting)
                    self._ask_again()
                    there = self._workers()
                    if there >= self.crew.workers:
                        last_complete = now
                    elif now - last_complete > _MISSING_S:
                        self.crew.replace(self.crew.workers - there)
                        last_complete = now
                    if there > 0:
                        last_seen = now
                    elif now - last_seen > self.patience_s:
                        raise SettingsError(
                            f"no worker has been there for {self.patience_s:.0f} s; finished cases are kept, so start "
                            "workers and run the same command again"
                        )
        finally:
            self._let_go()

    def _hand_out(self, waiting: list[list[PlannedCase]]) -> None:
        """Give out solves: one beyond the workers that there are, and none beyond the memory with the others."""
        workers = max(1, self._workers())
        while waiting and len(self._running) < workers + 1:
            sizes = sorted((group[0].estimated_mb for group, _ in self._running.values()), reverse=True)
            fits = next(
                (
                    number
                    for number, group in enumerate(waiting)
                    if not sizes
                    or sum(sorted([*sizes, group[0].estimated_mb], reverse=True)[:workers]) <= self.crew.memory_mb
                ),
                None,
            )
            if fits is None:
                return
            self._submit(waiting.pop(fits))

    def _submit(self, group: list[PlannedCase]) -> None:
        case = group[0]
        try:
            files = {name: path.read_bytes() for name, path in case.files.items()}
        except OSError as error:
            self._fail(group, f"{case.shape.place}: {error.filename} cannot be read: {error.strerror}")
            return
        twins = tuple((twin.key, twin.table) for twin in group[1:])
        order = Order(case.key, case.shape.name, case.shape.place, case.table, files, __version__, twins)
        future = self.crew.client.submit(solve_order, order, self.solve, key=f"case-{case.key}", pure=False)
        self._running[case.key] = (group, future)
        future.add_done_callback(lambda done, key=case.key: self._arrived.put(("done", (key, done))))

    def _take(self, kind: str, content: Any) -> None:
        if kind == "started":
            self._take_start(content["key"], content["by"])
            return
        key, future = content
        if key not in self._running:
            return
        group, _ = self._running[key]
        if future.status == "finished":
            try:
                outcomes = future.result(timeout=_TRAVEL_S)
            except TimeoutError:
                self._lost.add(key)
                return
            except Exception as error:  # noqa: BLE001 - solved again after its worker was lost, and now it fails
                self._end(key)
                self._fail(group, f"{group[0].shape.place}: {_why(error)}")
                return
            self._end(key)
            self._receive(group, outcomes)
        elif future.status == "error":
            self._end(key)
            self._fail(group, f"{group[0].shape.place}: {_why(future.exception())}")
        elif future.status in ("lost", "pending"):
            self._lost.add(key)
            return
        else:
            raise SettingsError(
                f"the scheduler {self.crew.address} is gone; finished cases are kept, so start it and run the same "
                "command again"
            )
        future.release()

    def _end(self, key: str) -> None:
        group, _ = self._running.pop(key)
        self._lost.discard(key)
        for case in group:
            self._begun.pop(case.key, None)

    def _ask_again(self) -> None:
        """Outcomes whose worker died before they had travelled are solved again by the scheduler; take those."""
        for key in [key for key in self._lost if self._running[key][1].status not in ("lost", "pending")]:
            self._lost.discard(key)
            self._arrived.put(("done", (key, self._running[key][1])))

    def _take_start(self, key: str, worker: str) -> None:
        case = next((case for group, _ in self._running.values() for case in group if case.key == key), None)
        if case is None:
            return
        if key in self._begun:
            self.events({"event": "worker_lost", "case": case.name, "worker": self._begun[key]})
        self._begun[key] = worker
        self.events({"event": "started", "case": case.name, "worker": worker})

    def _receive(self, group: Sequence[PlannedCase], outcomes: Sequence[Outcome]) -> None:
        self._recent.append((group[0].estimated_s, sum(outcome.seconds for outcome in outcomes)))
        for case, outcome in zip(group, outcomes, strict=True):
            if outcome.failure:
                self._fail([case], outcome.failure)
                continue
            self.keep(outcome, case)
            self.events(
                {
                    "event": "finished",
                    "case": case.name,
                    "mean_time_s": outcome.values.get("mean_time_s"),
                    "seconds": round(outcome.seconds, 3),
                }
            )

    def _fail(self, group: Sequence[PlannedCase], reason: str) -> None:
        for case in group:
            self.failures[case.key] = reason
            self.events({"event": "failed", "case": case.name, "reason": reason})

    def _tell_progress(self, total: int, waiting: Sequence[Sequence[PlannedCase]]) -> None:
        left = [*waiting, *(group for group, _ in self._running.values())]
        seconds = self._pace() * sum(group[0].estimated_s for group in left)
        seconds /= max(1, min(self._workers(), len(left) or 1))
        running = [case.name for group, _ in self._running.values() for case in group if case.key in self._begun]
        self.events(
            {
                "event": "progress",
                "done": total - sum(len(group) for group in left),
                "cases": total,
                "failed": len(self.failures),
                "running": running,
                "left_s": round(seconds, 1),
            }
        )

    def _pace(self) -> float:
        """Seconds taken per second estimated, of the last cases: the first ones also loaded and compiled the solver."""
        if not self._recent:
            return 1.0
        return sum(taken for _, taken in self._recent) / sum(estimated for estimated, _ in self._recent)

    def _workers(self) -> int:
        try:
            return len(self.crew.client.scheduler_info(n_workers=-1)["workers"])
        except (OSError, ValueError, KeyError, RuntimeError):
            return 0

    def _let_go(self) -> None:
        """Store what has arrived, cancel the rest."""
        while True:
            try:
                kind, content = self._arrived.get_nowait()
            except queue.Empty:
                break
            if kind == "done" and content[1].status == "finished":
                self._take(kind, content)
        for _, future in self._running.values():
            future.cancel(reason="the study stops", msg="the study stops", force=True)
        self._running.clear()


def _why(error: BaseException | None) -> str:
    import distributed

    if isinstance(error, distributed.KilledWorker):
        return (
            f"{MOST_DEATHS + 1} workers died while they solved it, most likely for want of memory; give each more "
            "(fewer workers), or a coarser mesh"
        )
    return f"the order could not be carried out: {type(error).__name__}: {_line(error) if error else ''}"
