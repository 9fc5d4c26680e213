"""The peer by finite elements: scikit-fem, quadratic, on tetrahedra of the same polyhedron; one mesh.

`halvings` refines towards the rims until the true error is the one to be compared at.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path
from time import perf_counter
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from reference.fem import fem_mean_time
from reference.tetrahedra import (
    DiscWindow,
    FaceWindow,
    Floats,
    Ints,
    Polyhedron,
    Sizes,
    fill,
    refined_at_rims,
)

#: `wall` and `bulk` as parts of the polyhedron's largest extent.
COARSE = {"rim": 0.25, "wall": 0.12, "bulk": 0.25, "growth": 0.9}


def fem_peer(
    vertices: Floats,
    faces: Ints,
    windows: Sequence[DiscWindow | FaceWindow],
    diffusion_um2_s: float = 1.0,
    *,
    sizes: Sizes | None = None,
    halvings: int = 2,
) -> dict[str, Any]:
    """One mesh, one solve, each timed; run it through `in_child` for its memory."""
    started = perf_counter()
    mesh = fill(vertices, faces, windows, sizes or _sizes(vertices))
    if halvings:
        mesh = refined_at_rims(mesh, halvings, COARSE["growth"])
    meshed = perf_counter()
    answer = fem_mean_time(mesh, diffusion_um2_s)
    return {
        "tetrahedra": len(mesh.tets),
        "unknowns": answer.unknowns,
        "iterations": answer.iterations,
        "seconds_meshing": meshed - started,
        "seconds_assembly": answer.assembly_seconds,
        "seconds_solve": perf_counter() - meshed - answer.assembly_seconds,
        "mean_time_s": answer.mean_time_s * Polyhedron(vertices, faces).volume / mesh.volume,
        "shares": list(answer.shares),
    }


def _sizes(vertices: Floats) -> Sizes:
    extent = float((vertices.max(axis=0) - vertices.min(axis=0)).max())
    return Sizes(COARSE["rim"], COARSE["wall"] * extent, COARSE["bulk"] * extent, COARSE["growth"])
