"""A finished run is checked by another method while nothing else waits."""

import time

import pytest

from bemescape.service.settings import Settings
from service.helpers import order, upload, wait_until_over
from service.in_process import Live

pytestmark = pytest.mark.slow


def test_a_finished_run_gets_its_second_opinion_and_a_new_run_goes_first(tmp_path):
    """bempp-cl (an independent library) agrees with the run within the sum of both errors."""
    server = Live(Settings(data=tmp_path, slots=1), draws=False)
    try:
        with server.client() as client:
            surface = upload(client).json()["id"]
            first = client.post("/api/runs", json=order(surface, name="first")).json()["id"]
            wait_until_over(client, first)
            ends = time.monotonic() + 600
            while client.get(f"/api/runs/{first}").json()["opinion"] != "running":
                assert time.monotonic() < ends
                time.sleep(0.1)
            second = client.post("/api/runs", json=order(surface, name="second")).json()["id"]
            assert wait_until_over(client, second, seconds=900)["state"] == "done"
            ends = time.monotonic() + 1500
            while (record := client.get(f"/api/runs/{first}").json())["opinion"] != "done":
                assert record["opinion"] != "failed", record["opinion_text"]
                assert time.monotonic() < ends
                time.sleep(0.5)
            assert "agrees with a Galerkin solution by bempp-cl" in record["opinion_text"]
            assert record["answer"]["agrees"] is True
            summary = client.get(f"/api/runs/{first}/summary").json()
            assert summary["checks"]["crosscheck"]["difference"] == pytest.approx(0.0, abs=0.1)
    finally:
        server.close()
