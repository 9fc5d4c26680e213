"""Progress of runs, from the workers' threads to every browser that listens."""

from __future__ import annotations

import asyncio
import json
import threading
from collections import Counter, defaultdict
from collections.abc import AsyncIterator, Callable
from typing import Any

from bemescape.service.problems import Refusal

__all__ = ["Hub", "stream"]

#: A comment is sent this often, so that proxies keep the stream open.
_QUIET_S = 15.0
#: A listener that lags behind loses the oldest events, never the newest.
_MOST_WAITING = 100


class Hub:
    """The last event of each run, and queues of those who listen."""

    def __init__(self, most_streams: int) -> None:
        self._most = most_streams
        self._lock = threading.Lock()
        self._latest: dict[str, dict[str, Any]] = {}
        self._listeners: dict[str, set[tuple[asyncio.AbstractEventLoop, asyncio.Queue[Any]]]] = defaultdict(set)
        self._streams: Counter[str] = Counter()

    def tell(self, run_id: str, kind: str, data: dict[str, Any]) -> None:
        """Pass on an event; from any thread."""
        with self._lock:
            if kind == "progress":
                self._latest[run_id] = data
            listeners = list(self._listeners.get(run_id, ()))
        for loop, queue in listeners:
            try:
                loop.call_soon_threadsafe(_put, queue, (kind, data))
            except RuntimeError:  # the loop has ended with the service
                continue

    def latest(self, run_id: str) -> dict[str, Any] | None:
        """The last progress event of a run that computes."""
        with self._lock:
            return self._latest.get(run_id)

    def forget(self, run_id: str) -> None:
        """A run is over."""
        with self._lock:
            self._latest.pop(run_id, None)

    def listen(self, owner: str, run_id: str) -> tuple[asyncio.Queue[Any], Callable[[], None]]:
        """A queue of the run's events, and what ends it."""
        queue: asyncio.Queue[Any] = asyncio.Queue(_MOST_WAITING)
        entry = (asyncio.get_running_loop(), queue)
        with self._lock:
            if self._streams[owner] >= self._most:
                raise Refusal(429, f"{self._most} of your streams are open, the limit here; close some")
            self._streams[owner] += 1
            self._listeners[run_id].add(entry)

        def end() -> None:
            with self._lock:
                self._streams[owner] -= 1
                self._listeners[run_id].discard(entry)
                if not self._listeners[run_id]:
                    del self._listeners[run_id]

        return queue, end


def _put(queue: asyncio.Queue[Any], item: Any) -> None:
    if queue.full():
        queue.get_nowait()
    queue.put_nowait(item)


async def stream(
    queue: asyncio.Queue[Any],
    end: Callable[[], None],
    record: Callable[[], Any],
    over: Callable[[dict[str, Any]], bool],
) -> AsyncIterator[str]:
    """Server-sent events: first the run as it is (`record`), then what happens, until it is `over`."""
    try:
        now = await asyncio.to_thread(record)
        yield _event("run", now)
        while not over(now):
            try:
                kind, data = await asyncio.wait_for(queue.get(), _QUIET_S)
            except TimeoutError:
                yield ": still here\n\n"
                # A state that changed without an event, however that came about, is told now.
                latest = await asyncio.to_thread(record)
                if latest != now:
                    now = latest
                    yield _event("run", now)
                continue
            if kind == "run":
                now = await asyncio.to_thread(record)
                data = now
            yield _event(kind, data)
    finally:
        end()


def _event(kind: str, data: Any) -> str:
    return f"event: {kind}\ndata: {json.dumps(data)}\n\n"
