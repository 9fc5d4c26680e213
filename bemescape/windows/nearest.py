"""Closest points on triangles, exact and for many points at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["NearestTriangle"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Triangles in a leaf of the tree, about.
_LEAF = 4
#: Nodes that wait while the tree is walked; a tree over 2³² triangles needs fewer.
_DEEPEST = 80


class NearestTriangle:
    """A tree of boxes over triangles (m, 3, 3) that answers which of them is nearest to a point.

    Strategy: the triangles are halved again and again at the median of their middles, along the longest side of
    each group. A query walks down the nearer box first and leaves out every box that is further off than the
    nearest triangle so far.

    Raises
    ------
    ValueError
        There is no triangle.
    """

    def __init__(self, corners: Floats) -> None:
        if len(corners) == 0:
            raise ValueError("no triangles to be near to")
        middles = corners.mean(axis=1)
        depth = max(0, int(np.log2(max(1, len(corners) // _LEAF))))
        order = np.arange(len(corners))
        for level in range(depth):
            start = _starts(len(corners), level)
            group = np.repeat(np.arange(len(start)), np.diff(np.append(start, len(order))))
            spread = np.maximum.reduceat(middles[order], start) - np.minimum.reduceat(middles[order], start)
            along = middles[order, spread.argmax(axis=1)[group]]
            order = order[np.lexsort((along, group))]
        start = _starts(len(corners), depth)
        low = [np.minimum.reduceat(corners[order].min(axis=1), start)]
        high = [np.maximum.reduceat(corners[order].max(axis=1), start)]
        while len(low[0]) > 1:
            low.insert(0, np.minimum(low[0][0::2], low[0][1::2]))
            high.insert(0, np.maximum(high[0][0::2], high[0][1::2]))
        self._order = order
        self._corners = np.ascontiguousarray(corners[order].reshape(-1, 9))
        self._start = np.append(start, len(order)).astype(np.int64)
        self._box = np.concatenate([np.concatenate(low), np.concatenate(high)], axis=1)

    def closest(self, points: Floats) -> tuple[Floats, Floats, Ints]:
        """Distance (k,), closest point (k, 3) and number of its triangle (k,) for points (k, 3)."""
        places, triangle = np.empty((len(points), 3)), np.empty(len(points), np.int64)
        over_rows(
            _walk, len(points), 1024,
            np.ascontiguousarray(points, np.float64), self._corners, self._start, self._box, places, triangle,
        )  # fmt: skip
        return np.linalg.norm(places - points, axis=1), places, self._order[triangle]

    def distance(self, points: Floats) -> Floats:
        """Distance (k,) from points (k, 3) to the nearest triangle."""
        return self.closest(points)[0]


def _starts(count: int, level: int) -> Ints:
    """Where each of the 2^level groups of a level begins; the halves of a group are groups of the next level."""
    return np.asarray((count * np.arange(2**level)) // 2**level)


@njit(cache=True)
def _closest_on(px, py, pz, c, j):  # type: ignore[no-untyped-def]
    """Closest point of triangle j of corners c (m, 9) to a point, and its squared distance.

    Source: Ericson, Real-Time Collision Detection (2005), section 5.1.5. A triangle of zero area gives one of its
    corners or a point of an edge.
    """
    ax, ay, az = c[j, 0], c[j, 1], c[j, 2]
    abx, aby, abz = c[j, 3] - ax, c[j, 4] - ay, c[j, 5] - az
    acx, acy, acz = c[j, 6] - ax, c[j, 7] - ay, c[j, 8] - az
    apx, apy, apz = px - ax, py - ay, pz - az
    bpx, bpy, bpz = px - c[j, 3], py - c[j, 4], pz - c[j, 5]
    cpx, cpy, cpz = px - c[j, 6], py - c[j, 7], pz - c[j, 8]
    d1, d2 = abx * apx + aby * apy + abz * apz, acx * apx + acy * apy + acz * apz
    d3, d4 = abx * bpx + aby * bpy + abz * bpz, acx * bpx + acy * bpy + acz * bpz
    d5, d6 = abx * cpx + aby * cpy + abz * cpz, acx * cpx + acy * cpy + acz * cpz
    va, vb, vc = d3 * d6 - d5 * d4, d5 * d2 - d1 * d6, d1 * d4 - d3 * d2
    v, w = 0.0, 0.0
    if d1 <= 0.0 and d2 <= 0.0:
        pass
    elif d3 >= 0.0 and d4 <= d3:
        v = 1.0
    elif d6 >= 0.0 and d5 <= d6:
        w = 1.0
    elif vc <= 0.0 and d1 >= 0.0 and d3 <= 0.0 and d1 > d3:
        v = d1 / (d1 - d3)
    elif vb <= 0.0 and d2 >= 0.0 and d6 <= 0.0 and d2 > d6:
        w = d2 / (d2 - d6)
    elif va <= 0.0 and d4 >= d3 and d5 >= d6 and (d4 - d3) + (d5 - d6) > 0.0:
        w = (d4 - d3) / ((d4 - d3) + (d5 - d6))
        v = 1.0 - w
    elif va + vb + vc > 0.0:
        v, w = vb / (va + vb + vc), vc / (va + vb + vc)
    x, y, z = ax + v * abx + w * acx, ay + v * aby + w * acy, az + v * abz + w * acz
    return x, y, z, (x - px) ** 2 + (y - py) ** 2 + (z - pz) ** 2


@njit(cache=True)
def _square_to_box(px, py, pz, box, node):  # type: ignore[no-untyped-def]
    x = max(box[node, 0] - px, 0.0, px - box[node, 3])
    y = max(box[node, 1] - py, 0.0, py - box[node, 4])
    z = max(box[node, 2] - pz, 0.0, pz - box[node, 5])
    return x * x + y * y + z * z


@njit(cache=True, nogil=True)
def _walk(points, corners, start, box, places, nearest, begin, end):  # type: ignore[no-untyped-def]
    first_leaf = len(start) - 2
    stack = np.empty(_DEEPEST, np.int64)
    for i in range(begin, end):
        px, py, pz = points[i, 0], points[i, 1], points[i, 2]
        best, best_triangle = np.inf, -1
        best_x, best_y, best_z = np.nan, np.nan, np.nan
        stack[0] = 0
        waiting = 1
        while waiting > 0:
            waiting -= 1
            node = stack[waiting]
            if _square_to_box(px, py, pz, box, node) >= best:
                continue
            if node >= first_leaf:
                leaf = node - first_leaf
                for j in range(start[leaf], start[leaf + 1]):
                    x, y, z, square = _closest_on(px, py, pz, corners, j)
                    if square < best:
                        best, best_triangle = square, j
                        best_x, best_y, best_z = x, y, z
            else:
                near, far = 2 * node + 1, 2 * node + 2
                if _square_to_box(px, py, pz, box, far) < _square_to_box(px, py, pz, box, near):
                    near, far = far, near
                stack[waiting], stack[waiting + 1] = far, near
                waiting += 2
        nearest[i] = best_triangle
        places[i, 0], places[i, 1], places[i, 2] = best_x, best_y, best_z
