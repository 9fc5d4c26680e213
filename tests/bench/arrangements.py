"""Seconds of the reduced model for many sites, and of 10 000 arrangements by it.

    python tests/bench/arrangements.py [--sites 60] [--open 5] [--case meshes/bouton.toml]

Processor seconds, warm.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from time import process_time

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(ROOT)]

import shapes
from bemescape import Window, read_case
from bemescape.arrangements.reduced import reduced_model
from bemescape.arrangements.search import searched
from bemescape.arrangements.sites import candidate_sites


def main() -> None:
    """Print one line for the model and one for the search."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sites", type=int, default=60)
    parser.add_argument("--open", type=int, default=5)
    parser.add_argument("--case", type=Path, help="take the surface of a case file instead of a ball")
    options = parser.parse_args()
    surface = shapes.ball(4) if options.case is None else read_case(options.case).load_surface()
    radius = 0.05 * (surface.area / 12.566) ** 0.5
    few, many = (
        candidate_sites(surface, Window.scatter("site", count=count, radius=radius, seed=1), 2)
        for count in (2, options.sites)
    )
    reduced_model(few, 0.0)
    began = process_time()
    model = reduced_model(many, 0.0)
    middle = process_time()
    found = searched(model.mean_times, many.places_um, options.open, most=10_000, seed=0)
    end = process_time()
    print(f"reduced model of {options.sites} sites on {model.panels} panels: {middle - began:.1f} s")
    print(f"{found.tried} arrangements of {options.open}: {end - middle:.2f} s")


if __name__ == "__main__":
    main()
