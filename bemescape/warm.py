"""Everything that is compiled, compiled once: for a service, a cluster node or a laptop before a demonstration.

Compiled loops are kept on disk (beside the package, or in the user's cache folder where that cannot be written), so
that later processes load them in a second.
"""

from __future__ import annotations

import time

import numpy as np

from bemescape.bem.fmm import FastSums
from bemescape.bem.panels import make_panels
from bemescape.bem.walkers import walk
from bemescape.escape import solve_escape
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.surface.surface import Surface
from bemescape.windows.window import Window

__all__ = ["warm_up"]


def warm_up(progress: Progress = silent) -> float:
    """Solve small problems in every way there is, so that nothing is compiled later; the seconds it took."""
    from trimesh.creation import icosphere

    began = time.perf_counter()
    ball = icosphere(subdivisions=2)
    surface = Surface(np.asarray(ball.vertices), np.asarray(ball.faces, dtype=np.int64), name="ball")
    caps = [
        Window.disc("open", centre=(0.0, 0.0, 1.0), radius=0.4),
        Window.disc("partly open", centre=(0.0, 0.0, -1.0), radius=0.4, permeability=1.0),
        Window.disc("compact", centre=(1.0, 0.0, 0.0), radius=0.02, compact=True),
    ]
    progress(ProgressEvent("compiling", 0.0, "the solve and what follows from it"))
    result = solve_escape(surface, caps, 1.0, target=0.1, start={"centre": (0.0, 0.0, 0.0)}, ways_out=True)
    result.time_at(np.zeros((1, 3)))
    result.slow_regions()
    progress(ProgressEvent("compiling", 0.4, "fast sums for large meshes"))
    panels = make_panels(ball.subdivide().triangles)
    every, ones = np.arange(len(panels)), np.ones(len(panels))
    fast = FastSums(panels)
    for run in (fast.double, fast.single, fast.lifted):
        run(every, ones)
    fast.double_many(every, np.column_stack([ones, ones]))
    progress(ProgressEvent("compiling", 0.8, "walkers"))
    rate = np.array([window.permeability_um_s for window in caps])
    walk(result.vertices, result.faces, result.panel_window, rate, walkers=2, seed=1)
    seconds = time.perf_counter() - began
    progress(ProgressEvent("compiling", 1.0, f"{seconds:.0f} s"))
    return seconds
