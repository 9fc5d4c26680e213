"""The main call: a surface, its windows and D in; escape times with their error out."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.averages import volume_integral
from bemescape.bem.indicator import coarse_panels
from bemescape.bem.sinks import with_discs
from bemescape.errors import AccuracyError, SettingsError, SurfaceError, WindowError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.results.accuracy import Estimate, Ladder, Rung
from bemescape.results.kept_meshes import KeptMesh, KeptMeshes
from bemescape.results.pores import PoreTable
from bemescape.results.prepared import PreparedMesh, prepare_mesh
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.spread import find_spread
from bemescape.results.starts import Start, check_starts, results_from_starts
from bemescape.results.ways_out import MOST_WINDOWS, chosen_windows, find_ways_out
from bemescape.surface.compartments import compartments
from bemescape.surface.health import check_surface
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.units import Quantity, diffusion_um2_s, fraction
from bemescape.windows.compact import pores_on_panels
from bemescape.windows.grade import GradedMesh, Placement, SizeLimit, graded, place_windows
from bemescape.windows.pores import PANELS_PER_PORE
from bemescape.windows.window import Window

__all__ = ["SolverSettings", "check_closed", "solve_escape", "solve_on"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SolverSettings:
    """What a user may turn, with defaults that serve.

    Attributes
    ----------
    max_panels : int or None
        Refinement stops here, above the target if need be. None: 60 000, or twice the surface's own faces where that
        is more.
    tolerance : float
        Residual of the linear system, relative.
    balance_limit : float
        A result whose windows drain more or less than V/D by this part is not handed out.
    """

    max_panels: int | None = None
    tolerance: float = 1e-6
    balance_limit: float = 0.02


@dataclass(frozen=True, eq=False)
class _Solution:
    """One resolution, for D = 1, panels in the order of the mesh."""

    rung: Rung
    mesh: GradedMesh
    u: Floats
    q: Floats
    smooth: Floats  # u without what is singular at compact pores
    pores: PoreTable | None
    outflow: Floats
    mean: float
    shares: Floats
    balance: float
    residuals: tuple[float, ...]
    seconds: float


def solve_escape(
    surface: Surface,
    windows: Sequence[Window],
    diffusion: Quantity,
    *,
    target: float | str = 0.005,
    start: Mapping[str, Start] | None = None,
    ways_out: bool | Sequence[str] | None = None,
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
    start : mapping of str to start, optional
        Where molecules start: a point (3,) in µm inside, a patch of the wall given like a window, or a `Ball`
        inside. The mean time from each is in `result.start`, more in `result.start_details`.
    ways_out : bool or sequence of str, optional
        Whether to find splitting probabilities and conditional times, or the windows to find them for. By default
        they are found if a start is named and there are 2 to 12 windows; `result.with_ways_out` finds them later.
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
        A quantity is wrong, a start lies outside, or a window of `ways_out` is unknown.
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
    check_closed(surface)
    return solve_on(
        surface, windows, diffusion, target=target, start=start, ways_out=ways_out, name=name,
        settings=settings or SolverSettings(), progress=progress,
    )  # fmt: skip


def solve_on(
    surface: Surface,
    windows: Sequence[Window],
    diffusion: Quantity,
    *,
    target: float | str,
    start: Mapping[str, Start] | None,
    ways_out: bool | Sequence[str] | None,
    name: str | None,
    settings: SolverSettings,
    progress: Progress,
    kept: KeptMeshes | None = None,
) -> EscapeResult:
    """`solve_escape` on a surface that is checked already; `kept` hands meshes from one solve to the next."""
    began = time.perf_counter()
    d = diffusion_um2_s(diffusion)
    wanted = fraction(target, "target error")
    progress(ProgressEvent("placing windows"))
    budget = settings.max_panels or max(60_000, 2 * len(surface.faces))
    placement = place_windows(surface, windows, most_meshed=budget * 5 // 6 // PANELS_PER_PORE)
    _check_compartments(placement)
    volume = placement.surface.volume
    starts = check_starts(placement.surface, start or {})
    names = _wanted_ways_out(placement.windows, wanted=ways_out, named_starts=bool(starts))

    ladder = Ladder(wanted, len(placement.patches), has_rims=bool(placement.patches))
    best: _Solution | None = None
    prepared: PreparedMesh | None = None
    limits: list[SizeLimit] = []
    levels: list[dict[str, float]] = []
    target_met = True
    while (rung := ladder.next_rung()) is not None:
        progress(ProgressEvent("imprinting windows", None, f"resolution {len(levels) + 1}"))
        same = None if kept is None else kept.same_place(placement, rung)
        if same is not None:
            mesh, limits = same.mesh, list(same.limits)
        else:
            if best is not None and rung.wall > best.rung.wall:
                limits.append(_finer_wall(best))
            mesh = graded(placement, rung.fineness, limits=limits, most_faces=2 * budget)
        if best is not None and len(mesh.faces) > budget:
            target_met = False
            break
        prepared = None  # two near fields at a time would double the memory
        best, prepared = _solved(placement, rung, mesh, d, settings, progress, kept)
        if kept is not None:
            kept.keep(placement, KeptMesh(rung, mesh, tuple(limits), prepared))
        ladder.has_rims = bool((mesh.window_of < 0).any() and (mesh.window_of >= 0).any())
        # Refinement leaves the pores' own error as it is: it has to stay so far below the target that both fit.
        ladder.target = max(wanted - _pores_error(best, volume), 0.5 * wanted)
        ladder.record(rung, best.mean, best.balance, best.shares)
        levels.append(
            {
                "panels": len(mesh.faces),
                "mean_time_s": best.mean / d,
                "iterations": len(best.residuals),
                "seconds": best.seconds,
                **({} if kept is None else {"kept_rows": prepared.kept_rows}),
            }
        )
    if best is None or prepared is None:
        raise SettingsError("no resolution was solved; raise max_panels")
    estimate, from_pores = ladder.estimate(), _pores_error(best, volume)
    error = estimate.relative_error + from_pores
    notes = [*placement.notes, *_reading_notes(surface)]
    if not target_met:
        notes.append(
            f"the panel budget of {budget} ended the refinement at an estimated error of "
            f"{error:.2%} (target {wanted:.2%}); raise max_panels or accept the error"
        )
    elif error > wanted:
        notes.append(
            f"{from_pores:.2%} of the estimated error of {error:.2%} (target {wanted:.2%}) is what compact pores leave "
            "out, which no refinement lowers; give them panels with compact = false, or accept the error"
        )
    target_met = target_met and error <= wanted
    order = prepared.panels.order
    raw = best
    sinks = None if best.pores is None else best.pores.sinks(best.outflow)
    best = replace(best, u=with_discs(prepared.panels, best.u[order], sinks, least=0.0)[prepared.back])
    result = _packed(placement, best, replace(estimate, relative_error=error), ladder.share_errors(), d)
    spread = find_spread(
        prepared,
        raw.u[order],
        raw.q[order],
        outflow=raw.outflow,
        diffusion_um2_s=d,
        mean_time_s=result.mean_time_s,
        relative_error=result.relative_error,
    )
    result = replace(result, spread=spread)
    if names is not None:
        chosen = chosen_windows(result.windows, names)
        result = replace(result, ways_out=find_ways_out(prepared, result, chosen))
    from_starts = results_from_starts(result, surface, starts)
    return replace(
        result,
        name=name or surface.name,
        target=wanted,
        target_met=target_met,
        levels=tuple(levels),
        start={name: row.mean_time_s for name, row in from_starts.items()},
        start_details=from_starts,
        notes=tuple(notes),
        settings={
            **asdict(settings),
            "target": wanted,
            "surface": surface.name,
            "windows": [window.described() for window in windows],
        },
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
    kept: KeptMeshes | None,
) -> tuple[_Solution, PreparedMesh]:
    began = time.perf_counter()
    kappa = np.array([window.permeability_um_s for window in placement.windows])
    table = _pore_table(placement, mesh)
    same = None if kept is None else kept.same_place(placement, rung)
    if same is not None and table is None:
        prepared = same.prepared.with_resistance(d / kappa, progress)
    else:
        # Rows of compact pores hold their permeability; the near field of their panels is taken over.
        earlier = None if kept is None else kept.latest_near_field(rung)
        prepared = prepare_mesh(
            mesh.vertices, mesh.faces, mesh.window_of, d / kappa,
            pores=None if table is None else table.compact(d / kappa), tolerance=settings.tolerance,
            earlier=earlier, keep=kept is not None, progress=progress,
        )  # fmt: skip
    panels, volume = prepared.panels, prepared.volume
    solution = prepared.solve(prepared.source, "iterating")
    mean = volume_integral(panels, solution.u, solution.q, 1.0, prepared.sinks(solution)) / volume
    balance = prepared.outflow(solution) / volume - 1.0
    if not (np.isfinite(mean) and abs(balance) <= settings.balance_limit):
        raise AccuracyError(
            f"the windows drain {1.0 + balance:.7g} of V/D (limit 1 ± {settings.balance_limit:g}) on {len(panels)} "
            "panels: faces cross one another or the mesh is too damaged; try heal='rebuild'"
        )
    flow = np.bincount(prepared.window_of + 1, weights=-panels.areas * solution.q, minlength=len(kappa) + 1)
    if table is not None:
        flow[table.window + 1] = solution.outflow
    solution_on_mesh = _Solution(
        rung=rung,
        mesh=mesh,
        u=solution.u[prepared.back],
        q=solution.q[prepared.back],
        smooth=prepared.without_pores(solution)[prepared.back],
        pores=table,
        outflow=solution.outflow,
        mean=mean,
        shares=flow[1:] / volume,
        balance=balance,
        residuals=solution.residuals,
        seconds=time.perf_counter() - began,
    )
    return solution_on_mesh, prepared


def _pore_table(placement: Placement, mesh: GradedMesh) -> PoreTable | None:
    pores = placement.pores
    if pores is None:
        return None
    panel, places = pores_on_panels(pores, mesh.vertices, mesh.faces)
    _, normals = triangle_areas_normals(mesh.vertices, mesh.faces[panel])
    return PoreTable(
        window=pores.number,
        panel=panel,
        centre_um=places,
        normal=normals,
        radius_um=pores.radius,
        curvature_per_um=pores.curvature,
        reach_um=pores.reach,
        resistance_error_per_um=pores.resistance_error,
    )


def _pores_error(solution: _Solution, volume: float) -> float:
    """Relative error of the mean time by what compact pores leave out."""
    return 0.0 if solution.pores is None else solution.pores.mean_error(solution.shares, volume, solution.mean)


def _finer_wall(solution: _Solution) -> SizeLimit:
    """Smaller panels where the last solution varies most over them; elsewhere no limit."""
    mesh = solution.mesh
    coarse = coarse_panels(mesh.vertices, mesh.faces, solution.smooth, mesh.window_of >= 0)
    corners = mesh.vertices[mesh.faces]
    longest = np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max(axis=1)
    return SizeLimit(corners.mean(axis=1), np.where(coarse, 0.75 * longest, np.inf))


def _packed(
    placement: Placement, solution: _Solution, estimate: Estimate, share_errors: Floats, d: float
) -> EscapeResult:
    mesh = solution.mesh
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    exit_density = -solution.q / placement.surface.volume
    window_areas = np.bincount(mesh.window_of + 1, weights=areas, minlength=len(placement.windows) + 1)[1:]
    if (pores := solution.pores) is not None:
        window_areas[pores.window] = np.pi * pores.radius_um**2
        # What a pore's resistance is off by moves its own flow by as much, and the others' with the mean time.
        own = 4.0 * pores.radius_um * pores.resistance_error_per_um * solution.shares[pores.window]
        share_errors = share_errors + _pores_error(solution, placement.surface.volume) * solution.shares
        share_errors[pores.window] += own
    windows = tuple(
        WindowResult(
            name=window.name,
            area_um2=float(window_areas[number]),
            share=float(solution.shares[number]),
            permeability_um_s=window.permeability_um_s,
            share_error=float(share_errors[number]),
        )
        for number, window in enumerate(placement.windows)
    )
    return EscapeResult(
        name=placement.surface.name,
        vertices=mesh.vertices,
        faces=mesh.faces,
        parent_face=placement.faces_given(mesh.parent),
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
        pores=solution.pores,
    )


def check_closed(surface: Surface) -> None:
    """Refuse a surface that cannot be solved, in a sentence."""
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
    if placement.pores is not None:
        served |= set(home[placement.pores.face].tolist())
    for body in range(int(home.max()) + 1):
        if body not in served:
            faces = np.flatnonzero(home == body)
            x, y, z = surface.vertices[surface.faces[faces]].mean(axis=(0, 1))
            raise WindowError(
                f"the separate body around ({x:.4g}, {y:.4g}, {z:.4g}) µm ({len(faces)} faces) has no window, so that "
                "nothing can leave it; give it one or remove the body"
            )


def _wanted_ways_out(
    windows: Sequence[Window], *, wanted: bool | Sequence[str] | None, named_starts: bool
) -> list[str] | None:
    """Names of the windows whose ways out are found; None for none. Refused before anything is computed."""
    names = [window.name for window in windows]
    if wanted is None:
        return names if named_starts and 2 <= len(names) <= MOST_WINDOWS else None
    if isinstance(wanted, bool):
        return names if wanted else None
    for name in wanted:
        if name not in names:
            raise SettingsError(
                f"ways_out names the window {name!r}, which is not given; the windows are "
                f"{', '.join(map(repr, names[:12]))}"
            )
    return list(wanted) or None


def _reading_notes(surface: Surface) -> list[str]:
    """Healing and warnings of the mesh, for whoever reads only the summary."""
    notes = []
    if surface.healing is not None:
        notes += [f"healing: {line}" for line in surface.healing.lines()]
    if surface.health is not None:
        notes += [finding.message for finding in surface.health.findings if finding.severity == "warning"]
    return notes
