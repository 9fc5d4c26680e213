"""The queue at work: what is computed next, and what becomes of it.

One thread looks at the store whenever something changes and hands out as many tasks as there are slots: pictures of
finished runs first, then runs in fair order, and second opinions while nothing else waits.
"""

from __future__ import annotations

import concurrent.futures
import json
import logging
import threading
import time
from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any, Literal

from bemescape.service import tasks
from bemescape.service.crew import Crew, NoWorkers, WorkerLost
from bemescape.service.events import Hub
from bemescape.service.models import Run
from bemescape.service.orders import case_of_run
from bemescape.service.settings import Settings
from bemescape.service.store import Store

__all__ = ["Jobs", "result_files"]

log = logging.getLogger("bemescape.service")

Kind = Literal["solve", "draw", "check"]
_LOOK_EVERY_S = 2.0
#: After a request to stop, a worker has this long to reach its next step; a Galerkin assembly takes about a minute.
_PATIENCE_S = 120.0
_DRAW_S = 600.0
_OUR_FAULT = "the service failed at this; its log says why"
#: Where the store keeps the state of each kind of work.
_COLUMN: Mapping[Kind, Literal["state", "pictures", "opinion"]] = {
    "solve": "state",
    "draw": "pictures",
    "check": "opinion",
}
#: What a result is loaded from.
_RESULT = ("summary.json", "result.npz")


@dataclass
class _Active:
    kind: Kind
    run_id: str
    began: float
    stopped_at: float | None = None
    stop_state: str = "failed"
    stop_reason: str = ""


class Jobs:
    """Hands out runs until the service stops."""

    def __init__(self, settings: Settings, store: Store, crew: Crew, hub: Hub) -> None:
        self._settings, self._store, self._crew, self._hub = settings, store, crew, hub
        self._wake, self._closing = threading.Event(), threading.Event()
        self._lock = threading.Lock()
        self._active: dict[str, _Active] = {}
        self._thread = threading.Thread(target=self._work, name="jobs", daemon=True)
        self._swept_at = 0.0
        self._lost_before: set[tuple[Kind, str]] = set()

    def start(self) -> None:
        """Begin; tasks wait until the crew is ready."""
        self._thread.start()

    def close(self) -> None:
        """Hand out nothing more. What computes is begun again by the next service."""
        self._closing.set()
        self._wake.set()
        self._thread.join(timeout=10.0)

    def wake(self) -> None:
        """Something was queued."""
        self._wake.set()

    def on_progress(self, key: str, event: dict[str, Any]) -> None:
        """An event from a worker."""
        kind, _, rest = key.partition("-")
        run_id = rest.split("-")[0]
        self._hub.tell(run_id, "progress" if kind == "solve" else "opinion", event)

    def cancel(self, run_id: str) -> None:
        """Stop the worker of a run."""
        self._stop("solve", run_id, "cancelled", "cancelled while it was computed")
        self._changed(run_id)

    def _stop(self, kind: Kind, run_id: str, state: str, reason: str) -> None:
        with self._lock:
            found = [(key, job) for key, job in self._active.items() if job.kind == kind and job.run_id == run_id]
            for _, job in found:
                if job.stopped_at is None:
                    job.stopped_at, job.stop_state, job.stop_reason = time.monotonic(), state, reason
        for key, _ in found:
            self._crew.stop(key, reason)

    def _changed(self, run_id: str) -> None:
        self._hub.tell(run_id, "run", {})

    # -- the thread --------------------------------------------------------------------------------

    def _work(self) -> None:
        while not self._closing.is_set():
            self._wake.wait(_LOOK_EVERY_S)
            self._wake.clear()
            if self._closing.is_set() or not self._crew.ready:
                continue
            try:
                self._hand_out()
                self._end_overdue()
                if time.monotonic() - self._swept_at > 600.0:
                    self._swept_at = time.monotonic()
                    self._store.delete_old(time.time())
            except Exception:
                log.exception("the queue stumbled; it goes on")

    def _free_slots(self) -> int:
        with self._lock:
            return self._settings.slots - len(self._active)

    def _hand_out(self) -> None:
        while self._free_slots() > 0:
            if (run := self._store.next_to_draw()) is not None:
                kind: Kind = "draw"
            elif (run := self._store.next_to_solve()) is not None:
                kind = "solve"
            elif self._settings.second_opinion and (run := self._store.next_to_check()) is not None:
                kind = "check"
            else:
                return
            if not self._begin(kind, run):
                return
        # Runs go before second opinions, also before those that were begun.
        with self._lock:
            checks = [job.run_id for job in self._active.values() if job.kind == "check" and job.stopped_at is None]
        if checks and self._store.any_queued():
            self._stop("check", checks[0], "waiting", "a run came in between")

    def _begin(self, kind: Kind, run: Run) -> bool:
        """Hand out what was claimed; False, and it waits again, if there is nobody to hand it to."""
        key = f"{kind}-{run.id}-{time.time_ns():x}"
        try:
            if kind == "solve":
                table, files = case_of_run(self._store, run)
                limit = self._settings.limits.run_s
                task = partial(tasks.solve_run, for_study=True) if run.study_id is not None else tasks.solve_run
                arguments: tuple[Any, ...] = (task, key, run.name, table, files, limit)
            elif kind == "draw":
                arguments = (tasks.draw_run, result_files(self._store, run.id))
            else:
                arguments = (tasks.check_run, key, result_files(self._store, run.id), self._settings.limits.run_s)
            with self._lock:
                self._active[key] = _Active(kind, run.id, time.monotonic())
            future = self._crew.submit(*arguments, place="run", key=key, watched=kind != "draw")
        except NoWorkers:
            with self._lock:
                self._active.pop(key, None)
            self._store.put_back(run.id, _COLUMN[kind])
            return False
        except Exception:
            log.exception("%s of run %s could not be begun", kind, run.id)
            with self._lock:
                self._active.pop(key, None)
            self._give_up(kind, run.id, _OUR_FAULT)
            return True
        if kind == "solve":
            self._changed(run.id)
        future.add_done_callback(lambda done: self._over(key, done))
        return True

    def _give_up(self, kind: Kind, run_id: str, reason: str, fault: str = "service") -> None:
        if kind == "solve":
            self._store.ended(run_id, "failed", reason, fault)
        elif kind == "draw":
            self._store.drawn(run_id, None)
        else:
            self._store.checked(run_id, "failed", reason)
        self._changed(run_id)

    def _over(self, key: str, future: concurrent.futures.Future[Any]) -> None:
        """In a thread of the client: put the outcome into the store."""
        with self._lock:
            job = self._active.pop(key)
        if self._closing.is_set():
            # The task was dropped with the service; at its next start the run waits again.
            return
        try:
            self._settle(job, future)
        except Exception:
            log.exception("the outcome of %s could not be stored", key)
            self._give_up(job.kind, job.run_id, _OUR_FAULT)
        finally:
            if job.kind == "solve":
                self._hub.forget(job.run_id)
            self._changed(job.run_id)
            self._wake.set()

    def _settle(self, job: _Active, future: concurrent.futures.Future[Any]) -> None:
        run_id = job.run_id
        try:
            answer = future.result()
        except WorkerLost as error:
            log.warning("%s of run %s lost its worker: %s", job.kind, run_id, error)
            self._lost(job)
            return
        except Exception:
            log.exception("%s of run %s failed", job.kind, run_id)
            self._give_up(job.kind, run_id, _OUR_FAULT)
            return
        if "stopped" in answer:
            self._stopped(job, answer["stopped"])
        elif "refused" in answer:
            self._give_up(job.kind, run_id, answer["refused"], answer["kind"])
        elif job.kind == "solve":
            self._store.solved(run_id, answer["files"], answer["summary"], second_opinion=self._settings.second_opinion)
        elif job.kind == "draw":
            self._store.drawn(run_id, answer["files"])
        else:
            self._store.checked(run_id, "done", answer["statement"], answer["files"], answer["summary"])

    def _lost(self, job: _Active) -> None:
        if job.stopped_at is not None:
            self._stopped(job, job.stop_reason)
        elif job.kind == "solve":
            self._store.interrupted(job.run_id)
        elif (job.kind, job.run_id) in self._lost_before:
            self._give_up(job.kind, job.run_id, "its worker died twice")
        else:
            self._lost_before.add((job.kind, job.run_id))
            self._store.put_back(job.run_id, _COLUMN[job.kind])

    def _stopped(self, job: _Active, reason: str) -> None:
        if job.kind == "solve":
            state = job.stop_state if job.stopped_at is not None else "failed"
            self._store.ended(job.run_id, state, reason, "no answer" if state == "failed" else None)
        elif job.kind == "check":
            waiting = job.stopped_at is not None and job.stop_state == "waiting"
            self._store.checked(job.run_id, "waiting" if waiting else "failed", None if waiting else reason)

    def _end_overdue(self) -> None:
        """Workers that do not stop when asked to, or do not end in time, are restarted."""
        now = time.monotonic()
        with self._lock:
            active = list(self._active.items())
        for key, job in active:
            limit = _DRAW_S if job.kind == "draw" else self._settings.limits.run_s + _PATIENCE_S
            unheard = job.stopped_at is not None and now - job.stopped_at > _PATIENCE_S
            if now - job.began > limit and job.stopped_at is None:
                with self._lock:
                    job.stopped_at = now
                    job.stop_reason = f"it reached its time limit of {self._settings.limits.run_s:g} s"
                unheard = True
            if unheard:
                self._crew.restart_worker_of(key)


def result_files(store: Store, run_id: str) -> Mapping[str, Any]:
    """What a worker needs to load a result: its files, and a key under which it may keep it."""
    files = store.run_files(run_id)
    return {
        "key": json.dumps([files[name] for name in _RESULT]),
        "files": {name: store.files.read(files[name]) for name in _RESULT},
    }
