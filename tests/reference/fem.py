"""Mean escape time by quadratic finite elements of scikit-fem: the general-purpose reference.

D Laplace(u) = -1 inside, u = 0 on the windows. Galerkin's u has the smaller energy: on its own polyhedron and
windows the mean time is a lower bound, and it equals D/V times the integral of |grad u|^2 to the solver's
tolerance.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from time import perf_counter

import numpy as np
import pyamg
from scipy.sparse import csr_matrix, diags_array
from scipy.sparse.linalg import LinearOperator, cg, eigsh, splu
from skfem import Basis, ElementTetP2, MeshTet, asm
from skfem.models.poisson import laplace, unit_load

from .tetrahedra import (
    DiscWindow,
    FaceWindow,
    Floats,
    Ints,
    Polyhedron,
    Sizes,
    Tetrahedra,
    fill,
    refined_at_rims,
)

_DIRECT_LIMIT = 8_000  # unknowns up to which a sparse LU of the quadratic system is the quicker way


@dataclass(frozen=True)
class FemAnswer:
    """Mean time in s, share of each window, and what the discretisation says of itself."""

    mean_time_s: float
    shares: tuple[float, ...]
    unknowns: int
    iterations: int
    energy_mean_time_s: float
    assembly_seconds: float


def fem_mean_time(mesh: Tetrahedra, diffusion_um2_s: float = 1.0) -> FemAnswer:
    """Mean time over the volume, and the shares as consistent (reaction) fluxes, with P2 elements."""
    started = perf_counter()
    grid = MeshTet(mesh.points.T.copy(), mesh.tets.T.copy())
    basis = Basis(grid, ElementTetP2(), intorder=2)  # exact: gradients are linear, the load is quadratic
    stiffness, load = asm(laplace, basis).tocsr(), asm(unit_load, basis)
    assembled = perf_counter()
    windows = [basis.get_dofs(_facet_numbers(grid, facets)).flatten() for facets in mesh.window_facets]
    free = np.setdiff1d(np.arange(basis.N), np.concatenate(windows))
    inner = stiffness[free][:, free].tocsr()
    if len(free) <= _DIRECT_LIMIT:
        solved, iterations = splu(inner.tocsc()).solve(load[free]), 0
    else:
        coarse = _vertex_interpolation(basis, free)
        solved, iterations = _two_level_cg(inner, load[free], coarse)
    u = np.zeros(basis.N)
    u[free] = solved
    volume = float(load.sum())
    reaction = load - stiffness @ u  # outflow through the node's basis function, for D = 1
    return FemAnswer(
        mean_time_s=float(load @ u) / volume / diffusion_um2_s,
        shares=tuple(float(reaction[dofs].sum()) / volume for dofs in windows),
        unknowns=len(free),
        iterations=iterations,
        energy_mean_time_s=float(u @ (stiffness @ u)) / volume / diffusion_um2_s,
        assembly_seconds=assembled - started,
    )


@dataclass(frozen=True)
class FemReference:
    """Extrapolated mean time in s, its estimated relative error, and shares, on a polyhedron."""

    mean_time_s: float
    relative_error: float
    shares: tuple[float, ...]
    levels: tuple[FemAnswer, ...]
    meshing_seconds: float
    solving_seconds: float


def fem_reference(
    vertices: Floats,
    faces: Ints,
    windows: Sequence[DiscWindow | FaceWindow],
    sizes: Sizes,
    diffusion_um2_s: float = 1.0,
    halvings: Sequence[int] = (0, 1, 2),
) -> FemReference:
    """Solve on nested meshes that halve at the rims; extrapolate: the rim's error is of first order.

    The times are scaled by polyhedron's over mesh's volume (the mean time of a narrow window is proportional
    to it). The error counts the change of the extrapolated value by the last mesh; a quarter of that scaling
    (on the ball with a cap, a fourfold smaller defect of volume moved the scaled value by 1 % of the
    scaling); and, where a window lost area, half of the loss times its share (the mean time of a narrow
    window goes with the root of its area).
    """
    started = perf_counter()
    base = fill(vertices, faces, windows, sizes)
    missing = Polyhedron(vertices, faces).volume / base.volume - 1.0
    meshing, solving, levels = perf_counter() - started, 0.0, []
    for halving in halvings:
        started = perf_counter()
        mesh = refined_at_rims(base, halving, sizes.growth) if halving else base
        meshed = perf_counter()
        levels.append(fem_mean_time(mesh, diffusion_um2_s))
        meshing, solving = meshing + meshed - started, solving + perf_counter() - meshed
    lost = [0.0 if rim.area is None else abs(mesh.window_area(k) / rim.area - 1.0) for k, rim in enumerate(mesh.rims)]
    first, second, third = (level.mean_time_s for level in levels[-3:])
    value = 2.0 * third - second
    shares = tuple(2.0 * b - a for a, b in zip(levels[-2].shares, levels[-1].shares, strict=True))
    error = abs(value - (2.0 * second - first)) / value + 0.25 * abs(missing) + 0.5 * float(np.dot(shares, lost))
    return FemReference(value * (1.0 + missing), error, shares, tuple(levels), meshing, solving)


def _facet_numbers(grid: MeshTet, facets: Ints) -> Ints:
    base = grid.p.shape[1]
    keys = [
        (rows[0] * base + rows[1]) * base + rows[2]
        for rows in (
            np.sort(grid.facets, axis=0).astype(np.int64),
            np.sort(facets, axis=1).T.astype(np.int64),
        )
    ]
    order = np.argsort(keys[0])
    return np.asarray(order[np.searchsorted(keys[0], keys[1], sorter=order)])


def _vertex_interpolation(basis: Basis, free: Ints) -> csr_matrix:
    """Free quadratic unknowns from the free vertex unknowns of linear elements on the same mesh."""
    vertices, edges = basis.nodal_dofs[0], basis.edge_dofs[0]
    ends = basis.mesh.edges
    rows = np.concatenate([vertices, edges, edges])
    columns = np.concatenate([np.arange(len(vertices)), ends[0], ends[1]])
    weights = np.concatenate([np.ones(len(vertices)), np.full(2 * len(edges), 0.5)])
    whole = csr_matrix((weights, (rows, columns)), shape=(basis.N, len(vertices)))
    return whole[free][:, np.isin(vertices, free)].tocsr()


def _two_level_cg(matrix: csr_matrix, right: Floats, coarse: csr_matrix) -> tuple[Floats, int]:
    """Conjugate gradients, preconditioned by smoothing around algebraic multigrid on linear elements."""
    linear = pyamg.smoothed_aggregation_solver((coarse.T @ matrix @ coarse).tocsr()).aspreconditioner()
    smooth = _chebyshev(matrix)

    def cycle(residual: Floats) -> Floats:
        x = smooth(residual)
        x = x + coarse @ (linear @ (coarse.T @ (residual - matrix @ x)))
        return x + smooth(residual - matrix @ x)

    steps = 0

    def count(_x: Floats) -> None:
        nonlocal steps
        steps += 1

    operator = LinearOperator(matrix.shape, matvec=cycle)
    solution, failed = cg(matrix, right, rtol=1e-9, maxiter=300, M=operator, callback=count)
    if failed:
        raise RuntimeError(f"conjugate gradients did not reach 1e-9 in {steps} steps")
    return solution, steps


def _chebyshev(matrix: csr_matrix, degree: int = 4) -> Callable[[Floats], Floats]:
    """Symmetric polynomial smoother for the upper four fifths of the spectrum of the scaled matrix."""
    inverse = 1.0 / matrix.diagonal()
    root = diags_array(np.sqrt(inverse))
    start = np.random.default_rng(1).standard_normal(matrix.shape[0])
    # Lanczos, not the power method: a few thin tetrahedra own the largest eigenvalue, and missing it ruins
    # the cycle.
    high = 1.05 * float(eigsh(root @ matrix @ root, k=1, tol=1e-2, v0=start, return_eigenvectors=False)[0])
    low = 0.1 * high
    middle, half = 0.5 * (high + low), 0.5 * (high - low)

    def smooth(residual: Floats) -> Floats:
        rho = half / middle
        step = inverse * residual / middle
        x = step
        for _ in range(degree - 1):
            residual_now = residual - matrix @ x
            rho_next = 1.0 / (2.0 * middle / half - rho)
            step = rho_next * rho * step + 2.0 * rho_next / half * (inverse * residual_now)
            x, rho = x + step, rho_next
        return x

    return smooth
