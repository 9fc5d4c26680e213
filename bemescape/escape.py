"""The main call: a surface, its windows and D in; escape times with their error out."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.averages import enclosed_volume, volume_integral
from bemescape.bem.clusters import wall_clusters
from bemescape.bem.field import field_at
from bemescape.bem.indicator import coarse_panels
from bemescape.bem.operator import assemble
from bemescape.bem.panels import make_panels
from bemescape.bem.solve import solve_boundary
from bemescape.errors import AccuracyError, SettingsError, SurfaceError, WindowError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.results.accuracy import Estimate, Ladder, Rung
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.surface.compartments import compartments
from bemescape.surface.health import check_surface
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.units import Quantity, diffusion_um2_s, fraction
from bemescape.windows.grade import GradedMesh, Placement, SizeLimit, graded, place_windows
from bemescape.windows.mesh_edits import face_pairs
from bemescape.windows.window import Window

__all__ = ["SolverSettings", "solve_escape"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SolverSettings:
    """What a user may turn, with defaults that serve.

    Attributes
    ----------
    max_panels : int
        Refinement stops here, above the target if need be.
    tolerance : float
        Residual of the linear system, relative.
    balance_limit : float
        A result whose windows drain more or less than V/D by this part is not handed out.
    """

    max_panels: int = 60_000
    tolerance: float = 1e-6
    balance_limit: float = 0.02


@dataclass(frozen=True, eq=False)
class _Solution:
    """One resolution, for D = 1, panels in the order of the mesh."""

    rung: Rung
    mesh: GradedMesh
    u: Floats
    q: Floats
    mean: float
    balance: float
    residuals: tuple[float, ...]
    seconds: float


def solve_escape(
    surface: Surface,
    windows: Sequence[Window],
    diffusion: Quantity,
    *,
    target: float | str = 0.005,
    start: Mapping[str, Sequence[float]] | None = None,
    name: str | None = None,
    settings: SolverSettings | None = None,
    progress: Progress = silent,
) -> EscapeResult:
    """Mean time a diffusing particle needs to leave `surface` through its `windows`.

    Solves D Δu = −1 inside, u = 0 on the windows (D ∂u/∂n = −κ u where a permeability κ is given) and no flux
    through the wall, by boundary elements. Rims and wall are refined in turn until the estimated error of the mean
    time is below `target`.

    Parameters
    ----------
    surface : Surface
        Closed and outward-facing, as `read_surface` returns it.
    windows : sequence of Window, length k >= 1
        With distinct names, none overlapping another.
    diffusion : quantity, text or float
        D > 0; "10 um^2/s", or a plain number in µm²/s.
    target : float or text, default 0.005
        Relative error wanted for the mean time: 0.005 or "0.5 %".
    start : mapping of str to (3,) µm, optional
        Named points inside; the mean time from each is in `result.start`.
    name : str, optional
        Name of the case; the surface's name by default.
    settings : SolverSettings, optional
    progress : callable, optional
        Receives a ProgressEvent for every step.

    Returns
    -------
    EscapeResult
        `target_met` is False where the panel budget ended the refinement above the target.

    Raises
    ------
    SettingsError
        A quantity is wrong, or a start point lies outside.
    SurfaceError
        The surface is not closed and outward-facing.
    WindowError
        A window cannot be placed, or a separate body has none.
    ConvergenceError
        The iteration did not reach its tolerance.
    AccuracyError
        The windows do not drain V/D: the mesh is too coarse or too damaged for an answer.

    Notes
    -----
    One small round absorbing window of radius a gives about V / (4 D a) [1]_.

    References
    ----------
    .. [1] Berg & Purcell (1977), Biophys. J. 20:193, doi:10.1016/S0006-3495(77)85544-6
    """
    began = time.perf_counter()
    settings = settings or SolverSettings()
    d = diffusion_um2_s(diffusion)
    wanted = fraction(target, "target error")
    _check_surface(surface)
    points = _start_points(surface, start or {})
    progress(ProgressEvent("placing windows"))
    placement = place_windows(surface, windows)
    _check_compartments(placement)

    ladder = Ladder(wanted, len(windows))
    best: _Solution | None = None
    limits: list[SizeLimit] = []
    levels: list[dict[str, float]] = []
    target_met = True
    while (rung := ladder.next_rung()) is not None:
        progress(ProgressEvent("imprinting windows", None, f"resolution {len(levels) + 1}"))
        if best is not None and rung.wall > best.rung.wall:
            limits.append(_finer_wall(best))
        mesh = graded(placement, rung.fineness, limits=limits, most_faces=2 * settings.max_panels)
        if best is not None and len(mesh.faces) > settings.max_panels:
            target_met = False
            break
        best = _solved(placement, rung, mesh, d, settings, progress)
        ladder.has_rims = bool((mesh.window_of < 0).any())
        ladder.record(rung, best.mean, best.balance)
        levels.append(
            {
                "panels": len(mesh.faces),
                "mean_time_s": best.mean / d,
                "iterations": len(best.residuals),
                "seconds": best.seconds,
            }
        )
    if best is None:
        raise SettingsError("no resolution was solved; raise max_panels")
    estimate = ladder.estimate()
    target_met = target_met and estimate.relative_error <= wanted
    notes = [*placement.notes, *_reading_notes(surface)]
    if not target_met:
        notes.append(
            f"the panel budget of {settings.max_panels} ended the refinement at an estimated error of "
            f"{estimate.relative_error:.2%} (target {wanted:.2%}); raise max_panels or accept the error"
        )
    result = _packed(placement, best, estimate, d)
    return replace(
        result,
        name=name or surface.name,
        target=wanted,
        target_met=target_met,
        levels=tuple(levels),
        start=_start_times(best, points, d),
        notes=tuple(notes),
        settings={**asdict(settings), "target": wanted, "surface": surface.name, "windows": _window_settings(windows)},
        mesh_sha256=surface.sha256,
        health=surface.health,
        healing=surface.healing,
        wall_s=time.perf_counter() - began,
    )


def _solved(
    placement: Placement,
    rung: Rung,
    mesh: GradedMesh,
    d: float,
    settings: SolverSettings,
    progress: Progress,
) -> _Solution:
    began = time.perf_counter()
    panels = make_panels(mesh.vertices[mesh.faces])
    back = np.empty_like(panels.order)
    back[panels.order] = np.arange(len(panels))
    kappa = np.array([window.permeability_um_s for window in placement.windows])
    window_of = mesh.window_of[panels.order]
    resistance = np.where(window_of >= 0, d / kappa[window_of], 0.0)
    progress(ProgressEvent("near field", None, f"{len(panels)} panels"))
    operator = assemble(panels, window_of, resistance)
    clusters = wall_clusters(panels.centroids, back[face_pairs(mesh.faces)], operator.is_window)

    def tell(iteration: int, residual: float) -> None:
        # A residual falls by powers of ten: the part done is measured on that scale.
        done = min(1.0, float(np.log(residual) / np.log(settings.tolerance)))
        progress(ProgressEvent("iterating", done, f"iteration {iteration}, residual {residual:.1e}"))

    solution = solve_boundary(
        operator, operator.volume_potential, tolerance=settings.tolerance, cluster_of=clusters, tell=tell
    )
    volume = enclosed_volume(panels)
    mean = volume_integral(panels, solution.u, solution.q, 1.0) / volume
    balance = -float(panels.areas @ solution.q) / volume - 1.0
    if not (np.isfinite(mean) and abs(balance) <= settings.balance_limit):
        raise AccuracyError(
            f"the windows drain {1.0 + balance:.4g} of V/D (limit 1 ± {settings.balance_limit:g}) on {len(panels)} "
            "panels: faces cross one another or the mesh is too damaged; try heal='rebuild'"
        )
    seconds = time.perf_counter() - began
    return _Solution(
        rung, mesh, solution.u[back], solution.q[back], mean, balance, solution.residuals, seconds
    )


def _finer_wall(solution: _Solution) -> SizeLimit:
    """Smaller panels where the last solution varies most over them; elsewhere no limit."""
    mesh = solution.mesh
    coarse = coarse_panels(mesh.vertices, mesh.faces, solution.u, mesh.window_of >= 0)
    corners = mesh.vertices[mesh.faces]
    longest = np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max(axis=1)
    return SizeLimit(corners.mean(axis=1), np.where(coarse, 0.75 * longest, np.inf))


def _packed(placement: Placement, solution: _Solution, estimate: Estimate, d: float) -> EscapeResult:
    mesh = solution.mesh
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    volume = placement.surface.volume
    exit_density = -solution.q / volume
    windows = tuple(
        WindowResult(
            name=window.name,
            area_um2=float(areas[mesh.window_of == number].sum()),
            share=float((areas * exit_density)[mesh.window_of == number].sum()),
            permeability_um_s=window.permeability_um_s,
        )
        for number, window in enumerate(placement.windows)
    )
    return EscapeResult(
        name=placement.surface.name,
        vertices=mesh.vertices,
        faces=mesh.faces,
        parent_face=mesh.parent,
        panel_window=mesh.window_of,
        panel_time_s=solution.u / d,
        panel_exit_density_per_um2=exit_density,
        windows=windows,
        diffusion_um2_s=d,
        mean_time_s=estimate.mean / d,
        relative_error=estimate.relative_error,
        target=0.0,
        target_met=False,
        balance=solution.balance,
        residuals=solution.residuals,
        levels=(),
        wall_s=0.0,
    )


def _window_settings(windows: Sequence[Window]) -> list[dict[str, Any]]:
    """Windows as they were asked for, in plain values: what is needed to repeat the run."""
    rows = []
    for window in windows:
        kappa = window.permeability_um_s
        row = {"name": window.name, **asdict(window.shape), "permeability_um_s": kappa if np.isfinite(kappa) else None}
        rows.append(row)
    return rows


def _check_surface(surface: Surface) -> None:
    report = surface.health
    if surface.healing is not None or report is None:
        report = check_surface(surface.vertices, surface.faces, crossings=False)
    if not report.ok:
        first = next(finding for finding in report.findings if finding.severity == "error")
        raise SurfaceError(
            f"{surface.name} cannot be solved: {first.message}; read it with heal='auto' or pass it through "
            "heal_surface first",
            faces=first.faces,
        )


def _check_compartments(placement: Placement) -> None:
    """Every separate body needs a window: without one nothing leaves it and the time is infinite."""
    surface = placement.surface
    home = compartments(surface)
    served = set()
    for patch in placement.patches:
        faces = patch.faces if patch.disc is None else np.array([patch.touchdown_face])
        served |= set(home[faces].tolist())
    for body in range(int(home.max()) + 1):
        if body not in served:
            faces = np.flatnonzero(home == body)
            x, y, z = surface.vertices[surface.faces[faces]].mean(axis=(0, 1))
            raise WindowError(
                f"the separate body around ({x:.4g}, {y:.4g}, {z:.4g}) µm ({len(faces)} faces) has no window, so that "
                "nothing can leave it; give it one or remove the body"
            )


def _start_points(surface: Surface, start: Mapping[str, Sequence[float]]) -> dict[str, Floats]:
    """Named points, each inside the volume; refused before anything is computed."""
    points = {}
    for name, place in start.items():
        point = np.asarray(place, dtype=np.float64)
        if point.shape != (3,) or not np.isfinite(point).all():
            raise SettingsError(f"start point {name!r} is {place!r}; it must be three finite numbers in µm")
        points[name] = point
    if points:
        panels = make_panels(surface.vertices[surface.faces])
        nothing = np.zeros(len(panels))
        values = field_at(panels, nothing, nothing, 0.0, np.array(list(points.values())))
        for name, winding, gap in zip(points, values.winding, values.gap, strict=True):
            if winding < 0.5:
                x, y, z = points[name]
                raise SettingsError(
                    f"start point {name!r} at ({x:.4g}, {y:.4g}, {z:.4g}) µm lies outside the volume, about "
                    f"{gap:.3g} µm from the wall; move it inside, and check its unit"
                )
    return points


def _start_times(solution: _Solution, points: dict[str, Floats], d: float) -> dict[str, float]:
    if not points:
        return {}
    mesh = solution.mesh
    panels = make_panels(mesh.vertices[mesh.faces])
    values = field_at(
        panels, solution.u[panels.order], solution.q[panels.order], 1.0, np.array(list(points.values()))
    )
    return {name: float(value) / d for name, value in zip(points, values.u, strict=True)}


def _reading_notes(surface: Surface) -> list[str]:
    """Healing and warnings of the mesh, for whoever reads only the summary."""
    notes = []
    if surface.healing is not None:
        notes += [f"healing: {line}" for line in surface.healing.lines()]
    if surface.health is not None:
        notes += [finding.message for finding in surface.health.findings if finding.severity == "warning"]
    return notes
