"""What a prepared surface saves: the same questions put to it and to fresh solves, in turn, in one run.

    python tests/bench/what_if.py [--case meshes/bouton.toml] [--target 0.01] [--json FILE]

Seconds are processor seconds, so that other work on the machine disturbs them little; they are comparable within one
run only. A first solve compiles everything and is not counted.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from time import process_time
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(ROOT)]

import shapes
from bemescape import Window, prepare, read_case, solve_escape

RADIUS = 0.08


def questions(surface: Any, radius: float) -> dict[str, tuple[Window, float]]:
    """What is changed from one question to the next -> the window and D."""
    here, there = surface.vertices[surface.faces[0]].mean(axis=0), surface.vertices[surface.faces[-1]].mean(axis=0)

    def disc(place: Any, size: float, kappa: float | None = None) -> Window:
        return Window.disc("pore", centre=place, radius=size, permeability=kappa)

    return {
        "first": (disc(here, radius), 1.0),
        "D": (disc(here, radius), 3.0),
        "permeability": (disc(here, radius, 5.0), 1.0),
        "permeability again": (disc(here, radius, 1.0), 1.0),
        "radius": (disc(here, 0.8 * radius), 1.0),
        "place": (disc(there, 0.8 * radius), 1.0),
    }


def main() -> None:
    """Print one row for each question."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--case", type=Path, help="take the surface of a case file instead of a ball")
    parser.add_argument("--target", type=float, default=0.01)
    parser.add_argument("--json", type=Path)
    options = parser.parse_args()
    surface = shapes.ball(3) if options.case is None else read_case(options.case).load_surface()
    radius = RADIUS * (surface.area / 12.566) ** 0.5
    asked = questions(surface, radius)
    solve_escape(surface, [asked["permeability"][0]], 1.0, target=options.target)
    prepared = prepare(surface)
    rows = []
    print(f"{'changed':20} {'fresh s':>8} {'prepared s':>10} {'ratio':>6} {'kept rows':>10} {'difference':>11}")
    for changed, (window, d) in asked.items():
        began = process_time()
        fresh = solve_escape(surface, [window], d, target=options.target)
        middle = process_time()
        kept = prepared.solve([window], d, target=options.target)
        end = process_time()
        row = {
            "changed": changed,
            "fresh_s": middle - began,
            "prepared_s": end - middle,
            "kept_rows": kept.levels[-1]["kept_rows"],
            "difference": kept.mean_time_s / fresh.mean_time_s - 1.0,
            "stated": fresh.relative_error + kept.relative_error,
        }
        rows.append(row)
        ratio = row["fresh_s"] / max(row["prepared_s"], 1e-9)
        print(
            f"{changed:20} {row['fresh_s']:8.2f} {row['prepared_s']:10.2f} {ratio:6.1f} {row['kept_rows']:10.2f} "
            f"{row['difference']:+11.1e}",
            flush=True,
        )
    if options.json is not None:
        options.json.write_text(json.dumps(rows, indent=2))


if __name__ == "__main__":
    main()
