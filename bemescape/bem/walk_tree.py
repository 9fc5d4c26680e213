"""What a walk on stars asks of a mesh: nearest absorbing panel, nearest silhouette edge, first panel on a ray.

All lengths are in units of the body's diagonal. Boxes are tight around triangles and edges; the tree over reflex
edges also bounds the normals beside them by cones, so that whole regions which face one way are passed over
(spatialised normal cones: Johnson & Cohen 2001, doi:10.1145/364338.364370).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.field import triangle_distance
from bemescape.bem.tree import build_box_tree, morton_order
from bemescape.compiled import njit

__all__ = [
    "Boxes",
    "EdgeTree",
    "PanelTree",
    "edge_distance",
    "edge_tree",
    "first_hit",
    "nearest_panel",
    "panel_tree",
    "reach_before_exit",
    "silhouette_distance",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Heights above a plane that count as none.
ON_PLANE = 1e-10
#: A ray may miss a panel by this part of it and still hit: none slips through between two panels.
_OVERLAP = 1e-9
_DEEPEST = 64


class Boxes(NamedTuple):
    """Complete binary tree: items first..last of each node, and the box around them (nodes, 3)."""

    first: Ints
    last: Ints
    low: Floats
    high: Floats


class Cones(NamedTuple):
    """Cone around the normals of each node: axis (nodes, 3), sine and cosine (nodes,) of its half-angle.

    Cosine −1 where they spread over more than a half-space.
    """

    axis: Floats
    sine: Floats
    cosine: Floats


class PanelTree(NamedTuple):
    """Panels in tree order: corners (m, 3, 3), unit normals (m, 3), number (m,) of each at the caller."""

    boxes: Boxes
    corners: Floats
    normals: Floats
    number: Ints
    cones: Cones


class EdgeTree(NamedTuple):
    """Edges (e, 2, 3) in tree order, and the normals (e, 2, 3) of the two faces beside each."""

    boxes: Boxes
    ends: Floats
    normals: Floats
    cones: Cones


@njit(cache=True)
def _fit_boxes(first, last, item_low, item_high, low, high):
    nodes = len(first)
    for node in range(nodes - 1, -1, -1):
        for k in range(3):
            low[node, k], high[node, k] = np.inf, -np.inf
            if node >= nodes // 2:
                for i in range(first[node], last[node]):
                    low[node, k] = min(low[node, k], item_low[i, k])
                    high[node, k] = max(high[node, k], item_high[i, k])
            else:
                low[node, k] = min(low[2 * node + 1, k], low[2 * node + 2, k])
                high[node, k] = max(high[2 * node + 1, k], high[2 * node + 2, k])


def _boxes(points: Floats) -> Boxes:
    """Boxes around items of several points each (n, points, 3), already in Morton order."""
    if len(points) == 0:
        none = np.zeros(1, np.int64)
        return Boxes(none, none, np.full((1, 3), np.inf), np.full((1, 3), np.inf))
    ranges = build_box_tree(points.mean(axis=1), np.zeros(len(points)))
    low, high = np.empty((len(ranges.first), 3)), np.empty((len(ranges.first), 3))
    _fit_boxes(ranges.first, ranges.last, points.min(axis=1), points.max(axis=1), low, high)
    return Boxes(ranges.first, ranges.last, low, high)


def panel_tree(corners: Floats, normals: Floats, chosen: Ints) -> PanelTree:
    """Tree over the `chosen` (k,) of panels (m, 3, 3); of none if k is 0."""
    if len(chosen):
        chosen = chosen[morton_order(corners[chosen].mean(axis=1))]
    picked, facing = np.ascontiguousarray(corners[chosen]), np.ascontiguousarray(normals[chosen])
    boxes = _boxes(picked)
    return PanelTree(boxes, picked, facing, chosen, _cones(boxes, facing[:, None]))


def edge_tree(ends: Floats, normals: Floats) -> EdgeTree:
    """Tree over edges (e, 2, 3) with the normals (e, 2, 3) of the faces beside them."""
    if len(ends):
        order = morton_order(ends.mean(axis=1))
        ends, normals = np.ascontiguousarray(ends[order]), np.ascontiguousarray(normals[order])
    boxes = _boxes(ends)
    return EdgeTree(boxes, ends, normals, _cones(boxes, normals))


def _cones(boxes: Boxes, normals: Floats) -> Cones:
    """Cones around several normals of each item (n, normals, 3)."""
    return Cones(*_fit_cones(boxes.first, boxes.last, normals))


@njit(cache=True)
def _fit_cones(first, last, normals):
    nodes, sides = len(first), normals.shape[1]
    axis, sine, cosine = np.zeros((nodes, 3)), np.zeros(nodes), np.full(nodes, -1.0)
    for node in range(nodes):
        for i in range(first[node], last[node]):
            for side in range(sides):
                for k in range(3):
                    axis[node, k] += normals[i, side, k]
        size = math.sqrt(axis[node, 0] ** 2 + axis[node, 1] ** 2 + axis[node, 2] ** 2)
        if size == 0.0:
            continue
        for k in range(3):
            axis[node, k] /= size
        smallest = 1.0
        for i in range(first[node], last[node]):
            for side in range(sides):
                dot = 0.0
                for k in range(3):
                    dot += axis[node, k] * normals[i, side, k]
                smallest = min(smallest, dot)
        if smallest > 0.0:
            cosine[node] = smallest
            sine[node] = math.sqrt(max(0.0, 1.0 - smallest * smallest))
    return axis, sine, cosine


@njit(cache=True)
def _box_distance2(boxes, node, x, y, z):
    dx = max(boxes.low[node, 0] - x, 0.0, x - boxes.high[node, 0])
    dy = max(boxes.low[node, 1] - y, 0.0, y - boxes.high[node, 1])
    dz = max(boxes.low[node, 2] - z, 0.0, z - boxes.high[node, 2])
    return dx * dx + dy * dy + dz * dz


@njit(cache=True)
def _push_children(boxes, node, x, y, z, best2, stack, depth):
    """The nearer child on top; children beyond the best distance are left out."""
    left, right = 2 * node + 1, 2 * node + 2
    to_left, to_right = _box_distance2(boxes, left, x, y, z), _box_distance2(boxes, right, x, y, z)
    if to_left > to_right:
        left, right, to_left, to_right = right, left, to_right, to_left
    if to_right < best2:
        stack[depth] = right
        depth += 1
    if to_left < best2:
        stack[depth] = left
        depth += 1
    return depth


@njit(cache=True)
def nearest_panel(tree, x, y, z, limit, stack):
    """Distance to the nearest panel and its place in the tree; `limit` and −1 where none is closer."""
    best, nearest = limit, -1
    if len(tree.number) == 0:
        return best, nearest
    inner = len(tree.boxes.first) // 2
    depth = 1
    stack[0] = 0
    while depth > 0:
        depth -= 1
        node = stack[depth]
        if _box_distance2(tree.boxes, node, x, y, z) >= best * best:
            continue
        if node < inner:
            depth = _push_children(tree.boxes, node, x, y, z, best * best, stack, depth)
            continue
        for i in range(tree.boxes.first[node], tree.boxes.last[node]):
            distance = triangle_distance(x, y, z, tree.corners, i)
            if distance < best:
                best, nearest = distance, i
    return best, nearest


@njit(cache=True)
def _height(point, normal, x, y, z):
    """How far (x, y, z) lies inside the plane."""
    return (point[0] - x) * normal[0] + (point[1] - y) * normal[1] + (point[2] - z) * normal[2]


@njit(cache=True)
def _segment_distance2(ends, i, x, y, z):
    ex, ey, ez = ends[i, 1, 0] - ends[i, 0, 0], ends[i, 1, 1] - ends[i, 0, 1], ends[i, 1, 2] - ends[i, 0, 2]
    px, py, pz = x - ends[i, 0, 0], y - ends[i, 0, 1], z - ends[i, 0, 2]
    part = (px * ex + py * ey + pz * ez) / (ex * ex + ey * ey + ez * ez)
    part = min(max(part, 0.0), 1.0)
    dx, dy, dz = px - part * ex, py - part * ey, pz - part * ez
    return dx * dx + dy * dy + dz * dz


@njit(cache=True)
def _one_way(tree, node, x, y, z):
    """Whether every face of the node is seen from the same side from (x, y, z)."""
    if tree.cones.cosine[node] <= 0.0:
        return False
    square, radius2, along = 0.0, 0.0, 0.0
    for k in range(3):
        low, high = tree.boxes.low[node, k], tree.boxes.high[node, k]
        place = x if k == 0 else (y if k == 1 else z)
        view = 0.5 * (low + high) - place
        square += view * view
        radius2 += 0.25 * (high - low) * (high - low)
        along += view * tree.cones.axis[node, k]
    if square <= radius2:
        return False
    sine = math.sqrt(radius2 / square)
    cosine = math.sqrt(1.0 - sine * sine)
    if tree.cones.cosine[node] * cosine - tree.cones.sine[node] * sine <= 0.0:
        return False
    return abs(along) > math.sqrt(square) * (tree.cones.sine[node] * cosine + tree.cones.cosine[node] * sine)


@njit(cache=True)
def silhouette_distance(tree, x, y, z, limit, stack):
    """Distance to the nearest edge behind which the wall turns away from (x, y, z); at most `limit`."""
    best2 = limit * limit
    if len(tree.ends) == 0:
        return limit
    inner = len(tree.boxes.first) // 2
    depth = 1
    stack[0] = 0
    while depth > 0:
        depth -= 1
        node = stack[depth]
        if _box_distance2(tree.boxes, node, x, y, z) >= best2 or _one_way(tree, node, x, y, z):
            continue
        if node < inner:
            depth = _push_children(tree.boxes, node, x, y, z, best2, stack, depth)
            continue
        for i in range(tree.boxes.first[node], tree.boxes.last[node]):
            one = _height(tree.ends[i, 0], tree.normals[i, 0], x, y, z)
            other = _height(tree.ends[i, 0], tree.normals[i, 1], x, y, z)
            # A face in whose plane the point lies is not behind: this is where most points on a wall are.
            if min(one, other) < -ON_PLANE and max(one, other) > -ON_PLANE:
                best2 = min(best2, _segment_distance2(tree.ends, i, x, y, z))
    return math.sqrt(best2)


@njit(cache=True)
def edge_distance(tree, x, y, z, limit, stack):
    """Distance to the nearest edge; at most `limit`."""
    best2 = limit * limit
    if len(tree.ends) == 0:
        return limit
    inner = len(tree.boxes.first) // 2
    depth = 1
    stack[0] = 0
    while depth > 0:
        depth -= 1
        node = stack[depth]
        if _box_distance2(tree.boxes, node, x, y, z) >= best2:
            continue
        if node < inner:
            depth = _push_children(tree.boxes, node, x, y, z, best2, stack, depth)
            continue
        for i in range(tree.boxes.first[node], tree.boxes.last[node]):
            best2 = min(best2, _segment_distance2(tree.ends, i, x, y, z))
    return math.sqrt(best2)


@njit(cache=True)
def _least_height(tree, node, x, y, z):
    """A bound from below on how far (x, y, z) lies inside the planes of all panels of the node."""
    if tree.cones.cosine[node] <= 0.0:
        return -np.inf
    along, furthest2 = 0.0, 0.0
    for k in range(3):
        place = x if k == 0 else (y if k == 1 else z)
        low, high = tree.boxes.low[node, k] - place, tree.boxes.high[node, k] - place
        axis = tree.cones.axis[node, k]
        along += min(axis * low, axis * high)
        furthest2 += max(low * low, high * high)
    if along > 0.0:
        along *= tree.cones.cosine[node]
    return along - math.sqrt(furthest2) * tree.cones.sine[node]


@njit(cache=True)
def reach_before_exit(tree, rate, largest_rate, on_window, x, y, z, limit, stack):
    """Largest ball in which no partly open panel reflects with a negative probability; at most `limit`.

    A ray of length t to a panel at the height h above which the ball's centre lies is reflected with the probability
    1 − μ t²(1 − t/R)/h, smallest at t = 2R/3: it stays above 0 where R² ≤ 27 h/(4 μ), or where the ball does not
    reach the panel. From a wall in the same plane (h = 0) no ray meets the panel, so the ball must not reach it; a
    walker `on_window` accounts for its own plane by itself. `largest_rate` is that of all panels of the tree.
    """
    best = limit
    if len(tree.number) == 0:
        return best
    inner = len(tree.boxes.first) // 2
    depth = 1
    stack[0] = 0
    while depth > 0:
        depth -= 1
        node = stack[depth]
        # A node whose planes are all far enough away cannot shrink the ball: most of a flat window.
        if (
            _box_distance2(tree.boxes, node, x, y, z) >= best * best
            or 6.75 * _least_height(tree, node, x, y, z) >= best * best * largest_rate
        ):
            continue
        if node < inner:
            depth = _push_children(tree.boxes, node, x, y, z, best * best, stack, depth)
            continue
        for i in range(tree.boxes.first[node], tree.boxes.last[node]):
            height = _height(tree.corners[i, 0], tree.normals[i], x, y, z)
            if height < -ON_PLANE or (height <= ON_PLANE and on_window):
                continue
            reach = math.sqrt(6.75 * max(height, 0.0) / rate[tree.number[i]])
            if reach < best:
                best = min(best, max(reach, triangle_distance(x, y, z, tree.corners, i)))
    return best


@njit(cache=True)
def _ray_enters(boxes, node, x, y, z, ix, iy, iz, longest):
    """Where a ray enters a box; infinite where it misses it."""
    a, b = (boxes.low[node, 0] - x) * ix, (boxes.high[node, 0] - x) * ix
    start, end = min(a, b), max(a, b)
    a, b = (boxes.low[node, 1] - y) * iy, (boxes.high[node, 1] - y) * iy
    start, end = max(start, min(a, b)), min(end, max(a, b))
    a, b = (boxes.low[node, 2] - z) * iz, (boxes.high[node, 2] - z) * iz
    start, end = max(start, min(a, b)), min(end, max(a, b))
    if start - ON_PLANE > end + ON_PLANE or end < -ON_PLANE or start > longest:
        return np.inf
    return start


@njit(cache=True)
def _panel_hit(corners, i, x, y, z, vx, vy, vz, both_sides):
    """Length of the ray to a panel that it crosses outwards; infinite without (Möller & Trumbore 1997)."""
    ax, ay, az = corners[i, 0, 0], corners[i, 0, 1], corners[i, 0, 2]
    bx, by, bz = corners[i, 1, 0] - ax, corners[i, 1, 1] - ay, corners[i, 1, 2] - az
    cx, cy, cz = corners[i, 2, 0] - ax, corners[i, 2, 1] - ay, corners[i, 2, 2] - az
    px, py, pz = vy * cz - vz * cy, vz * cx - vx * cz, vx * cy - vy * cx
    turn = bx * px + by * py + bz * pz  # below 0 where the ray goes outwards
    if turn == 0.0 or (turn > 0.0 and not both_sides):
        return np.inf
    sx, sy, sz = x - ax, y - ay, z - az
    u = (sx * px + sy * py + sz * pz) / turn
    if u < -_OVERLAP or u > 1.0 + _OVERLAP:
        return np.inf
    qx, qy, qz = sy * bz - sz * by, sz * bx - sx * bz, sx * by - sy * bx
    v = (vx * qx + vy * qy + vz * qz) / turn
    if v < -_OVERLAP or u + v > 1.0 + _OVERLAP:
        return np.inf
    return (cx * qx + cy * qy + cz * qz) / turn


@njit(cache=True)
def first_hit(tree, x, y, z, vx, vy, vz, longest, both_sides, stack):
    """Length and place in the tree of the first panel that a ray crosses; `longest` and −1 without.

    Only crossings from inside to outside count unless `both_sides`. The ray may start a rounding error outside.
    """
    best, hit = longest, -1
    if len(tree.number) == 0:
        return best, hit
    ix = 1.0 / vx if vx != 0.0 else 1e300
    iy = 1.0 / vy if vy != 0.0 else 1e300
    iz = 1.0 / vz if vz != 0.0 else 1e300
    inner = len(tree.boxes.first) // 2
    depth = 1
    stack[0] = 0
    while depth > 0:
        depth -= 1
        node = stack[depth]
        if _ray_enters(tree.boxes, node, x, y, z, ix, iy, iz, best) == np.inf:
            continue
        if node < inner:
            left, right = 2 * node + 1, 2 * node + 2
            to_left = _ray_enters(tree.boxes, left, x, y, z, ix, iy, iz, best)
            to_right = _ray_enters(tree.boxes, right, x, y, z, ix, iy, iz, best)
            if to_left > to_right:
                left, right, to_left, to_right = right, left, to_right, to_left
            if to_right < np.inf:
                stack[depth] = right
                depth += 1
            if to_left < np.inf:
                stack[depth] = left
                depth += 1
            continue
        for i in range(tree.boxes.first[node], tree.boxes.last[node]):
            length = _panel_hit(tree.corners, i, x, y, z, vx, vy, vz, both_sides)
            if -ON_PLANE <= length < best:
                best, hit = max(length, 0.0), i
    return best, hit
