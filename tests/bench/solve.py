"""Seconds, iterations and memory of the solve against panels, and against peers at equal error, in one run.

    python tests/bench/solve.py [--peers] [--largest 40000] [--json FILE]

Peers are what a user would put together from general-purpose libraries: dense Galerkin matrices by bempp-cl with LU,
and quadratic finite elements by scikit-fem on tetrahedra. Every case runs in a process of its own, warm (a small solve
first, so that nothing is compiled while the clock runs); seconds are comparable within one run only.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from time import perf_counter
from typing import Any

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(ROOT)]

import exact
import shapes
from bemescape import Window, read_case, solve_escape
from bemescape.bem.averages import volume_integral
from bemescape.results.prepared import prepare_mesh
from bemescape.windows.grade import Fineness, GradedMesh, graded, place_windows
from tests.bench.child import in_child

SIZES = (2_000, 5_000, 10_000, 20_000, 40_000)
CAP = 0.5
AXIS = (0.3, 0.5, 0.81)


def _placement(shape: str) -> Any:
    if shape == "ball":
        surface = shapes.ball(2)
        return place_windows(surface, [_cap(surface)])
    case = read_case(ROOT / "meshes" / {"spine": "spine.toml", "branched": "mitochondrion.toml"}[shape])
    surface = case.load_surface()
    return place_windows(surface, case.windows_for(surface))


def _cap(surface: Any) -> Window:
    return Window.disc("cap", centre=shapes.on_ball(surface, AXIS), radius=2.0 * np.sin(CAP / 2.0))


def _mesh_of(shape: str, panels: int) -> GradedMesh:
    """The graded mesh with about so many panels: the size allowed on the wall is searched for."""
    placement = _placement(shape)
    rim = (12.0, 4) if panels < 4_000 else (24.0, 7)
    low, high = 100.0, 4.0 * panels
    for _ in range(12):
        middle = np.sqrt(low * high)
        mesh = graded(placement, Fineness(*rim, middle))
        if len(mesh.faces) > panels:
            high = middle
        else:
            low = middle
    return mesh


def ours(shape: str, panels: int) -> dict[str, Any]:
    """One resolution: near field, preconditioner, iteration, mean."""
    warm = shapes.ball(2)
    solve_escape(warm, [_cap(warm)], 1.0, target=0.5)
    mesh = _mesh_of(shape, panels)
    started = perf_counter()
    prepared = prepare_mesh(
        mesh.vertices, mesh.faces, mesh.window_of, np.zeros(mesh.window_of.max() + 1), tolerance=1e-6
    )
    solution = prepared.solve(prepared.solver.operator.volume_potential, "iterating")
    mean = volume_integral(prepared.panels, solution.u, solution.q, 1.0) / prepared.volume
    return {
        "shape": shape,
        "panels": len(mesh.faces),
        "seconds": perf_counter() - started,
        "iterations": len(solution.residuals),
        "pairs_per_panel": prepared.solver.operator.near_double.nnz / len(mesh.faces),
        "mean_time_s": mean,
    }


def whole(target: float) -> dict[str, Any]:
    """The whole call on the ball with a cap: reading aside, everything a user waits for."""
    warm = shapes.ball(2)
    solve_escape(warm, [_cap(warm)], 1.0, target=0.5)
    surface = shapes.ball(3)
    started = perf_counter()
    result = solve_escape(surface, [_cap(surface)], 1.0, target=target)
    return {"panels": len(result.faces), "seconds": perf_counter() - started, "mean_time_s": result.mean_time_s}


def first_call() -> dict[str, Any]:
    """Compilation: the first solve of a process whose cache is empty."""
    surface = shapes.ball(2)
    started = perf_counter()
    solve_escape(surface, [_cap(surface)], 1.0, target=0.5)
    return {"seconds": perf_counter() - started}


def _growth(rows: list[dict[str, Any]]) -> float:
    panels = np.log([row["panels"] for row in rows])
    return float(np.polyfit(panels, np.log([row["seconds"] for row in rows]), 1)[0])


def _scaling(largest: int) -> list[dict[str, Any]]:
    rows = []
    print(f"{'shape':10} {'panels':>7} {'seconds':>8} {'iterations':>10} {'pairs/panel':>11} {'peak MB':>8}")
    for shape in ("ball", "spine", "branched"):
        mine = []
        for panels in SIZES:
            if panels > largest or (shape != "ball" and panels < 10_000):
                continue  # the segmented shapes have 8 000 and 12 000 triangles of their own
            row = in_child(ours, shape, panels)
            mine.append(row)
            print(
                f"{shape:10} {row['panels']:7d} {row['seconds']:8.2f} {row['iterations']:10d} "
                f"{row['pairs_per_panel']:11.0f} {row['peak_mb']:8.0f}",
                flush=True,
            )
        if len(mine) > 1:
            print(f"{shape:10} growth exponent {_growth(mine[-3:]):.2f}")
        rows += mine
    return rows


def _against_peers() -> dict[str, Any]:
    """The ball with a cap of half-angle 0.5 (exact mean known), each at the size that brings it below 0.5 %."""
    from reference.tetrahedra import DiscWindow

    from tests.bench.peers_bem import bem_peer
    from tests.bench.peers_fem import fem_peer

    value = exact.CAP_MEAN[CAP]
    mine = in_child(ours, "ball", 2_000)
    surface = shapes.ball(3)
    mesh = graded(place_windows(surface, [_cap(surface)]), Fineness(12.0, 4, 500.0))
    bem = in_child(bem_peer, mesh.vertices, mesh.faces, mesh.window_of)
    window = DiscWindow(np.array(shapes.on_ball(surface, AXIS)), 2.0 * np.sin(CAP / 2.0))
    fem = in_child(fem_peer, surface.vertices, surface.faces, [window], halvings=2)
    table = {
        "ours": (mine["panels"], mine["seconds"], mine["mean_time_s"], mine["peak_mb"]),
        "dense Galerkin + LU": (
            len(mesh.faces), bem["seconds_assembly"] + bem["seconds_solve"], bem["mean_time_s"], bem["peak_mb"]),
        "quadratic elements": (
            fem["unknowns"], fem["seconds_assembly"] + fem["seconds_solve"], fem["mean_time_s"], fem["peak_mb"]),
        "quadratic elements with meshing": (
            fem["unknowns"],
            fem["seconds_meshing"] + fem["seconds_assembly"] + fem["seconds_solve"],
            fem["mean_time_s"],
            fem["peak_mb"],
        ),
    }  # fmt: skip
    print(f"\n{'method':34} {'unknowns':>9} {'seconds':>8} {'ratio':>7} {'error':>8} {'peak MB':>8}")
    for name, (unknowns, seconds, mean, peak) in table.items():
        print(
            f"{name:34} {unknowns:9d} {seconds:8.2f} {seconds / mine['seconds']:7.1f} {mean / value - 1.0:+8.2%} "
            f"{peak:8.0f}"
        )
    return {
        name: dict(zip(("unknowns", "seconds", "mean_time_s", "peak_mb"), row, strict=True))
        for name, row in table.items()
    }


def main() -> None:
    """Print the tables; write them as JSON where asked."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--peers", action="store_true", help="also the peers: some minutes")
    parser.add_argument("--largest", type=int, default=SIZES[-1])
    parser.add_argument("--json", type=Path)
    options = parser.parse_args()
    answer: dict[str, Any] = {"scaling": _scaling(options.largest)}
    answer["whole"] = in_child(whole, 0.005)
    error = answer["whole"]["mean_time_s"] / exact.CAP_MEAN[CAP] - 1.0
    print(f"\nwhole call, ball with a cap at 0.5 %: {answer['whole']['seconds']:.1f} s, true error {error:+.2%}")
    if options.peers:
        answer["peers"] = _against_peers()
    if options.json:
        options.json.write_text(json.dumps(answer, indent=2), encoding="utf-8")


if __name__ == "__main__":
    main()
