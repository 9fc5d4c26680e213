"""Far-field passes: expansions against the direct loop and against fmm3dpy (lfmm3d), at measured errors.

Run: python tests/bench/far_field.py [--sizes 10000 30000 100000] [--shapes sphere tube graded cube] [--json FILE]

Every error is relative, root mean square, over 300 targets, against double-precision sums of the kernel that the method
evaluates: panels with their spread for ours, bare points for fmm3dpy. Wall times are medians of `--repeats`; processor
time is given beside them, since fmm3dpy from the wheel uses one core.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable
from pathlib import Path
from time import perf_counter, process_time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.far import Targets, double_layer, panel_targets
from bemescape.bem.fmm import FastSums
from bemescape.bem.panels import Panels, make_panels

sys.path.insert(0, str(Path(__file__).parents[1] / "bem" / "fmm"))
import fmm_sets

Floats = NDArray[np.float64]

#: Above this many panels the direct loop is timed on some of the targets and scaled up.
DIRECT_LIMIT = 40_000


def tube(n: int, rng: np.random.Generator) -> Floats:
    """Sixty-three thin tubes, each joined to a longer one: long, branched, nowhere thick."""
    start, direction, reach = np.zeros((1, 3)), np.array([[0.0, 0.0, 1.0]]), 1.0
    starts, directions, reaches = [start], [direction], [np.array([reach])]
    for _ in range(5):
        start = np.repeat(start + reach * direction, 2, axis=0)
        direction = np.repeat(direction, 2, axis=0) + 0.7 * rng.normal(size=start.shape)
        direction /= np.linalg.norm(direction, axis=1, keepdims=True)
        reach *= 0.7
        starts.append(start)
        directions.append(direction)
        reaches.append(np.full(len(start), reach))
    a, d, length = np.concatenate(starts), np.concatenate(directions), np.concatenate(reaches)
    which = rng.choice(len(a), n, p=length / length.sum())
    u = np.cross(d, [0.3, 0.5, 0.8])
    u /= np.linalg.norm(u, axis=1, keepdims=True)
    v = np.cross(d, u)
    angle = rng.uniform(0.0, 2.0 * np.pi, n)[:, None]
    normals = np.cos(angle) * u[which] + np.sin(angle) * v[which]
    centres = a[which] + (rng.uniform(size=n) * length[which])[:, None] * d[which] + 0.03 * normals
    area = 2.0 * np.pi * 0.03 * length.sum() / n
    return fmm_sets.small_triangles(centres, normals, np.full(n, np.sqrt(area)), rng)


SHAPES: dict[str, Callable[[int, np.random.Generator], Floats]] = {
    "sphere": fmm_sets.sphere,
    "tube": tube,
    "graded": fmm_sets.clustered,
    "cube": fmm_sets.cube,
}


def timed(run: Callable[[], Floats], repeats: int) -> tuple[Floats, dict[str, float]]:
    """Result, and medians of wall and processor seconds with the spread of the first, after one warm-up."""
    out = run()
    walls, cpus = [], []
    for _ in range(repeats):
        wall, cpu = perf_counter(), process_time()
        out = run()
        walls.append(perf_counter() - wall)
        cpus.append(process_time() - cpu)
    return out, {
        "wall_s": float(np.median(walls)),
        "wall_s_least": min(walls),
        "wall_s_most": max(walls),
        "cpu_s": float(np.median(cpus)),
    }


def compare(
    panels: Panels, density: Floats, tolerances: list[float], epsilons: list[float], repeats: int
) -> list[dict[str, Any]]:
    """One row per method and setting for the double layer of `density` on `panels`."""
    every, at = np.arange(len(panels)), panel_targets(panels)
    pick = np.random.default_rng(0).choice(len(panels), 300, replace=False)
    some = Targets(at.points[pick], at.normals[pick], at.spread[pick])
    exact = fmm_sets.direct("double", some, panels, every, density)
    rows = []
    for tolerance in tolerances:
        begin = perf_counter()
        sums = FastSums(panels, tolerance=tolerance)
        sums.double(every, density)
        first = perf_counter() - begin
        got, times = timed(lambda sums=sums: sums.double(every, density), repeats)
        rows.append(
            {"method": f"expansions {tolerance:g}", "error": fmm_sets.relative(got[pick], exact), "first_s": first}
            | times
        )
    part = len(panels) if len(panels) <= DIRECT_LIMIT else 4096
    lead = Targets(at.points[:part], at.normals[:part], at.spread[:part])
    _, times = timed(lambda: double_layer(lead, panels, every, density), min(repeats, 3))
    got = double_layer(some, panels, every, density)
    scale = len(panels) / part
    rows.append(
        {"method": "direct" if part == len(panels) else "direct (scaled)", "error": fmm_sets.relative(got, exact)}
        | {key: value * scale for key, value in times.items()}
    )
    return rows + [peer(panels, density, epsilon, pick, repeats) for epsilon in epsilons]


def peer(panels: Panels, density: Floats, epsilon: float, pick: NDArray[np.int64], repeats: int) -> dict[str, Any]:
    """fmm3dpy's dipoles at the centroids; its kernel is 1/4πr."""
    from fmm3dpy import lfmm3d

    sources = np.asfortranarray(panels.centroids.T)
    dipoles = np.asfortranarray((panels.normals * (panels.areas * density)[:, None]).T)
    got, times = timed(lambda: lfmm3d(eps=epsilon, sources=sources, dipvec=dipoles, pg=1).pot, min(repeats, 3))
    exact = np.empty(len(pick))
    for k, i in enumerate(pick):
        d = panels.centroids[i] - panels.centroids
        square = (d**2).sum(axis=1)
        square[i] = np.inf
        exact[k] = ((d * dipoles.T).sum(axis=1) / square**1.5).sum() / (4.0 * np.pi)
    return {"method": f"fmm3dpy {epsilon:g}", "error": fmm_sets.relative(got[pick], exact)} | times


def main() -> None:
    """Print a table and write JSON."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--sizes", type=int, nargs="+", default=[10_000, 30_000, 100_000, 300_000])
    parser.add_argument("--shapes", nargs="+", choices=list(SHAPES), default=list(SHAPES))
    parser.add_argument("--tolerances", type=float, nargs="+", default=[1e-4, 1e-5, 1e-6])
    parser.add_argument("--epsilons", type=float, nargs="*", default=[1e-3, 1e-4], help="fmm3dpy; none leaves it out")
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--json", type=Path, default=Path("far_field.json"))
    chosen = parser.parse_args()
    table = []
    print(f"{'shape':8} {'panels':>8} {'method':18} {'error':>8} {'wall ms':>9} {'cpu ms':>9}")
    for shape in chosen.shapes:
        for size in chosen.sizes:
            rng = np.random.default_rng(7)
            panels = make_panels(SHAPES[shape](size, rng))
            density = fmm_sets.density_on(panels, rng)
            for row in compare(panels, density, chosen.tolerances, chosen.epsilons, chosen.repeats):
                table.append({"shape": shape, "panels": len(panels)} | row)
                print(
                    f"{shape:8} {len(panels):8d} {row['method']:18} {row['error']:8.1e} "
                    f"{1e3 * row['wall_s']:9.1f} {1e3 * row['cpu_s']:9.1f}",
                    flush=True,
                )
    chosen.json.write_text(json.dumps(table, indent=1))


if __name__ == "__main__":
    main()
