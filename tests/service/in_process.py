"""Workers as threads of the test's own process: the same tasks, without the seconds that processes take to start."""

import asyncio
import concurrent.futures
import threading
import time
from typing import ClassVar

import httpx
import uvicorn

from bemescape.service import tasks
from bemescape.service.app import create_app
from bemescape.service.crew import Crew


class ThreadCrew(Crew):
    """A crew whose workers are threads."""

    listeners: ClassVar[list] = []

    def __init__(self, settings, *, draws=True):
        super().__init__(settings)
        self._draws = draws
        self._keys = set()
        self._pool = concurrent.futures.ThreadPoolExecutor(max_workers=settings.slots + 2)

    def start(self, on_progress):
        self.listeners.append(on_progress)
        tasks._send = lambda key, event: [listen(key, event) for listen in self.listeners]
        self._ready.set()

    def close(self):
        # A thread cannot be killed: what still computes ends at its next step.
        for key in list(self._keys):
            self.stop(key, "the service stops")
        self._pool.shutdown(wait=False, cancel_futures=True)

    def submit(self, task, *args, place, key, watched=False):
        if task is tasks.draw_run and not self._draws:
            # Pictures take seconds each and have tests of their own.
            return self._pool.submit(dict, files={})
        future = self._pool.submit(task, *args)
        self._keys.add(key)
        future.add_done_callback(lambda _: self._keys.discard(key))
        return future

    def stop(self, key, reason):
        tasks.request_stop(key, reason)

    def restart_desk(self):
        pass


class Live:
    """The app behind a real socket, in a thread."""

    def __init__(self, settings, *, draws=True, crew=None):
        self.app = create_app(settings, crew or ThreadCrew(settings, draws=draws))
        config = uvicorn.Config(self.app, host="127.0.0.1", port=0, log_level="warning", timeout_graceful_shutdown=1)
        self.server = uvicorn.Server(config)
        self.thread = threading.Thread(target=lambda: asyncio.run(self.server.serve()), daemon=True)
        self.thread.start()
        ends = time.monotonic() + 60
        while not self.server.started:
            assert time.monotonic() < ends, "the server did not start"
            time.sleep(0.02)
        self.port = self.server.servers[0].sockets[0].getsockname()[1]
        self.url = f"http://127.0.0.1:{self.port}"

    def client(self, **options):
        return httpx.Client(base_url=self.url, timeout=120, **options)

    def close(self):
        self.server.should_exit = True
        self.thread.join(timeout=20)
