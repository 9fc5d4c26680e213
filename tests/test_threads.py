"""Loops spread over threads: every row once, whatever the number of threads; nothing is swallowed."""

import threading

import numpy as np
import pytest

from bemescape.errors import SettingsError
from bemescape.threads import over_rows, thread_count, use_threads


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize(("rows", "chunk"), [(0, 4), (1, 4), (103, 10), (100, 1)])
def test_every_row_is_done_once(threads, rows, chunk):
    done = np.zeros(rows, int)

    def run(out, begin, end):
        out[begin:end] += 1

    with use_threads(threads):
        over_rows(run, rows, chunk, done)
    assert (done == 1).all()


def test_as_many_threads_work_as_were_asked_for():
    together = threading.Barrier(3)

    def run(begin, end):
        together.wait(timeout=20.0)  # breaks unless three calls are under way at once

    with use_threads(3):
        over_rows(run, 3, 1)


def test_a_loop_inside_a_loop_does_not_wait_for_itself():
    inner = np.zeros(64, int)

    def fill(row, begin, end):
        inner[8 * row + begin : 8 * row + end] = 1

    def outer(begin, end):
        for row in range(begin, end):
            over_rows(fill, 8, 1, row)

    with use_threads(2):
        over_rows(outer, 8, 1)
    assert (inner == 1).all()


def test_an_error_in_a_call_is_raised_and_the_next_loop_works():
    def run(begin, end):
        if begin == 6:
            raise ValueError("row 6")

    with use_threads(3), pytest.raises(ValueError, match="row 6"):
        over_rows(run, 20, 1)
    test_every_row_is_done_once(3, 103, 10)


def test_the_number_of_threads_is_one_setting(monkeypatch):
    monkeypatch.setenv("BEMESCAPE_THREADS", "3")
    assert thread_count() == 3
    with use_threads(2):
        assert thread_count() == 2
    monkeypatch.setenv("BEMESCAPE_THREADS", "many")
    with pytest.raises(SettingsError, match=r"'many'.*whole number"):
        thread_count()
    with pytest.raises(SettingsError, match="0 threads"), use_threads(0):
        pass
