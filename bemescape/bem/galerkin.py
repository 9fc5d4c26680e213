"""Mean escape time by a symmetric Galerkin method, assembled by bempp-cl: a second opinion on the same body.

w = u + |x|²/(6D) is harmonic. Its Cauchy data obey both Calderón identities of the interior,

    V ∂w/∂n − (½ + K) w = 0,        W w − (½ − K') ∂w/∂n = 0,

with the single layer V, the double layer K, its adjoint K' and the hypersingular operator W. u is linear on panels
and 0 on absorbing windows (a), q = ∂u/∂n constant per panel and 0 on the wall; on partly open windows (p) both are
unknown and ∂u/∂n = −μ u with μ = κ/D is imposed in the weak sense, by the mass matrix M_p of the hats on them. The
first identity is tested with the constants of the window panels, the second with the hats of all vertices that are
not on an absorbing window (r); for D = 1, with h± = ½M ± K,

    [  V_aa      V_ap     −h₊_ar     ] [q_a]   [ h₊ φ − V g  ]
    [  V_pa      V_pp     −h₊_pr     ] [q_p] = [ h₊ φ − V g  ]    φ = |x|²/6,  g = x·n/3.
    [ −h₋ᵀ_ra    h₊ᵀ_rp   W_rr + μM_p ] [u_r]  [ h₋ᵀ g − W φ ]

A closed shell without any window (an obstacle) needs one more equation: neither W nor a window elsewhere sees a
constant on it. The first identity tested with the constant of the whole shell does, and is added to the rows of its
hats, whose sum is 0 otherwise.

g is exact on flat panels; φ is interpolated at the vertices. This is the symmetric formulation of the mixed boundary
value problem (Steinbach 2008, Numerical Approximation Methods for Elliptic Boundary Value Problems,
doi:10.1007/978-0-387-68805-3).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

__all__ = ["GalerkinAnswer", "GalerkinMatrices", "galerkin_matrices", "solve_mixed"]

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
    """Mean time in s, shares (k,), ∂u/∂n (m,) per panel (0 on the wall), u (n,) at the vertices, unknowns."""

    mean_time_s: float
    shares: Floats
    panel_slope_s_per_um: Floats
    vertex_time_s: Floats
    unknowns: int


def galerkin_matrices(vertices: Floats, faces: Ints) -> GalerkinMatrices:
    """Assemble by bempp-cl, which compiles for about a minute at its first use in a process.

    Parameters
    ----------
    vertices, faces : (n, 3) µm, (m, 3)
        Closed surface, counter-clockwise seen from outside the volume.
    """
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
    *,
    permeability_um_s: Floats | None = None,
) -> GalerkinAnswer:
    """Mean escape time and shares on a mesh whose rims are edges.

    Parameters
    ----------
    vertices, faces : (n, 3) µm, (m, 3)
        Closed surface, counter-clockwise seen from outside the volume.
    panel_window : (m,) int
        Window of each panel, −1 on the wall.
    diffusion_um2_s : float
        D.
    matrices : GalerkinMatrices, optional
        Of this very mesh, wherever its origin; assembled here by default.
    permeability_um_s : (k,) float, optional
        κ of each window, infinite where it is perfectly absorbing; all of them by default.
    """
    centred = vertices - 0.5 * (vertices.min(axis=0) + vertices.max(axis=0))
    matrices = matrices or galerkin_matrices(centred, faces)
    corners = centred[faces]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    areas = 0.5 * np.linalg.norm(cross, axis=1)
    outward = np.einsum("ij,ij->i", corners.mean(axis=1), cross) / (2.0 * areas)  # x·n

    count = int(panel_window.max()) + 1
    kappa = np.full(count, np.inf) if permeability_um_s is None else np.asarray(permeability_um_s)
    rate = np.where(panel_window >= 0, kappa[panel_window] / diffusion_um2_s, 0.0)
    window = np.flatnonzero(panel_window >= 0)
    absorbing = np.isinf(rate)
    free = np.setdiff1d(np.arange(len(vertices)), faces[absorbing])
    phi, slope = (centred**2).sum(axis=1) / 6.0, outward / 3.0
    plus, minus = 0.5 * matrices.mass + matrices.double, 0.5 * matrices.mass - matrices.double
    coupling = np.where(absorbing[window][:, None], -minus[np.ix_(window, free)], plus[np.ix_(window, free)])
    leak = _mass_of_hats(faces, np.where(absorbing, 0.0, rate) * areas, len(vertices))
    system = np.block(
        [
            [matrices.single[np.ix_(window, window)], -plus[np.ix_(window, free)]],
            [coupling.T, (matrices.hyper + leak)[np.ix_(free, free)]],
        ]
    )
    right = np.concatenate(
        [
            plus[window] @ phi - matrices.single[window] @ slope,
            minus[:, free].T @ slope - matrices.hyper[free] @ phi,
        ]
    )
    for part in _parts_without(window, faces):
        # As large as W: the sum of a_i is the shell's area.
        hats = matrices.mass[part][:, free].sum(axis=0)
        row = np.concatenate([matrices.single[part][:, window].sum(axis=0), -plus[part][:, free].sum(axis=0)])
        value = float((plus[part] @ phi - matrices.single[part] @ slope).sum())
        scale = float(areas[part].sum()) ** -1.5
        system[len(window) :] -= scale * hats[:, None] * row
        right[len(window) :] -= scale * hats * value
    solved = lu_solve(lu_factor(system, overwrite_a=True), right)
    q, u = np.zeros(len(faces)), np.zeros(len(vertices))  # for D = 1
    q[window], u[free] = solved[: len(window)], solved[len(window) :]

    volume = float(areas @ outward) / 3.0
    middles = 0.5 * (corners + np.roll(corners, 1, axis=1))
    square = (middles**2).sum(axis=2).mean(axis=1) * areas  # ∫|x|² over each panel, exact
    # Green's second identity with φ; ∫_Ω |x|² = (1/5) ∮ |x|² x·n.
    total = float(u[faces].mean(axis=1) @ (areas * slope) - q @ square / 6.0 - square @ outward / 30.0)
    flow = np.bincount(panel_window[window], weights=-(q * areas)[window], minlength=count) / volume
    return GalerkinAnswer(total / volume / diffusion_um2_s, flow, q / diffusion_um2_s, u / diffusion_um2_s, len(solved))


def _parts_without(window: Ints, faces: Ints) -> list[Ints]:
    """Panels of each closed shell on which no panel of a window lies."""
    count = int(faces.max()) + 1
    ends = np.concatenate([faces[:, :2], faces[:, 1:]])
    graph = coo_matrix((np.ones(len(ends)), (ends[:, 0], ends[:, 1])), shape=(count, count))
    part = connected_components(graph, directed=False)[1][faces[:, 0]]
    return [np.flatnonzero(part == number) for number in np.setdiff1d(part, part[window])]


def _mass_of_hats(faces: Ints, weight: Floats, count: int) -> Floats:
    """∫ weight φ_i φ_j (n, n), for a weight per panel that includes its area."""
    out = np.zeros((count, count))
    for i in range(3):
        for j in range(3):
            np.add.at(out, (faces[:, i], faces[:, j]), weight / (6.0 if i == j else 12.0))
    return out
