"""The workers: dask on this machine, or a scheduler that runs already.

On this machine there is one worker for each run at a time and one more at the desk, which reads uploads and answers
questions to results, so that neither waits for a solve. On a scheduler elsewhere, workers may offer the resources
"run" and "desk"; where none does, tasks go to any.
"""

from __future__ import annotations

import asyncio
import concurrent.futures
import logging
import os
import threading
import time
from collections.abc import Callable
from typing import Any, Literal

from bemescape.service.problems import Refusal
from bemescape.service.settings import Settings
from bemescape.service.tasks import request_stop, warm_up

__all__ = ["Crew", "NoWorkers", "WorkerLost"]

log = logging.getLogger("bemescape.service")

Place = Literal["run", "desk"]
#: What one worker of this machine may use before it is restarted.
_DESK_MEMORY, _RUN_MEMORY = "3 GB", "auto"
_START_S = 120.0
_AGAIN_S = 3.0
#: Set by whoever starts the service, and meant for the workers.
_PASSED = ("BEMESCAPE_THREADS", "NUMBA_CACHE_DIR", "NUMBA_NUM_THREADS")
#: Tasks of the desk go first where both share workers.
_PRIORITY: dict[Place, int] = {"run": 0, "desk": 100}


class WorkerLost(Exception):
    """The worker, or the scheduler, of a task is gone; the task may be done again."""


class NoWorkers(Refusal):
    """Nobody can be given a task now; later somebody may."""

    def __init__(self) -> None:
        super().__init__(503, "the workers are not there yet, or not there any more; ask again in a few seconds")


class Crew:
    """Hands tasks to workers and their answers back."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._ready, self._closing = threading.Event(), threading.Event()
        self._client: Any = None
        self._cluster: Any = None
        self._on_progress: Callable[[str, dict[str, Any]], None] = lambda _key, _event: None
        self._starter = threading.Thread(target=self._keep_connected, name="crew", daemon=True)

    def start(self, on_progress: Callable[[str, dict[str, Any]], None]) -> None:
        """Begin to start the workers; returns at once. `on_progress` gets the key of a task and its event."""
        self._on_progress = on_progress
        self._starter.start()

    @property
    def ready(self) -> bool:
        """Whether tasks can be handed out now: not while a scheduler elsewhere is gone."""
        return self._ready.is_set() and (self._client is None or self._client.status == "running")

    def wait(self, timeout: float) -> bool:
        """Wait until the crew is ready; whether it is."""
        ends = time.monotonic() + timeout
        while not self.ready and time.monotonic() < ends and not self._closing.is_set():
            self._closing.wait(0.1)
        return self.ready

    def close(self) -> None:
        """Stop the workers that were started here."""
        self._closing.set()
        self._starter.join(timeout=30.0)
        self._ready.clear()
        for part in (self._client, self._cluster):
            if part is not None:
                try:
                    part.close(timeout=5)
                except Exception as error:  # noqa: BLE001 (nothing must keep the service from stopping)
                    log.warning("the workers did not stop in order: %s", error)

    def _keep_connected(self) -> None:
        """Connect, and again when a scheduler elsewhere was gone for longer than the client waits for it."""
        while not self._closing.is_set():
            try:
                self._connect()
                while self._client.status != "closed" and not self._closing.is_set():
                    self._closing.wait(1.0)
                if not self._closing.is_set():
                    log.error("the scheduler is gone; looking for it again")
                    self._ready.clear()
            except Exception as error:  # noqa: BLE001 (a scheduler that is down now may be up later)
                log.error("no workers yet: %s", error)
                self._closing.wait(_AGAIN_S)

    def _connect(self) -> None:
        import dask
        from distributed import Client

        logging.getLogger("distributed").setLevel(logging.ERROR)
        # A worker that dies takes its task along: whether it is done again is for the store to decide.
        dask.config.set(
            {
                "distributed.scheduler.allowed-failures": 0,
                "distributed.worker.memory.spill": False,
                "distributed.worker.memory.target": False,
                "distributed.admin.log-length": 100,
                "distributed.scheduler.http.routes": [],
                "distributed.worker.http.routes": [],
                "distributed.nanny.http.routes": [],
                "distributed.comm.timeouts.connect": "60s",
                # A compiled loop holds a busy machine's worker for seconds; that is no news.
                "logging.distributed": "error",
            }
        )
        if self._settings.scheduler is None:
            self._cluster = _workers_here(self._settings.slots)
        self._client = Client(
            self._settings.scheduler if self._cluster is None else self._cluster, set_as_default=False, timeout=20
        )
        self._ready.set()
        log.info("workers are ready")
        if self._settings.scheduler is None:
            self.submit(warm_up, place="desk", key="warm-up")

    # -- tasks -------------------------------------------------------------------------------------

    def submit(
        self, task: Callable[..., Any], *args: Any, place: Place, key: str, watched: bool = False
    ) -> concurrent.futures.Future[Any]:
        """Hand out a task; the future fails with `WorkerLost` if its worker dies.

        With `watched`, progress events of `key` are passed on until the task is over.
        """
        if not self.ready:
            raise NoWorkers
        answer: concurrent.futures.Future[Any] = concurrent.futures.Future()
        if watched:
            self._client.subscribe_topic(key, lambda event: self._on_progress(key, event[1]))
        future = self._client.submit(
            task, *args, key=key, pure=False, priority=_PRIORITY[place], resources=self._resources(place)
        )
        future.add_done_callback(lambda done: self._settle(done, answer, key if watched else None))
        return answer

    def _settle(self, future: Any, answer: concurrent.futures.Future[Any], topic: str | None) -> None:
        import distributed

        try:
            try:
                answer.set_result(future.result(timeout=60))
            except (distributed.KilledWorker, distributed.TimeoutError) as error:
                answer.set_exception(WorkerLost(str(error)))
            except (concurrent.futures.CancelledError, asyncio.CancelledError) as error:
                answer.set_exception(WorkerLost(f"the task was dropped: {error}"))
            except Exception as error:  # noqa: BLE001 (whatever the task raised belongs to its caller)
                answer.set_exception(error)
        finally:
            future.release()
            if topic is not None and self.ready:
                self._client.unsubscribe_topic(topic)

    def _resources(self, place: Place) -> dict[str, int] | None:
        if self._cluster is not None:
            return {place: 1}
        workers = self._client.scheduler_info(n_workers=-1)["workers"].values()
        return {place: 1} if any(place in worker.get("resources", {}) for worker in workers) else None

    async def ask(self, task: Callable[..., Any], *args: Any, key: str, timeout: float) -> Any:
        """Have the desk answer now.

        Raises
        ------
        Refusal
            The input is at fault, the workers are not there, or the time ran out.
        """
        if not self.ready:
            await asyncio.to_thread(self.wait, _START_S)
        try:
            future = self.submit(task, *args, place="desk", key=key)
            answer = await asyncio.wait_for(asyncio.wrap_future(future), timeout)
        except TimeoutError as error:
            self.restart_desk()
            raise Refusal(
                422, f"this took longer than {timeout:g} s, the limit here; make the surface smaller"
            ) from error
        except WorkerLost as error:
            raise Refusal(
                422, "this needed more memory or time than the service gives it; make the surface smaller"
            ) from error
        if "refused" in answer:
            raise Refusal(422, answer["refused"])
        return answer

    def stop(self, key: str, reason: str) -> None:
        """Ask the task of this key to end at its next step."""
        if self.ready:
            self._client.run(request_stop, key, reason, wait=False, on_error="ignore")

    def restart_desk(self) -> None:
        """End a task of the desk that does not end by itself."""
        if self._cluster is not None and self._ready.is_set():
            threading.Thread(target=self._restart_desk, name="desk-restart", daemon=True).start()

    def _restart_desk(self) -> None:
        info = self._client.scheduler_info(n_workers=-1)["workers"]
        desks = [address for address, worker in info.items() if "desk" in worker.get("resources", {})]
        try:
            self._client.restart_workers(desks, timeout=30, raise_for_error=False)
        except Exception as error:  # noqa: BLE001 (logged; the nanny keeps trying)
            log.error("the desk did not restart: %s", error)

    def restart_worker_of(self, key: str) -> None:
        """End the worker that computes this task and does not stop when asked to."""
        try:
            holders = self._client.processing()
            addresses = [address for address, keys in holders.items() if key in keys]
            self._client.restart_workers(addresses, timeout=30, raise_for_error=False)
        except Exception as error:  # noqa: BLE001 (logged; tried again at the next round)
            log.error("the worker of %s did not restart: %s", key, error)


def _workers_here(slots: int) -> Any:
    """A scheduler in this process and workers in their own, on loopback only."""
    from distributed import Nanny, Scheduler, SpecCluster

    threads = max(1, (os.cpu_count() or 1) // slots)
    common = {
        "nthreads": 1,
        "host": "127.0.0.1",
        "dashboard": False,
        "silence_logs": logging.ERROR,
        "env": {
            "BEMESCAPE_THREADS": str(threads),
            **{name: os.environ[name] for name in _PASSED if name in os.environ},
        },
    }
    workers: dict[str, Any] = {
        f"run-{number}": {
            "cls": Nanny,
            "options": {**common, "resources": {"run": 1}, "memory_limit": _RUN_MEMORY},
        }
        for number in range(slots)
    }
    workers["desk"] = {
        "cls": Nanny,
        "options": {**common, "nthreads": 2, "resources": {"desk": 2}, "memory_limit": _DESK_MEMORY},
    }
    options = {"host": "127.0.0.1", "port": 0, "dashboard": False, "dashboard_address": "127.0.0.1:0"}
    scheduler = {"cls": Scheduler, "options": options}
    return SpecCluster(workers=workers, scheduler=scheduler, silence_logs=logging.ERROR, name="bemescape")
