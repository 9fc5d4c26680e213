"""After `bemescape warm` nothing is compiled any more."""

import os
import subprocess
import sys

import pytest

_SOLVE = """
import numpy as np
from numba.core import event

compiled = []

class Listener(event.Listener):
    def on_start(self, happened):
        compiled.append(happened.data["dispatcher"].py_func.__qualname__)
    def on_end(self, happened):
        pass

event.register("numba:compile", Listener())
import bemescape as be
from bemescape.bem.fmm import FastSums
from bemescape.bem.panels import make_panels
from bemescape.surface.surface import Surface
from trimesh.creation import icosphere

ball = icosphere(subdivisions=2)
surface = Surface(np.asarray(ball.vertices), np.asarray(ball.faces, dtype=np.int64))
result = be.solve_escape(surface, [be.Window.disc("cap", centre=(1, 0, 0), radius=0.5)], "1 um^2/s", target=0.1)
result.time_at(np.zeros((1, 3)))
panels = make_panels(ball.triangles)
FastSums(panels).double(np.arange(len(panels)), np.ones(len(panels)))
print(*compiled, sep="\\n")
"""


@pytest.mark.slow  # compiles everything: a minute or two
def test_a_solve_after_warm_compiles_nothing(tmp_path):
    there = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)}
    warm = [sys.executable, "-m", "bemescape.cli.main", "warm"]
    done = subprocess.run(warm, env=there, capture_output=True, text=True, timeout=900, check=True)
    assert "compiled and kept on disk" in done.stdout
    assert "compiling" in done.stderr
    after = subprocess.run([sys.executable, "-c", _SOLVE], env=there, capture_output=True, text=True, timeout=300)
    assert after.returncode == 0, after.stderr
    assert after.stdout.split() == []
    cold = {**there, "NUMBA_CACHE_DIR": str(tmp_path / "empty")}
    compiled = subprocess.run([sys.executable, "-c", _SOLVE], env=cold, capture_output=True, text=True, timeout=300)
    assert "_fill_rows" in compiled.stdout.split()
