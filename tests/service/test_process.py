"""The service as its own process with dask workers: start, stop, kill -9, load."""

import os
import random
import re
import signal
import socket
import sqlite3
import subprocess
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import httpx
import pytest

from service.helpers import ball, order, ply_bytes, tell, upload, wait_until_over
from service.test_uploads_refused import CASES

pytestmark = pytest.mark.slow
START_S = 300


class Process:
    """`bemescape serve` on a free port."""

    def __init__(self, data, *options, ready=True):
        self.data, self.options, self.needed = data, options, {"ready": True} if ready else {}
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            self.port = free.getsockname()[1]
        self.url = f"http://127.0.0.1:{self.port}"
        self.start()

    def start(self):
        command = [sys.executable, "-m", "bemescape.cli.main", "serve", "--port", str(self.port)]
        self.log = (Path(self.data).parent / "serve.log").open("a")
        self.process = subprocess.Popen(
            [*command, "--data", str(self.data), "--no-second-opinion", *self.options], stderr=self.log
        )
        ends = time.monotonic() + START_S
        with self.client() as client:
            while time.monotonic() < ends:
                assert self.process.poll() is None, "the service ended at its start"
                try:
                    if self.needed.items() <= client.get("/api/session").json().items():
                        return
                except httpx.HTTPError:
                    pass
                time.sleep(0.1)
        raise AssertionError("the workers did not start")

    def client(self):
        return httpx.Client(base_url=self.url, timeout=120)

    def children(self):
        """Process ids of the workers."""
        listed = subprocess.check_output(["ps", "-eo", "pid,ppid,args"], text=True).splitlines()[1:]
        rows = [line.split(None, 2) for line in listed]
        return [int(pid) for pid, parent, args in rows if int(parent) == self.process.pid and "spawn_main" in args]

    def kill(self):
        self.process.send_signal(signal.SIGKILL)
        self.process.wait()
        self.log.close()

    def stop(self):
        self.process.terminate()
        self.process.wait(timeout=60)
        self.log.close()


@pytest.fixture
def serve(tmp_path):
    started = []

    def start(*options):
        started.append(Process(tmp_path / "data", *options))
        return started[-1]

    yield start
    for process in started:
        if process.process.poll() is None:
            process.stop()


def integrity(data):
    with sqlite3.connect(data / "service.sqlite") as connection:
        return connection.execute("PRAGMA integrity_check").fetchone()[0]


def test_a_run_in_workers_and_a_restart_that_keeps_it(serve):
    service = serve()
    with service.client() as client:
        surface = upload(client).json()
        run = client.post("/api/runs", json=order(surface["id"])).json()
        record = wait_until_over(client, run["id"])
        assert record["state"] == "done", record["reason"]
        ends = time.monotonic() + 300
        while client.get(f"/api/runs/{run['id']}").json()["pictures"] != "done":
            assert time.monotonic() < ends
            time.sleep(0.5)
        report = client.get(f"/api/runs/{run['id']}/files/report.html")
        assert "sandbox" in report.headers["content-security-policy"]
    service.stop()
    service.start()
    with service.client() as client:
        assert client.get(f"/api/runs/{run['id']}/files/report.html").content == report.content


def test_random_kills_lose_and_double_nothing(serve):
    """Kill -9 of the service and of workers at random moments while runs go through."""
    kills, count = int(os.environ.get("BEMESCAPE_KILLS", "6")), int(os.environ.get("BEMESCAPE_KILLED_RUNS", "12"))
    chance = random.Random(20)
    service = serve()
    with service.client() as client:
        surface = upload(client).json()["id"]
        ids = [client.post("/api/runs", json=order(surface, name=f"run {k}")).json()["id"] for k in range(count)]
    for number in range(kills):
        time.sleep(chance.uniform(0.5, 6.0))
        workers = service.children()
        if number % 2 == 0 or not workers:
            service.kill()
            service.start()
        else:
            try:
                os.kill(chance.choice(workers), signal.SIGKILL)
            except ProcessLookupError:
                continue
    with service.client() as client:
        records = [wait_until_over(client, run_id, seconds=1500) for run_id in ids]
        listed = [entry["id"] for entry in client.get("/api/runs").json()]
        assert sorted(listed) == sorted(ids)
        for record in records:
            assert record["state"] == "done" or "2 times" in record["reason"], record
            assert record["attempts"] <= 2
            if record["state"] == "done":
                assert client.get(f"/api/runs/{record['id']}/summary").json()["mean_time_s"] > 0
    service.stop()
    assert integrity(service.data) == "ok"
    done = sum(record["state"] == "done" for record in records)
    tell({"kills": kills, "runs": count, "done": done})


def test_half_an_upload_leaves_nothing(serve):
    service = serve()
    body = ply_bytes(*ball(4))
    head = (
        f"POST /api/surfaces HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Length: {len(body) + 500}\r\n"
        'Content-Type: multipart/form-data; boundary=b\r\n\r\n--b\r\nContent-Disposition: form-data; name="file"; '
        'filename="a.ply"\r\n\r\n'
    ).encode()
    with socket.create_connection(("127.0.0.1", service.port)) as line:
        line.sendall(head + body[: len(body) // 2])
        time.sleep(0.3)
        service.kill()
    service.start()
    with service.client() as client:
        assert client.get("/api/surfaces").json() == []
    assert [path for path in (service.data / "files").rglob("*") if path.is_file()] == []
    assert list((service.data / "unfinished").iterdir()) == []


def memory_mb(pid, kind="VmRSS"):
    """Resident memory of a process now, or at its most ("VmHWM")."""
    status = Path(f"/proc/{pid}/status").read_text()
    return int(re.search(rf"{kind}:\s+(\d+)", status).group(1)) // 1024


def test_the_service_alone_is_small_and_loads_nothing_heavy(tmp_path):
    """Without workers: no pyvista, numba or pandas in the process, and less than 150 MB."""
    with socket.socket() as closed:
        closed.bind(("127.0.0.1", 0))
        began = time.perf_counter()
        service = Process(tmp_path / "data", "--scheduler", f"tcp://127.0.0.1:{closed.getsockname()[1]}", ready=False)
        started = time.perf_counter() - began
        try:
            with service.client() as client:
                assert client.get("/").status_code == 200
                assert client.get("/api/demos").status_code == 200
            time.sleep(2)
            libraries = Path(f"/proc/{service.process.pid}/maps").read_text()
            memory = memory_mb(service.process.pid)
            tell({"start_s": started, "service_MB": memory})
            assert not [name for name in ("vtk", "numba", "pandas", "llvmlite") if f"/{name}" in libraries]
            assert memory < 150
        finally:
            service.stop()


def test_hostile_uploads_take_little_memory(serve):
    """Each is refused, and neither the service nor a worker ever takes 300 MB for it; times are printed."""
    service = serve()
    times = {}
    with service.client() as client:
        upload(client)  # what a first upload loads stays loaded
        processes = [service.process.pid, *service.children()]
        before = {pid: memory_mb(pid, "VmHWM") for pid in processes}
        for case, (name, data, status) in CASES.items():
            began = time.perf_counter()
            assert upload(client, data, name=name).status_code == status, case
            times[case] = time.perf_counter() - began
        growth = [memory_mb(pid, "VmHWM") - before[pid] for pid in processes]
    tell({"slowest_s": max(times.values()), "which": max(times, key=times.get), "growth_MB": growth})
    assert max(growth) < 300


def test_status_calls_are_answered_while_everything_is_busy(serve):
    """50 clients poll and 5 upload while runs compute; times are printed, only failures are claimed."""
    service = serve()
    times = []
    with service.client() as client:
        surface = upload(client).json()["id"]
        runs = [client.post("/api/runs", json=order(surface, name=f"r{k}")).json()["id"] for k in range(2)]

    def poll(_):
        with service.client() as client:
            for _ in range(20):
                began = time.perf_counter()
                answer = client.get(f"/api/runs/{runs[0]}")
                times.append(time.perf_counter() - began)
                assert answer.status_code == 200
                time.sleep(0.2)

    def send(_):
        with service.client() as client:
            assert upload(client).status_code == 201

    with ThreadPoolExecutor(55) as pool:
        work = [pool.submit(poll, k) for k in range(50)] + [pool.submit(send, k) for k in range(5)]
        for job in work:
            job.result()
    times.sort()
    memory = memory_mb(service.process.pid)
    middle, late = times[len(times) // 2], times[int(0.95 * len(times))]
    tell({"calls": len(times), "p50_s": middle, "p95_s": late, "service_MB": memory})
    assert memory < 400


class Dask:
    """A dask scheduler with one worker, as somebody else runs them."""

    def __init__(self, folder):
        self.folder = folder
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            self.port = free.getsockname()[1]
        self.processes = []

    @property
    def address(self):
        return f"tcp://127.0.0.1:{self.port}"

    def start(self):
        here = ["--host", "127.0.0.1", "--no-dashboard"]
        for command in (
            ["scheduler", "--port", str(self.port), *here],
            ["worker", self.address, "--nthreads", "2", "--no-nanny", *here],
        ):
            log = (self.folder / f"{command[0]}.log").open("a")
            self.processes.append(
                subprocess.Popen([sys.executable, "-m", "dask", *command], stdout=log, stderr=log, cwd=self.folder)
            )

    def kill(self):
        for process in self.processes:
            process.kill()
            process.wait()
        self.processes = []


@pytest.fixture
def dask(tmp_path):
    dask = Dask(tmp_path)
    dask.start()
    yield dask
    dask.kill()


def test_runs_outlive_a_scheduler_that_dies_and_comes_back(dask, serve):
    """Kill -9 of a foreign scheduler with its worker; status is answered meanwhile, and every run ends once."""
    service = serve("--scheduler", dask.address)
    with service.client() as client:
        surface = upload(client).json()["id"]
        ids = [client.post("/api/runs", json=order(surface, name=f"run {k}")).json()["id"] for k in range(4)]
        while client.get(f"/api/runs/{ids[0]}").json()["state"] == "queued":
            time.sleep(0.1)
        dask.kill()
        ends = time.monotonic() + 60
        while client.get("/api/session").json()["ready"]:
            assert time.monotonic() < ends, "the service has not noticed"
            time.sleep(0.2)
        assert len(client.get("/api/runs").json()) == 4
        time.sleep(25)  # longer than the client of dask tries by itself
        dask.start()
        records = [wait_until_over(client, run_id, seconds=600) for run_id in ids]
    assert [record["state"] for record in records] == ["done"] * 4, [record["reason"] for record in records]
    assert max(record["attempts"] for record in records) <= 2
