"""Triangles for a flat region with given border vertices: constrained Delaunay, with points of its own inside.

The border must keep its vertices, since faces of the wall end there. Inner points lie on a triangular lattice that
coarsens with the distance from the border, so that no triangle spans from one side of the region to the other.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay, cKDTree

from bemescape.errors import WindowError
from bemescape.windows.mesh_edits import face_pairs, mesh_edges

__all__ = ["inside_loops", "triangulated_region"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]

#: Lattices, each twice as wide as the one before; the finest has the median border edge.
_LATTICES = 12
_MOST_INNER = 20_000


def triangulated_region(loops: Sequence[Floats]) -> tuple[Floats, Ints]:
    """Inner points (k, 2) and triangles (t, 3) of the region between loops.

    Parameters
    ----------
    loops : sequence of (n_i, 2) float64
        The outer border counter-clockwise, then the holes clockwise.

    Returns
    -------
    inner, triangles
        Triangles, counter-clockwise, count through the vertices of the loops in turn and then through `inner`. Every
        border edge is an edge of exactly one triangle.

    Raises
    ------
    WindowError
        The border crosses itself.
    """
    border = np.concatenate(loops)
    ends = _border_edges([len(loop) for loop in loops])
    inner = _inner_points(loops, border, ends)
    points = np.concatenate([border, inner])
    # Delaunay works best near the origin and at unit size.
    scaled = (points - border.mean(axis=0)) / np.ptp(border, axis=0).max()
    triangles = Delaunay(scaled).simplices.astype(np.int64)
    triangles = _counter_clockwise(scaled, triangles)
    triangles = _with_edges(scaled, triangles, ends)
    triangles = _left_of_border(triangles, ends, len(points))
    _check_border(triangles, ends, len(points))
    return inner, triangles


def inside_loops(points: Floats, loops: Sequence[Floats]) -> Mask:
    """Whether points (k, 2) lie inside an odd number of closed loops (n_i, 2)."""
    odd = np.zeros(len(points), bool)
    for loop in loops:
        for start, end in zip(loop, np.roll(loop, -1, axis=0), strict=True):
            spans = (start[1] > points[:, 1]) != (end[1] > points[:, 1])
            rise = end[1] - start[1]
            along = (points[:, 1] - start[1]) / (rise if rise != 0.0 else 1.0)
            odd ^= spans & (points[:, 0] < start[0] + along * (end[0] - start[0]))
    return odd


def _border_edges(sizes: Sequence[int]) -> Ints:
    """Ends (n, 2) of the border edges in their direction."""
    parts, first = [], 0
    for size in sizes:
        around = first + np.arange(size)
        parts.append(np.stack([around, np.roll(around, -1)], axis=1))
        first += size
    return np.concatenate(parts)


def _inner_points(loops: Sequence[Floats], border: Floats, ends: Ints) -> Floats:
    """Lattice points whose spacing is about a quarter of the distance to the border, and at least a border edge."""
    lengths = np.linalg.norm(border[ends[:, 1]] - border[ends[:, 0]], axis=1)
    low, high = border.min(axis=0), border.max(axis=0)
    # Wider from the start where even the finest lattice would be too many points.
    finest = max(float(np.median(lengths)), float(np.sqrt(np.prod(high - low) / _MOST_INNER)))
    # Long border edges get points along them, which only serve to measure distances.
    pieces = np.maximum(1, np.ceil(lengths / finest)).astype(int)
    row = np.repeat(np.arange(len(ends)), pieces)
    part = (np.arange(len(row)) - np.repeat(np.cumsum(pieces) - pieces, pieces)) / pieces[row]
    along = border[ends[row, 0]] + part[:, None] * (border[ends[row, 1]] - border[ends[row, 0]])
    tree = cKDTree(along)
    found = []
    for level in range(_LATTICES):
        spacing = finest * 2.0**level
        lattice = _lattice(low, high, spacing)
        if len(lattice) == 0:
            break
        gap, _ = tree.query(lattice)
        nearest, farthest = (0.7 * finest if level == 0 else 4.0 * spacing / 2.0), 4.0 * spacing
        lattice = lattice[(gap >= nearest) & (gap < farthest)]
        found.append(lattice[inside_loops(lattice, loops)])
    return np.concatenate(found) if found else np.zeros((0, 2))


def _lattice(low: Floats, high: Floats, spacing: float) -> Floats:
    """Triangular lattice in a box; that of twice the spacing is part of it."""
    rise = spacing * np.sqrt(0.75)
    rows = np.arange(np.ceil(low[1] / rise), np.floor(high[1] / rise) + 1)
    points = []
    for row in rows:
        shift = 0.5 * row
        columns = np.arange(np.ceil(low[0] / spacing - shift), np.floor(high[0] / spacing - shift) + 1)
        points.append(np.column_stack([(columns + shift) * spacing, np.full(len(columns), row * rise)]))
    return np.concatenate(points) if points else np.zeros((0, 2))


def _cross(a: Floats, b: Floats, c: Floats) -> Floats:
    """Twice the signed area of triangles a b c."""
    return np.asarray(
        (b[..., 0] - a[..., 0]) * (c[..., 1] - a[..., 1]) - (b[..., 1] - a[..., 1]) * (c[..., 0] - a[..., 0])
    )


def _counter_clockwise(points: Floats, triangles: Ints) -> Ints:
    turned = _cross(*(points[triangles[:, k]] for k in range(3))) < 0.0
    triangles[turned] = triangles[turned][:, ::-1]
    return triangles


def _with_edges(points: Floats, triangles: Ints, ends: Ints) -> Ints:
    """Flip edges until every border edge is there (Sloan 1993, doi:10.1016/0045-7949(93)90239-A)."""
    faces = triangles.copy()
    at: dict[tuple[int, int], int] = {}
    for number, (a, b, c) in enumerate(faces.tolist()):
        at[a, b] = at[b, c] = at[c, a] = number

    def apex(tail: int, head: int) -> int:
        a, b, c = faces[at[tail, head]].tolist()
        return int(a + b + c - tail - head)

    def crosses(tail: int, head: int, p: int, q: int) -> bool:
        if tail in (p, q) or head in (p, q):
            return False
        first = _cross(points[p], points[q], points[tail]) * _cross(points[p], points[q], points[head])
        second = _cross(points[tail], points[head], points[p]) * _cross(points[tail], points[head], points[q])
        return bool(first < 0.0 and second < 0.0)

    for p, q in ends.tolist():
        if (p, q) in at or (q, p) in at:
            continue
        waiting = [(a, b) for a, b in at if a < b and (b, a) in at and crosses(a, b, p, q)]
        patience = 20 * (len(waiting) + 1) ** 2
        while waiting and patience > 0:
            patience -= 1
            a, b = waiting.pop(0)
            c, d = apex(a, b), apex(b, a)
            # The quadrilateral a d b c must be convex for its other diagonal to lie inside.
            convex = _cross(points[d], points[b], points[c]) > 0.0 and _cross(points[c], points[a], points[d]) > 0.0
            if not convex:
                waiting.append((a, b))
                continue
            one, two = at.pop((a, b)), at.pop((b, a))
            faces[one], faces[two] = (c, a, d), (d, b, c)
            for number, (e, f, g) in ((one, (c, a, d)), (two, (d, b, c))):
                at[e, f] = at[f, g] = at[g, e] = number
            if crosses(c, d, p, q):
                waiting.append((c, d))
        if (p, q) not in at and (q, p) not in at:
            break
    return faces


def _left_of_border(triangles: Ints, ends: Ints, count: int) -> Ints:
    """The triangles that hang together with those on the left of the border, without crossing it."""
    pairs = face_pairs(triangles)
    tail, head = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    owner = dict(zip((tail * count + head).tolist(), (np.arange(3 * len(triangles)) // 3).tolist(), strict=True))
    sides = [(owner.get(p * count + q), owner.get(q * count + p)) for p, q in ends.tolist()]
    walls = {(min(a, b), max(a, b)) for a, b in sides if a is not None and b is not None}
    free = np.array([(min(a, b), max(a, b)) not in walls for a, b in pairs.tolist()], bool)
    pairs = pairs[free]
    graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(triangles), len(triangles)))
    label = connected_components(graph, directed=False)[1]
    left = np.unique([label[a] for a, _ in sides if a is not None])
    return triangles[np.isin(label, left)]


def _check_border(triangles: Ints, ends: Ints, count: int) -> None:
    """Every border edge once and in its direction, every other edge twice."""
    tail, head = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    half = tail * count + head
    wanted = ends[:, 0] * count + ends[:, 1]
    edges, of_face = mesh_edges(triangles) if len(triangles) else (ends[:0], ends[:0])
    single = int((np.bincount(of_face.ravel(), minlength=len(edges)) == 1).sum())
    if not np.isin(wanted, half).all() or single != len(ends):
        raise WindowError(
            "the border of a lid crosses itself or folds back, so that it cannot be filled; move the plane a little"
        )
