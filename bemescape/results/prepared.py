"""One mesh with its windows, made ready to solve for any right-hand side."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.averages import enclosed_volume
from bemescape.bem.clusters import wall_clusters
from bemescape.bem.compact import CompactPores
from bemescape.bem.moments import SourcePotential
from bemescape.bem.near import NearField, build_near_field
from bemescape.bem.near_reuse import EarlierNearField, near_field_from
from bemescape.bem.operator import assemble
from bemescape.bem.panels import Panels, make_panels
from bemescape.bem.sinks import Sinks
from bemescape.bem.solve import BoundarySolution, BoundarySolver
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.windows.mesh_edits import face_pairs

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["PreparedMesh", "iteration_teller", "prepare_mesh", "prepare_mesh_again"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class PreparedMesh:
    """A solver and what belongs to it; everything is for D = 1 and in the order of `panels`.

    Attributes
    ----------
    panels : Panels
        `panels.order` leads from the order of the mesh to theirs.
    solver : BoundarySolver
    tolerance : float
        Of the iteration.
    progress : callable
        Receives a ProgressEvent for every step.
    near : NearField or None
        Where it is wanted for another mesh later.
    kept_rows : float
        Part of its rows that were taken over from an earlier mesh.
    """

    panels: Panels
    solver: BoundarySolver
    tolerance: float
    progress: Progress
    near: NearField | None = None
    kept_rows: float = 0.0

    @cached_property
    def back(self) -> Ints:
        """From the order of the panels to that of the mesh: `values[back]`."""
        back = np.empty_like(self.panels.order)
        back[self.panels.order] = np.arange(len(self.panels))
        return back

    @property
    def window_of(self) -> Ints:
        """Number of the window of each panel (m,), −1 on the wall."""
        return self.solver.operator.window_of

    @property
    def source(self) -> Floats:
        """∫_Ω G on the panels and at the compact pores, (m + p,): the right-hand side of the mean time."""
        return self.solver.operator.volume_potential

    def sinks(self, solution: BoundarySolution) -> Sinks | None:
        """The compact pores with what they let out of a solution; None where there are none."""
        pores = self.solver.operator.pores
        return None if pores is None else pores.sinks(solution.outflow)

    def outflow(self, solution: BoundarySolution) -> float:
        """−∫ ∂u/∂n over all windows and pores."""
        return float(solution.outflow.sum() - self.panels.areas @ solution.q)

    def without_pores(self, solution: BoundarySolution) -> Floats:
        """The values u (m,) without −Q/(2πr) of each compact pore: what is left varies slowly over the panels."""
        pores = self.solver.operator.pores
        return solution.u if pores is None else solution.u + 2.0 * pores.columns(solution.outflow)

    @cached_property
    def volume(self) -> float:
        """Enclosed volume in µm³."""
        return enclosed_volume(self.panels)

    @cached_property
    def source_potential(self) -> SourcePotential:
        """The potential of a solution, for problems whose source is one."""
        self.progress(ProgressEvent("near field", None, "of the second moment"))
        return SourcePotential(self.solver.operator)

    def with_resistance(self, resistance_of_window: Floats, progress: Progress) -> PreparedMesh:
        """The same mesh with other D/κ of each window (k,): everything but the windows' own blocks is shared."""
        resistance = np.where(self.window_of >= 0, resistance_of_window[self.window_of], 0.0)
        other = replace(self, solver=self.solver.with_resistance(resistance), progress=progress, kept_rows=1.0)
        for known in ("back", "volume", "source_potential"):
            if known in self.__dict__:
                other.__dict__[known] = self.__dict__[known]
        return other

    def solve(self, right: Floats, stage: str, *, given: Floats | None = None) -> BoundarySolution:
        """Solve for one right-hand side; see `BoundarySolver.solve`."""
        return self.solver.solve(right, given=given, tell=iteration_teller(self.progress, self.tolerance, stage))


def iteration_teller(progress: Progress, tolerance: float, stage: str) -> Callable[[int, float], None]:
    """Reports iterations as events of `stage`."""

    def tell(iteration: int, residual: float) -> None:
        # A residual falls by powers of ten: the part done is measured on that scale.
        done = min(1.0, float(np.log(max(residual, 1e-300)) / np.log(tolerance)))
        progress(ProgressEvent(stage, done, f"iteration {iteration}, residual {residual:.1e}"))

    return tell


def prepare_mesh(
    vertices: Floats,
    faces: Ints,
    window_of: Ints,
    resistance_of_window: Floats,
    *,
    pores: CompactPores | None = None,
    tolerance: float,
    earlier: EarlierNearField | None = None,
    keep: bool = False,
    progress: Progress = silent,
) -> PreparedMesh:
    """Near field, preconditioner and outer space of a mesh.

    Parameters
    ----------
    vertices : (n, 3) float64
    faces : (m, 3) int64
    window_of : (m,) int64
        Number of the window, −1 on the wall.
    resistance_of_window : (k,) float64
        D/κ of each window in µm, 0 where it absorbs perfectly.
    pores : CompactPores, optional
        Their panels are faces here.
    tolerance : float
        Relative residual at which an iteration ends.
    earlier : EarlierNearField, optional
        Of a mesh that shares panels with this one: rows among unchanged panels are taken over.
    keep : bool
        Whether the near field is kept in `near` for a later mesh.
    progress : callable, optional
    """
    panels = make_panels(vertices[faces])
    sorted_window = window_of[panels.order]
    resistance = np.append(resistance_of_window, 0.0)[sorted_window]  # −1, the wall, is the last
    progress(ProgressEvent("near field", None, f"{len(panels)} panels"))
    number = np.empty_like(panels.order)
    number[panels.order] = np.arange(len(panels))
    if pores is not None:
        pores = replace(pores, panel=number[pores.panel])
    near, kept_rows = None, 0.0
    if earlier is not None:
        near, kept = near_field_from(panels, sorted_window >= 0, earlier)
        kept_rows = float(kept.mean())
    elif keep:
        near = build_near_field(panels, sorted_window >= 0)
    operator = assemble(panels, sorted_window, resistance, near, pores)
    openings = operator.is_window
    # Slices of equal distance to any of many pores would be rings around each of them: one pore is as good as all.
    start = np.flatnonzero(openings) if pores is None or openings.any() else pores.panel[:1]
    clusters = wall_clusters(panels.centroids, number[face_pairs(faces)], openings, start)
    solver = BoundarySolver(operator, cluster_of=clusters, tolerance=tolerance)
    return PreparedMesh(panels, solver, tolerance, progress, near if keep else None, kept_rows)


def prepare_mesh_again(result: EscapeResult, progress: Progress = silent) -> PreparedMesh:
    """The solver of a result's own mesh, for questions that are asked afterwards."""
    kappa = np.array([window.permeability_um_s for window in result.windows])
    barrier = result.diffusion_um2_s / kappa
    return prepare_mesh(
        result.vertices,
        result.faces,
        result.panel_window,
        barrier,
        pores=None if result.pores is None else result.pores.compact(barrier),
        tolerance=float(result.settings.get("tolerance", 1e-6)),
        progress=progress,
    )
