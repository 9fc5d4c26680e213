"""Solving the integral equation: GMRES with a two-level preconditioner for the slow modes."""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_solve, cholesky, lu_factor, lu_solve, qr, solve_triangular

from bemescape.bem.blas import one_blas_thread
from bemescape.bem.near import fill_single_rows
from bemescape.bem.operator import EscapeOperator
from bemescape.errors import ConvergenceError
from bemescape.threads import over_rows

__all__ = ["BoundarySolution", "BoundarySolver", "solve_boundary"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

#: Largest dense block of V that the preconditioner factors.
LARGEST_BLOCK = 6000
#: Largest dense block of compact pores: they shield one another over the whole wall, so that pieces cost iterations.
LARGEST_PORE_BLOCK = 4000

#: What the recurrence says below this is rounding: a tolerance below it is never reached.
_LEAST_RESIDUAL = 1e-13


@dataclass(frozen=True)
class BoundarySolution:
    """u on every panel (µm², for D = 1), q = ∂u/∂n on every panel (µm; 0 on the wall), and how it was reached.

    `outflow` (p,) is what each compact pore lets out, −∫ ∂u/∂n.
    """

    u: Floats
    q: Floats
    residuals: tuple[float, ...]
    outflow: Floats = field(default_factory=lambda: np.zeros(0))


class _WindowBlocks:
    """Inverses of V + ρ/2 on each window, or on contiguous pieces of a very large one.

    With W = A^½ V A^−½ (A: areas), which is symmetric and positive, a Cholesky factor in single precision is enough:
    it only preconditions.
    """

    def __init__(self, operator: EscapeOperator) -> None:
        panels, chosen = operator.panels, np.flatnonzero(operator.is_window)
        self._root = np.sqrt(panels.areas[chosen])
        self._blocks: list[tuple[Ints, Singles]] = []
        for window in np.unique(operator.window_of[chosen]):
            members = np.flatnonzero(operator.window_of[chosen] == window)
            pieces = max(1, -(-len(members) // LARGEST_BLOCK))
            for piece in np.array_split(members, pieces):
                self._blocks.append((piece, _factored(_dense_single(operator, chosen, piece))))

    def solve(self, right: Floats) -> Floats:
        out = np.empty_like(right)
        scaled = right * self._root
        for members, factor in self._blocks:
            out[members] = cho_solve((factor, True), scaled[members].astype(np.float32), check_finite=False)
        return out / self._root


class _PoreBlocks:
    """Dense inverses of the compact pores' equations among themselves, in pieces of neighbours."""

    def __init__(self, operator: EscapeOperator) -> None:
        rows = operator.pores
        pieces = [] if rows is None else rows.pieces(LARGEST_PORE_BLOCK)
        self.blocks = [] if rows is None else [(piece, lu_factor(rows.block(piece))) for piece in pieces]

    def solve(self, right: Floats) -> Floats:
        out = np.empty_like(right)
        for members, factors in self.blocks:
            out[members] = lu_solve(factors, right[members])
        return out


def _orthonormal(columns: Floats) -> tuple[Floats, Floats]:
    """Q (m, r) with orthonormal columns and upper R (r, r), QR = `columns`.

    Cholesky QR, done twice for orthogonality to rounding (Yamamoto et al. 2015, ETNA 44:306): ten times faster than
    Householder's for tall columns, which it falls back to where they are nearly dependent.
    """
    try:
        q, r = columns, np.eye(columns.shape[1])
        for _ in range(2):
            step = cholesky(q.T @ q, check_finite=False)
            q, r = q @ solve_triangular(step, np.eye(len(step)), check_finite=False), step @ r
    except np.linalg.LinAlgError:
        q, r = qr(columns, mode="economic")
    return np.ascontiguousarray(q), r


def _factored(block: Singles) -> Singles:
    """Lower Cholesky factor (k, k); where panels of very bad shape spoil the definiteness, with a raised diagonal."""
    raised = block
    for lift in (0.0, 1e-3, 1e-2, 1e-1, 1.0):
        if lift:
            raised = block + np.diag(lift * np.diagonal(block))
        try:
            return np.asarray(cholesky(raised, lower=True, check_finite=False))
        except np.linalg.LinAlgError:
            continue
    return np.asarray(np.diag(np.sqrt(np.abs(np.diagonal(block)))))


def _dense_single(operator: EscapeOperator, chosen: Ints, members: Ints) -> Singles:
    """A^½ (V + ρ/2) A^−½ on some window panels, symmetrised, (k, k) float32."""
    panels = operator.panels
    index = chosen[members]
    block = np.empty((len(index), len(index)), np.float32)
    over_rows(
        fill_single_rows, len(index), 128,
        panels.centroids[index], panels.normals[index], panels.areas[index], panels.spread[index], block,
    )  # fmt: skip
    root = np.sqrt(panels.areas[index]).astype(np.float32)
    near = operator.near_single[index][:, members].tocoo()
    block[near.row, near.col] += near.data * (root[near.row] / root[near.col])
    block[np.diag_indices(len(index))] += (0.5 * operator.resistance[index]).astype(np.float32)
    return np.asarray(0.5 * (block + block.T))


class BoundarySolver:
    """The equation ½u + K u − V q = right of one operator, prepared for any number of right-hand sides.

    GMRES on the panels' equations, preconditioned from the right by q = −V_ww⁻¹ r per window, then
    u = 2 (r + V q) on the wall. Slow modes (nearly constant u in compartments joined by necks) are taken out of r
    beforehand: with Z the indicators of `cluster_of` and C ≈ A Z their images, y = argmin |r − C y| adds Z y to u and
    leaves r − C y to the rest (a two-level preconditioner, "deflation first": Tang, Nabben, Vuik & Erlangga 2009,
    doi:10.1007/s10915-009-9272-6). Since it only preconditions, C may be rough, and is. The dense blocks and C are made
    once.

    Parameters
    ----------
    operator : EscapeOperator
    cluster_of : (m,) int64, optional
        Cluster of each wall panel, −1 for none.
    tolerance : float
        Residual relative to the right-hand side, in the area-weighted norm.
    most_iterations : int
    """

    def __init__(
        self,
        operator: EscapeOperator,
        *,
        cluster_of: Ints | None = None,
        tolerance: float = 1e-7,
        most_iterations: int = 200,
    ) -> None:
        panels = operator.panels
        self.operator = operator
        self.tolerance = tolerance
        self.most_iterations = most_iterations
        weight = panels.areas / panels.areas.sum()
        if operator.pores is not None:
            count = len(operator.pores)
            weight = np.concatenate([weight, np.full(count, 1.0 / count)])
        self._root = np.sqrt(weight)
        with one_blas_thread():
            self._prepare(cluster_of)

    def _prepare(self, cluster_of: Ints | None) -> None:
        operator, panels = self.operator, self.operator.panels
        self._blocks = _WindowBlocks(operator)
        self._pore_blocks = _PoreBlocks(operator)
        # The images C = Q R of the clusters, Q with orthonormal columns (area-weighted).
        if cluster_of is not None and cluster_of.max() >= 0:
            count = int(cluster_of.max()) + 1
            image = operator.half_plus_double_of_clusters(cluster_of, count)
            if operator.pores is not None:
                image = np.concatenate([image, operator.pores.double_of_clusters(cluster_of, count)])
            outer, self._triangle = _orthonormal(self._root[:, None] * image)
            self._outer = outer.astype(np.float32)
            self._cluster_of = cluster_of
        else:
            self._outer, self._triangle = np.zeros((len(self._root), 0), np.float32), np.zeros((0, 0))
            self._cluster_of = np.full(len(panels), -1)

    def with_resistance(self, resistance: Floats) -> BoundarySolver:
        """The solver of the same panels with other permeabilities: ρ = D/κ of each panel's window (m,) in µm.

        The operator and the outer space, which knows wall panels only, are shared.
        """
        other = copy.copy(self)
        other.operator = replace(self.operator, resistance=resistance)
        with one_blas_thread():
            other._blocks = _WindowBlocks(other.operator)
        return other

    def solve(
        self,
        right: Floats,
        *,
        given: Floats | None = None,
        tell: Callable[[int, float], None] = lambda _iteration, _residual: None,
    ) -> BoundarySolution:
        """Solve ½u + K u − V q = right with u = given − ρq on the windows and q = 0 on the wall.

        Parameters
        ----------
        right : (m + p,) float64
            Averages over the panels, and values at the compact pores.
        given : (m + p,) float64, optional
            Known part of u, zero on the wall, and u on each compact pore; zero everywhere by default.
        tell : callable
            Called with the iteration and the relative residual.

        Raises
        ------
        ConvergenceError
            The residual is above the tolerance after the most iterations allowed.
        """
        with one_blas_thread():
            if given is None:
                return self._solved(right, tell)
            m = len(self.operator.panels)
            known = self.operator.half_plus_double(given[:m])
            if self.operator.pores is not None:
                known = np.concatenate([known, self.operator.pores.double(given[:m]) + 0.5 * given[m:]])
            rest = self._solved(right - known, tell)
        return BoundarySolution(rest.u + given[:m], rest.q, rest.residuals, rest.outflow)

    def _precondition(self, weighted: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """From a weighted residual to (u, q on windows, outflow of pores), and what flux does there, V q − Σ Q G."""
        part = self._outer.T @ weighted.astype(np.float32)
        u, q, outflow, of_flux = self._smooth((weighted - self._outer @ part) / self._root)
        self._raise_levels(u, part)
        return u, q, outflow, of_flux

    def _raise_levels(self, u: Floats, part: Singles) -> None:
        """Add Z y to u for the part QQᵀr of a residual r."""
        if len(part):
            in_cluster = self._cluster_of >= 0
            level = solve_triangular(self._triangle, part.astype(np.float64))
            u[in_cluster] += level[self._cluster_of[in_cluster]]

    def _smooth(self, residual: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        operator, m = self.operator, len(self.operator.panels)
        window, on_panels = operator.is_window, residual[:m]
        q = -self._blocks.solve(on_panels[window])
        of_flux, outflow = operator.single(q), np.zeros(0)
        if operator.pores is not None:
            # As if u = 2 × residual varied slowly: K u = −½u at a pore. Without it a constant residual on the panels,
            # which only the pores can take away, would be answered by a constant u, which has no image at all.
            outflow = self._pore_blocks.solve(residual[m:] + on_panels[operator.pores.pores.panel])
            of_flux -= operator.pores.columns(outflow)
        u = 2.0 * (on_panels + of_flux)
        u[window] = -operator.resistance[window] * q
        return u, q, outflow, of_flux

    def _applied(self, u: Floats, q: Floats, outflow: Floats, of_flux: Floats) -> Floats:
        """The left-hand side, (m + p,)."""
        on_panels = self.operator.half_plus_double(u) - of_flux
        pores = self.operator.pores
        if pores is None:
            return on_panels
        return np.concatenate([on_panels, pores.double(u) - pores.single(q) + pores.between(outflow)])

    def _solved(self, right: Floats, tell: Callable[[int, float], None]) -> BoundarySolution:
        root, window = self._root, self.operator.is_window
        most_iterations = self.most_iterations
        scale = float(np.linalg.norm(root * right))
        if scale == 0.0:
            m, pores = len(window), len(right) - len(window)
            return BoundarySolution(np.zeros(m), np.zeros(m), (), np.zeros(pores))
        # Rows are filled as they come; the system hands out memory only for those.
        basis = np.empty((most_iterations + 1, len(right)))
        basis[0] = root * right / scale
        steps: list[tuple[Floats, Floats, Floats]] = []
        hessenberg = np.zeros((most_iterations + 1, most_iterations))
        givens = np.zeros((most_iterations, 2))
        rotated = np.zeros(most_iterations + 1)
        rotated[0] = beta = scale
        residuals: list[float] = []
        k = 0
        while beta / scale > self.tolerance:
            if k == most_iterations or beta / scale < _LEAST_RESIDUAL:
                raise ConvergenceError(
                    f"the iteration reached a residual of {residuals[-1]:.1e} after {k} iterations "
                    f"(limit {self.tolerance:.0e}); the surface may have panels of very bad shape: try heal='rebuild'",
                    residuals=tuple(residuals),
                )
            u, q, outflow, of_flux = self._precondition(basis[k])
            steps.append((u, q, outflow))
            new = root * self._applied(u, q, outflow, of_flux)
            column = hessenberg[:, k]
            for _ in range(2):  # twice: single-precision products leave the first pass not quite orthogonal
                overlaps = basis[: k + 1] @ new
                column[: k + 1] += overlaps
                new -= overlaps @ basis[: k + 1]
            column[k + 1] = np.linalg.norm(new)
            basis[k + 1] = new / max(column[k + 1], 1e-300)
            for j in range(k):
                c, s = givens[j]
                column[j], column[j + 1] = c * column[j] + s * column[j + 1], -s * column[j] + c * column[j + 1]
            length = float(np.hypot(column[k], column[k + 1]))
            givens[k] = column[k] / length, column[k + 1] / length
            column[k], column[k + 1] = length, 0.0
            rotated[k + 1] = -givens[k, 1] * rotated[k]
            rotated[k] *= givens[k, 0]
            k += 1
            beta = abs(float(rotated[k]))
            residuals.append(beta / scale)
            tell(k, beta / scale)

        weights = solve_triangular(hessenberg[:k, :k], rotated[:k])
        u, q_window = np.zeros(len(window)), np.zeros(int(window.sum()))
        outflow = np.zeros(len(right) - len(window))
        for weight, (u_step, q_step, outflow_step) in zip(weights, steps, strict=True):
            u += weight * u_step
            q_window += weight * q_step
            outflow += weight * outflow_step
        # What is left of the residual is small, but not what a slow mode makes of its part in it.
        left = np.append(np.zeros(k), rotated[k])
        for j in range(k - 1, -1, -1):
            c, s = givens[j]
            left[j], left[j + 1] = c * left[j] - s * left[j + 1], s * left[j] + c * left[j + 1]
        self._raise_levels(u, self._outer.T @ (left @ basis[: k + 1]).astype(np.float32))
        q = np.zeros(len(window))
        q[window] = q_window
        return BoundarySolution(u, q, tuple(residuals), outflow)


def solve_boundary(
    operator: EscapeOperator,
    right: Floats,
    *,
    tolerance: float = 1e-7,
    most_iterations: int = 200,
    cluster_of: Ints | None = None,
    tell: Callable[[int, float], None] = lambda _iteration, _residual: None,
) -> BoundarySolution:
    """Solve for one right-hand side; see `BoundarySolver`."""
    solver = BoundarySolver(operator, cluster_of=cluster_of, tolerance=tolerance, most_iterations=most_iterations)
    return solver.solve(right, tell=tell)
