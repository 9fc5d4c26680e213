"""Processes that fault tests start, and what they compare."""

import os
import subprocess
import sys
from pathlib import Path

TESTS = Path(__file__).parent
DRIVER = TESTS / "study_driver.py"


def environment():
    one_thread = {f"{name}_NUM_THREADS": "1" for name in ("NUMBA", "OMP", "OPENBLAS", "MKL")}
    paths = os.pathsep.join(filter(None, [str(TESTS), os.environ.get("PYTHONPATH")]))
    return os.environ | one_thread | {"PYTHONPATH": paths, "PYTHONUNBUFFERED": "1"}


def without_timings(folder):
    """The bytes of cases.csv before the columns of timings, line by line, and the statistics."""
    lines = (folder / "cases.csv").read_text(encoding="utf-8").splitlines()
    return [line.rsplit(",", 2)[0] for line in lines], (folder / "statistics.json").read_bytes()


def driver(study, out, scheduler, stub):
    """The study in a process of its own, its events as lines of JSON."""
    command = [sys.executable, str(DRIVER), str(study), str(out), scheduler, stub]
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, env=environment(), text=True, encoding="utf-8"
    )
