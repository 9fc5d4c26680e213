"""Real solves that are killed in the middle: a worker of a real scheduler, and the program itself."""

import os
import signal
import subprocess
import sys
import time

import pytest
import trimesh

from bemescape.study.run import run_study
from study_processes import environment, without_timings

pytestmark = pytest.mark.slow  # each study is solved several times by worker processes

STUDY = """
[[shapes]]
files = "ball_*.ply"
unit = "um"
[motion]
diffusion = "2 um^2/s"
[[window]]
name = "cap"
disc = { centre = [0, 0, 1], radius = "300 nm" }
[accuracy]
target = "2 %"
max_panels = 6000
"""
BALLS = 4


@pytest.fixture(scope="module")
def balls(tmp_path_factory, dask_here):
    """The study of four balls and its table from a run in which nothing happened."""
    folder = tmp_path_factory.mktemp("balls")
    for number in range(BALLS):
        ball = trimesh.creation.icosphere(2, radius=1.0 + 0.02 * number)
        ball.export(folder / f"ball_{number}.ply")
    study = folder / "balls.study.toml"
    study.write_text(STUDY)
    dask_here.ensure_workers(2)
    result = run_study(study, folder / "out", scheduler=dask_here.address, report=False)
    assert not result.failures
    return study, without_timings(result.folder)


def test_a_worker_killed_while_it_solves_costs_nothing(balls, dask_here, tmp_path):
    study, table = balls
    dask_here.ensure_workers(2)
    events, killed = [], []

    def kill_in_the_second_case(event):
        events.append(event)
        starts = [seen for seen in events if seen["event"] == "started"]
        if len(starts) == 3 and not killed:
            # It has just begun, and the solve takes much longer than the signal.
            killed.append(event["case"])
            os.kill(int(event["worker"].rpartition(" ")[2]), signal.SIGKILL)

    result = run_study(
        study, tmp_path / "out", scheduler=dask_here.address, report=False, events=kill_in_the_second_case
    )
    assert not result.failures
    assert [event["case"] for event in events if event["event"] == "worker_lost"] == killed
    assert sum(worker.poll() == -signal.SIGKILL for worker in dask_here.workers) == 1
    assert without_timings(result.folder) == table


def test_the_program_killed_while_workers_solve_goes_on_where_it_was(balls, dask_here, tmp_path):
    study, table = balls
    dask_here.ensure_workers(2)
    out = tmp_path / "out"
    command = [sys.executable, "-m", "bemescape.cli.main", "study", str(study), "--out", str(out)]
    child = subprocess.Popen(
        [*command, "--scheduler", dask_here.address, "--json", "--no-report", "-q"],
        stdout=subprocess.PIPE,
        env=environment(),
        text=True,
    )
    for line in child.stdout:
        if '"finished"' in line:
            break
    time.sleep(0.3)  # into the next solves
    child.kill()
    child.communicate()
    events = []
    result = run_study(study, out, scheduler=dask_here.address, report=False, events=events.append)
    before = events[0]["finished_before"]
    assert 0 < before < BALLS
    assert sum(event["event"] == "finished" for event in events) == BALLS - before
    assert without_timings(result.folder) == table
