"""A result from one mesh alone: for what can be checked without running through several resolutions."""

import numpy as np

from bemescape.bem.averages import volume_integral
from bemescape.results.accuracy import Rung
from bemescape.results.prepared import prepare_mesh
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.spread import find_spread
from bemescape.results.ways_out import find_ways_out
from bemescape.windows.grade import graded, place_windows


def solved_once(surface, windows, *, rim=1, wall=0, ways_out=False):
    """D = 1; errors are stated as 0."""
    placement = place_windows(surface, windows)
    mesh = graded(placement, Rung(rim, wall).fineness)
    kappa = np.array([window.permeability_um_s for window in windows])
    prepared = prepare_mesh(mesh.vertices, mesh.faces, mesh.window_of, 1.0 / kappa, tolerance=1e-7)
    panels, volume = prepared.panels, prepared.volume
    solution = prepared.solve(prepared.solver.operator.volume_potential, "iterating")
    mean = volume_integral(panels, solution.u, solution.q, 1.0) / volume
    of_window = [prepared.window_of == number for number in range(len(windows))]
    values = {
        "name": "one mesh",
        "vertices": mesh.vertices,
        "faces": mesh.faces,
        "parent_face": placement.faces_given(mesh.parent),
        "panel_window": mesh.window_of,
        "panel_time_s": solution.u[prepared.back],
        "panel_exit_density_per_um2": -solution.q[prepared.back] / volume,
        "windows": tuple(
            WindowResult(
                window.name,
                float(panels.areas[mask].sum()),
                -float(panels.areas[mask] @ solution.q[mask]) / volume,
                window.permeability_um_s,
                0.0,
            )
            for window, mask in zip(windows, of_window, strict=True)
        ),
        "diffusion_um2_s": 1.0,
        "mean_time_s": mean,
        "relative_error": 0.0,
        "target": 0.005,
        "target_met": True,
        "balance": -float(panels.areas @ solution.q) / volume - 1.0,
        "residuals": solution.residuals,
        "levels": (),
        "wall_s": 0.0,
        "settings": {"tolerance": 1e-7},
    }
    values["spread"] = find_spread(
        prepared, solution.u, solution.q, diffusion_um2_s=1.0, mean_time_s=mean, relative_error=0.0
    )
    result = EscapeResult(**values)
    if not ways_out:
        return result
    values["ways_out"] = find_ways_out(prepared, result, range(len(windows)))
    return EscapeResult(**values)
