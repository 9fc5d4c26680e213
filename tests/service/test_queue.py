"""The queue while workers come and go: what is handed out, put back, given up."""

import concurrent.futures
import time

import pytest

from bemescape.service import tasks
from bemescape.service.crew import NoWorkers, WorkerLost
from bemescape.service.settings import Settings
from service.helpers import order, upload, wait_until_over
from service.in_process import Live, ThreadCrew


class FickleCrew(ThreadCrew):
    """Workers that are away when told to be, and die at the tasks that are named."""

    def __init__(self, settings):
        super().__init__(settings, draws=True)
        self.away, self.dies_at = False, []
        self.handed_out = []

    def submit(self, task, *args, place, key, watched=False):
        kind = key.split("-")[0]
        if place == "run":
            self.handed_out.append(kind)
            if self.away:
                raise NoWorkers
            if kind in self.dies_at:
                self.dies_at.remove(kind)
                lost = concurrent.futures.Future()
                lost.set_exception(WorkerLost("killed"))
                return lost
            if task is tasks.draw_run:
                return self._pool.submit(lambda: {"files": {"picture.png": b"drawn"}})
        return super().submit(task, *args, place=place, key=key, watched=watched)


@pytest.fixture
def fickle(tmp_path):
    settings = Settings(data=tmp_path, second_opinion=False, slots=1)
    crew = FickleCrew(settings)
    server = Live(settings, crew=crew)
    with server.client() as client:
        yield crew, client, upload(client).json()["id"]
    server.close()


def _wait(condition):
    ends = time.monotonic() + 120
    while not condition():
        assert time.monotonic() < ends
        time.sleep(0.05)


def test_a_run_waits_uncounted_while_no_worker_is_there(fickle):
    crew, client, surface = fickle
    crew.away = True
    run = client.post("/api/runs", json=order(surface)).json()["id"]
    _wait(lambda: len(crew.handed_out) >= 2)
    _wait(lambda: client.get(f"/api/runs/{run}").json()["state"] == "queued")
    assert client.get(f"/api/runs/{run}").json()["attempts"] == 0
    crew.away = False
    record = wait_until_over(client, run)
    assert (record["state"], record["attempts"]) == ("done", 1)


def test_a_run_and_its_pictures_survive_one_death_of_their_worker(fickle):
    crew, client, surface = fickle
    crew.dies_at = ["solve", "draw"]
    run = client.post("/api/runs", json=order(surface)).json()["id"]
    record = wait_until_over(client, run)
    assert (record["state"], record["attempts"]) == ("done", 2)
    _wait(lambda: client.get(f"/api/runs/{run}").json()["pictures"] == "done")
    assert crew.handed_out == ["solve", "solve", "draw", "draw"]


def test_a_run_whose_worker_dies_twice_is_given_up_with_a_reason(fickle):
    crew, client, surface = fickle
    crew.dies_at = ["solve", "solve"]
    record = wait_until_over(client, client.post("/api/runs", json=order(surface)).json()["id"])
    assert (record["state"], record["fault"], record["attempts"]) == ("failed", "service", 2)
    assert "2 times" in record["reason"]
