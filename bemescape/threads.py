"""One setting for all threads, and loops spread over them.

Compiled loops let go of Python's lock and are called on contiguous runs of rows. (Numba's own parallel loops take
two seconds longer to compile, each; they cannot be interrupted; and they bring a second set of threads.) Every row is
written by one call in a fixed order, so that results do not depend on the number of threads.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from functools import cache
from typing import Any

from bemescape.errors import SettingsError

__all__ = ["over_rows", "thread_count", "use_threads"]

#: Environment variable with the number of threads of the compiled loops.
VARIABLE = "BEMESCAPE_THREADS"

_chosen: int | None = None
_inside = threading.local()


def thread_count() -> int:
    """Threads that a compiled loop uses: `use_threads`, else BEMESCAPE_THREADS, else the processors at hand.

    Raises
    ------
    SettingsError
        BEMESCAPE_THREADS is not a positive whole number.
    """
    if _chosen is not None:
        return _chosen
    text = os.environ.get(VARIABLE, "").strip()
    if not text:
        affinity = getattr(os, "sched_getaffinity", None)
        return len(affinity(0)) if affinity is not None else (os.cpu_count() or 1)
    if not text.isdecimal() or int(text) < 1:
        raise SettingsError(f"{VARIABLE} is {text!r}; give a whole number of at least 1, or leave it out")
    return int(text)


@contextmanager
def use_threads(count: int) -> Iterator[None]:
    """Within it, compiled loops use `count` >= 1 threads; 1 is right for each of many worker processes."""
    global _chosen
    if count < 1:
        raise SettingsError(f"{count} threads; give at least 1")
    before, _chosen = _chosen, count
    try:
        yield
    finally:
        _chosen = before


def over_rows(run: Callable[..., Any], rows: int, chunk: int, *arguments: Any) -> None:
    """Call run(*arguments, begin, end) for contiguous runs of `chunk` rows that cover range(rows).

    `run` is compiled with `nogil` and writes to those rows only. An error in a call is raised here, after the calls
    under way have ended.
    """
    threads = 1 if getattr(_inside, "busy", False) else min(thread_count(), -(-rows // chunk))
    if threads <= 1:
        if rows > 0:
            run(*arguments, 0, rows)
        return
    begins, lock = iter(range(0, rows, chunk)), threading.Lock()

    def work() -> None:
        _inside.busy = True
        try:
            while True:
                with lock:
                    begin = next(begins, None)
                if begin is None:
                    return
                run(*arguments, begin, min(begin + chunk, rows))
        finally:
            _inside.busy = False

    others = [_pool().submit(work) for _ in range(threads - 1)]
    try:
        work()
    finally:
        with lock:
            begins = iter(())
        for other in others:
            other.result()


@cache
def _pool() -> ThreadPoolExecutor:
    return ThreadPoolExecutor(max_workers=256, thread_name_prefix="bemescape")
