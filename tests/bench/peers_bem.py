"""The peer by dense boundary elements: bempp-cl's Galerkin matrices of the mixed problem, and LU.

w = u + |x|²/(6D) is harmonic. Its Cauchy data obey both Calderón identities of the interior,

    V ∂w/∂n − (½ + K) w = 0,        W w − (½ − K') ∂w/∂n = 0,

with the single layer V, the double layer K, its adjoint K' and the hypersingular operator W. u is linear on
panels, 0 on the closed windows; q = ∂u/∂n is constant per panel, 0 on the wall. The first identity is tested
with the constants of the window panels (w), the second with the hats of the wall's vertices (r); for D = 1

    [  V_ww             −(½M + K)_wr ] [q]   [ (½M + K) φ − V g ]
    [ −(½M − K)ᵀ_rw      W_rr        ] [u] = [ (½M − K)ᵀ g − W φ ]    φ = |x|²/6,  g = x·n/3.

g is exact on flat panels; φ is interpolated at the vertices. This is the symmetric formulation of the mixed
boundary value problem (Steinbach 2008, Numerical Approximation Methods for Elliptic Boundary Value Problems).
"""

from __future__ import annotations

from dataclasses import dataclass
from time import perf_counter
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class GalerkinMatrices:
    """Dense matrices on m panels and n vertices: single (m, m), double (m, n), hyper (n, n), mass (m, n)."""

    single: Floats
    double: Floats
    hyper: Floats
    mass: Floats


@dataclass(frozen=True, eq=False)
class GalerkinAnswer:
    """Mean time in s, shares, ∂u/∂n (m,) per panel (0 on the wall), u (n,) at the vertices, unknowns."""

    mean_time_s: float
    shares: Floats
    panel_slope_s_per_um: Floats
    vertex_time_s: Floats
    unknowns: int


def galerkin_matrices(vertices: Floats, faces: Ints) -> GalerkinMatrices:
    """Assemble by bempp-cl: vertices (n, 3), outward faces (m, 3)."""
    import bempp_cl.api as bempp

    # Named, since the default is any OpenCL that is installed, working or not.
    bempp.DEFAULT_DEVICE_INTERFACE = "numba"
    grid = bempp.Grid(np.ascontiguousarray(vertices.T), np.ascontiguousarray(faces.T, dtype=np.uint32))
    constants, hats = bempp.function_space(grid, "DP", 0), bempp.function_space(grid, "P", 1)
    layers = bempp.operators.boundary.laplace
    identity = bempp.operators.boundary.sparse.identity(hats, constants, constants)
    single = layers.single_layer(constants, constants, constants)
    double = layers.double_layer(hats, constants, constants)
    hyper = layers.hypersingular(hats, hats, hats)
    order = _vertex_of_unknown(hats)
    return GalerkinMatrices(
        single=np.asarray(single.weak_form().to_dense()),
        double=np.asarray(double.weak_form().to_dense())[:, order],
        hyper=np.asarray(hyper.weak_form().to_dense())[np.ix_(order, order)],
        mass=np.asarray(identity.weak_form().to_dense())[:, order],
    )


def _vertex_of_unknown(hats: Any) -> Ints:
    """Number of the hat function of each vertex."""
    number = np.empty(hats.grid.number_of_vertices, np.int64)
    number[hats.grid.elements.T.ravel()] = hats.local2global.ravel()
    return number


def solve_mixed(
    vertices: Floats,
    faces: Ints,
    panel_window: Ints,
    diffusion_um2_s: float = 1.0,
    matrices: GalerkinMatrices | None = None,
) -> GalerkinAnswer:
    """Mean escape time and shares on a mesh whose rims are edges; `panel_window` (m,) is -1 on the wall."""
    centred = vertices - 0.5 * (vertices.min(axis=0) + vertices.max(axis=0))
    matrices = matrices or galerkin_matrices(centred, faces)
    corners = centred[faces]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    areas = 0.5 * np.linalg.norm(cross, axis=1)
    outward = np.einsum("ij,ij->i", corners.mean(axis=1), cross) / (2.0 * areas)  # x·n

    window = np.flatnonzero(panel_window >= 0)
    wall = np.setdiff1d(np.arange(len(vertices)), faces[window])
    phi, slope = (centred**2).sum(axis=1) / 6.0, outward / 3.0
    first, second = 0.5 * matrices.mass + matrices.double, 0.5 * matrices.mass - matrices.double
    system = np.block(
        [
            [matrices.single[np.ix_(window, window)], -first[np.ix_(window, wall)]],
            [-second[np.ix_(window, wall)].T, matrices.hyper[np.ix_(wall, wall)]],
        ]
    )
    right = np.concatenate(
        [
            first[window] @ phi - matrices.single[window] @ slope,
            second[:, wall].T @ slope - matrices.hyper[wall] @ phi,
        ]
    )
    solved = lu_solve(lu_factor(system, overwrite_a=True), right)
    q, u = np.zeros(len(faces)), np.zeros(len(vertices))  # for D = 1
    q[window], u[wall] = solved[: len(window)], solved[len(window) :]

    volume = float(areas @ outward) / 3.0
    middles = 0.5 * (corners + np.roll(corners, 1, axis=1))
    square = (middles**2).sum(axis=2).mean(axis=1) * areas  # ∫|x|² over each panel, exact
    # Green's second identity with φ; ∫_Ω |x|² = (1/5) ∮ |x|² x·n.
    total = float(u[faces].mean(axis=1) @ (areas * slope) - q @ square / 6.0 - square @ outward / 30.0)
    flow = np.bincount(panel_window[window], weights=-(q * areas)[window]) / volume
    return GalerkinAnswer(
        total / volume / diffusion_um2_s, flow, q / diffusion_um2_s, u / diffusion_um2_s, len(solved)
    )


def bem_peer(
    vertices: Floats, faces: Ints, panel_window: Ints, diffusion_um2_s: float = 1.0
) -> dict[str, Any]:
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
