"""Sizes of triangles and shells, and equal things among them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "altitudes",
    "box_diagonal",
    "edge_lengths",
    "equal_rows",
    "face_volumes",
    "radius_ratios",
    "sums",
    "triangle_keys",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def box_diagonal(vertices: Floats) -> float:
    """Diagonal of the bounding box in µm; 0 for no vertices."""
    return float(np.linalg.norm(np.ptp(vertices, axis=0))) if len(vertices) else 0.0


def face_volumes(vertices: Floats, faces: Ints, origin: Floats) -> Floats:
    """Signed volume (m,) in µm³ of the tetrahedron between each face and `origin` (divergence theorem)."""
    a, b, c = (vertices[faces[:, k]] - origin for k in range(3))
    volumes: Floats = np.einsum("ij,ij->i", a, np.cross(b, c)) / 6.0
    return volumes


def edge_lengths(vertices: Floats, faces: Ints) -> Floats:
    """Lengths (m, 3) in µm of the edges from corner k to corner k+1."""
    corners = vertices[faces]
    lengths: Floats = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2)
    return lengths


def altitudes(areas: Floats, lengths: Floats) -> Floats:
    """Smallest altitude (m,) in µm: twice the area over the longest edge, 0 for a point."""
    longest = lengths.max(axis=1)
    heights: Floats = np.divide(2.0 * areas, longest, out=np.zeros_like(areas), where=longest > 0.0)
    return heights


def radius_ratios(areas: Floats, lengths: Floats) -> Floats:
    """Twice the radius of the inscribed over that of the circumscribed circle (m,): 1 equilateral, 0 flat.

    2r/R = 8 A² / (s·abc) with A the area, s half the perimeter and a, b, c the edges.
    """
    half = 0.5 * lengths.sum(axis=1)
    below = half * lengths.prod(axis=1)
    ratios = np.divide(8.0 * areas**2, below, out=np.zeros_like(areas), where=below > 0.0)
    capped: Floats = np.minimum(ratios, 1.0)
    return capped


def sums(group: Ints, values: NDArray[Any], count: int) -> Floats:
    """Sum of `values` (k,) or (k, d) over each of `count` groups: (count,) or (count, d)."""
    if values.ndim == 1:
        return np.asarray(np.bincount(group, weights=values, minlength=count), dtype=np.float64)
    return np.stack([sums(group, column, count) for column in values.T], axis=1)


def equal_rows(rows: NDArray[np.generic]) -> Ints:
    """Number (r,) of each row such that equal rows share it; numbers follow the order of first appearance."""
    order = np.lexsort(rows.T[::-1])
    ordered = rows[order]
    new = np.r_[True, (ordered[1:] != ordered[:-1]).any(axis=1)] if len(rows) else np.zeros(0, dtype=bool)
    group = np.empty(len(rows), dtype=np.int64)
    group[order] = np.cumsum(new) - 1
    # lexsort is stable, so the first row of each group is the one that appears first.
    first = order[new]
    rank = np.empty(len(first), dtype=np.int64)
    rank[np.argsort(first)] = np.arange(len(first))
    return rank[group]


def triangle_keys(faces: Ints) -> Ints:
    """Number (m,) of each face such that faces with the same three corners, in any order, share it."""
    return equal_rows(np.sort(faces, axis=1))
