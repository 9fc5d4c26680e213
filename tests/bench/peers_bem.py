"""The peer by dense boundary elements: bempp-cl's Galerkin matrices of the mixed problem, and LU."""

from __future__ import annotations

from time import perf_counter
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.galerkin import galerkin_matrices, solve_mixed

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def bem_peer(vertices: Floats, faces: Ints, panel_window: Ints, diffusion_um2_s: float = 1.0) -> dict[str, Any]:
    """Time the dense peer, compiled beforehand; run it through `in_child` for its memory."""
    started = perf_counter()
    _compile()
    compiled = perf_counter()
    centred = vertices - 0.5 * (vertices.min(axis=0) + vertices.max(axis=0))
    matrices = galerkin_matrices(centred, faces)
    assembled = perf_counter()
    answer = solve_mixed(vertices, faces, panel_window, diffusion_um2_s, matrices)
    return {
        "panels": len(faces),
        "unknowns": answer.unknowns,
        "seconds_compile": compiled - started,
        "seconds_assembly": assembled - compiled,
        "seconds_solve": perf_counter() - assembled,
        "mean_time_s": answer.mean_time_s,
        "shares": answer.shares.tolist(),
    }


def _compile() -> None:
    """Assemble on an octahedron, so that the numba kernels exist before the clock starts."""
    corners = np.concatenate([np.eye(3), -np.eye(3)])
    faces = [(0, 1, 2), (1, 3, 2), (3, 4, 2), (4, 0, 2), (1, 0, 5), (3, 1, 5), (4, 3, 5), (0, 4, 5)]
    galerkin_matrices(corners, np.array(faces))
