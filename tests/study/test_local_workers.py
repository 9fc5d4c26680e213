"""The default way to run: processes that the study starts on this machine; the solver is replaced by a quick answer."""

import os

import study_stubs
from bemescape.study.engine import default_workers
from bemescape.study.run import run_study


def test_a_study_is_solved_by_processes_of_its_own_that_are_gone_afterwards(tmp_path):
    study = study_stubs.write_shapes(tmp_path, 4)
    result = run_study(study, tmp_path / "out", workers=2, report=False, solve=study_stubs.slow)
    assert not result.failures
    workers = {stored.worker for stored in result.stored.values()}
    processes = {int(worker.rpartition(" ")[2]) for worker in workers}
    assert processes
    assert os.getpid() not in processes
    for process in processes:
        try:
            os.kill(process, 0)
        except ProcessLookupError:
            continue
        raise AssertionError(f"worker process {process} is still there")


def test_there_are_no_more_workers_than_cores_and_cases():
    assert default_workers(1) == 1
    assert 1 <= default_workers(10_000) <= (os.cpu_count() or 1)
