"""A result from one mesh alone: for what can be checked without running through several resolutions."""

import numpy as np

from bemescape.bem.averages import volume_integral
from bemescape.bem.sinks import with_discs
from bemescape.bem.solve import BoundarySolver
from bemescape.escape import _pore_table
from bemescape.progress import silent
from bemescape.results.accuracy import Rung
from bemescape.results.prepared import PreparedMesh, prepare_mesh
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.spread import find_spread
from bemescape.results.ways_out import find_ways_out
from bemescape.windows.grade import graded, place_windows


def solved_once(surface, windows, *, rim=1, wall=0, ways_out=False, spread=True, resistance_of=None):
    """D = 1; errors are stated as 0. `resistance_of` (pore rows) replaces the resistances of compact pores."""
    placement = place_windows(surface, windows)
    windows = placement.windows
    mesh = graded(placement, Rung(rim, wall).fineness)
    kappa = np.array([window.permeability_um_s for window in windows])
    table = _pore_table(placement, mesh)
    pores = None if table is None else table.compact(1.0 / kappa)
    prepared = prepare_mesh(mesh.vertices, mesh.faces, mesh.window_of, 1.0 / kappa, pores=pores, tolerance=1e-7)
    panels, volume = prepared.panels, prepared.volume
    if resistance_of is not None:
        prepared.solver.operator.pores.resistance[:] = resistance_of(prepared.solver.operator.pores)
        prepared = PreparedMesh(panels, BoundarySolver(prepared.solver.operator, tolerance=1e-7), 1e-7, silent)
    solution = prepared.solve(prepared.source, "iterating")
    sinks = prepared.sinks(solution)
    mean = volume_integral(panels, solution.u, solution.q, 1.0, sinks) / volume
    shares = np.bincount(prepared.window_of + 1, -panels.areas * solution.q, len(windows) + 1)[1:] / volume
    areas = np.bincount(prepared.window_of + 1, panels.areas, len(windows) + 1)[1:]
    if table is not None:
        shares[table.window] = solution.outflow / volume
        areas[table.window] = np.pi * table.radius_um**2
    values = {
        "name": "one mesh",
        "vertices": mesh.vertices,
        "faces": mesh.faces,
        "parent_face": placement.faces_given(mesh.parent),
        "panel_window": mesh.window_of,
        "panel_time_s": with_discs(panels, solution.u, sinks, least=0.0)[prepared.back],
        "panel_exit_density_per_um2": -solution.q[prepared.back] / volume,
        "windows": tuple(
            WindowResult(
                window.name,
                float(area),
                float(share),
                window.permeability_um_s,
                0.0,
            )
            for window, area, share in zip(windows, areas, shares, strict=True)
        ),
        "diffusion_um2_s": 1.0,
        "mean_time_s": mean,
        "relative_error": 0.0,
        "target": 0.005,
        "target_met": True,
        "balance": prepared.outflow(solution) / volume - 1.0,
        "residuals": solution.residuals,
        "levels": (),
        "wall_s": 0.0,
        "settings": {"tolerance": 1e-7},
        "pores": table,
    }
    if not spread:
        return EscapeResult(**values)
    values["spread"] = find_spread(
        prepared,
        solution.u,
        solution.q,
        outflow=solution.outflow,
        diffusion_um2_s=1.0,
        mean_time_s=mean,
        relative_error=0.0,
    )
    result = EscapeResult(**values)
    if not ways_out:
        return result
    values["ways_out"] = find_ways_out(prepared, result, range(len(windows)))
    return EscapeResult(**values)
