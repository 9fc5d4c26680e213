"""Rims: the edges where windows end, and distances to them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.windows.mesh_edits import mesh_edges

__all__ = ["rim_edges", "segment_distance"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def rim_edges(faces: Ints, window_of: Ints) -> tuple[Ints, Ints]:
    """Edges (e, 2) between faces of different windows or of a window and the wall, and a window of each (e,)."""
    edges, of_face = mesh_edges(faces)
    lowest = np.full(len(edges), np.iinfo(np.int64).max)
    highest = np.full(len(edges), np.iinfo(np.int64).min)
    np.minimum.at(lowest, of_face.ravel(), np.repeat(window_of, 3))
    np.maximum.at(highest, of_face.ravel(), np.repeat(window_of, 3))
    chosen = lowest != highest
    return edges[chosen], highest[chosen]


def segment_distance(points: Floats, start: Floats, end: Floats, *, candidates: int = 12) -> tuple[Floats, Ints]:
    """Distance (k,) from points (k, 3) to the nearest of the segments start–end (s, 3), and which one (k,).

    Exact among the `candidates` segments with the nearest middles.
    """
    count = min(candidates, len(start))
    _, near = cKDTree(0.5 * (start + end)).query(points, k=count)
    near = near.reshape(len(points), count)
    a, along = start[near], (end - start)[near]
    square = np.maximum(np.einsum("ksx,ksx->ks", along, along), 1e-300)
    part = np.clip(np.einsum("ksx,ksx->ks", points[:, None] - a, along) / square, 0.0, 1.0)
    gap = np.linalg.norm(points[:, None] - a - part[..., None] * along, axis=2)
    best = gap.argmin(axis=1)
    rows = np.arange(len(points))
    return gap[rows, best], near[rows, best]
