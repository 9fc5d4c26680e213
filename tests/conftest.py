"""Several test processes share the processors: each solves with its part of the threads."""

import os


def pytest_configure(config):
    worker = getattr(config, "workerinput", None)
    if worker is not None and "BEMESCAPE_THREADS" not in os.environ:
        processors = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
        os.environ["BEMESCAPE_THREADS"] = str(max(1, processors // worker["workercount"]))
