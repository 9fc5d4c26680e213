import re
import subprocess
import sys
import time
from pathlib import Path

import pytest

import study_stubs
from study_processes import environment, without_timings


class DaskHere:
    """A scheduler and worker processes of their own, as an institute's cluster would have them."""

    def __init__(self, folder):
        self.folder = folder
        self.workers = []
        self.scheduler = self._started("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard")
        self.address = self._address()

    def _started(self, kind, *arguments):
        log = (self.folder / f"{kind}-{time.monotonic_ns()}.log").open("wb")
        command = [sys.executable, "-m", f"distributed.cli.dask_{kind}", *arguments]
        process = subprocess.Popen(command, stdout=log, stderr=log, env=environment(), cwd=self.folder)
        process.log = Path(log.name)
        return process

    def _address(self):
        deadline = time.monotonic() + 120.0
        while time.monotonic() < deadline:
            if found := re.search(r"Scheduler at:\s+(tcp://\S+)", self.scheduler.log.read_text()):
                return found[1]
            time.sleep(0.1)
        raise RuntimeError(self.scheduler.log.read_text())

    def add_worker(self):
        arguments = (
            "--nthreads",
            "1",
            "--no-nanny",
            "--no-dashboard",
            "--memory-limit",
            "2GB",
            "--death-timeout",
            "60",
        )
        self.workers.append(self._started("worker", self.address, *arguments))
        return self.workers[-1]

    def ensure_workers(self, count):
        self.workers = [worker for worker in self.workers if worker.poll() is None]
        while len(self.workers) < count:
            self.add_worker()

    def close(self):
        for process in (*self.workers, self.scheduler):
            process.kill()
            process.wait()


@pytest.fixture(scope="session")
def dask_here(tmp_path_factory):
    cluster = DaskHere(tmp_path_factory.mktemp("dask"))
    cluster.ensure_workers(2)
    yield cluster
    cluster.close()


@pytest.fixture
def boxes(tmp_path):
    return study_stubs.write_shapes(tmp_path)


@pytest.fixture(scope="session")
def undisturbed(tmp_path_factory, dask_here):
    """The study file of twelve boxes, and its table from a run in which nothing happened."""
    from bemescape.study.run import run_study

    folder = tmp_path_factory.mktemp("undisturbed")
    study = study_stubs.write_shapes(folder)
    dask_here.ensure_workers(2)
    result = run_study(study, folder / "out", scheduler=dask_here.address, report=False, solve=study_stubs.quick)
    return study, without_timings(result.folder)
