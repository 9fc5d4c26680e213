"""Tetrahedra that fill a closed triangulated polyhedron, with the rims of its windows resolved.

Independent of the package: nothing is imported from it. A Kuhn lattice is bisected (longest edge first, which
keeps Kuhn tetrahedra in three similarity classes) until its size follows the distance to the rims and to the
wall; then it is cut along the wall, and the wall's edges are cut along the rims. Vertices of the boundary lie
on the polyhedron, so the geometry errs by the sagitta of its edges only: second order in the size at the
wall.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyvista as pv
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_EDGES = np.array([(0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3)])
_FACETS = np.array([(1, 2, 3), (0, 3, 2), (0, 1, 3), (0, 2, 1)])


@dataclass(frozen=True)
class Sizes:
    """Longest edges of tetrahedra.

    At a rim `rim` times the window's radius (of the disc with the same area), growing by `growth` times the
    distance, at most `wall` near the wall and `bulk` inside.
    """

    rim: float
    wall: float
    bulk: float
    growth: float = 0.5


@dataclass(frozen=True)
class DiscWindow:
    """The wall within a straight-line distance of a point, connected to the wall nearest to it."""

    centre: tuple[float, float, float]
    radius: float


@dataclass(frozen=True, eq=False)
class FaceWindow:
    """Faces of the polyhedron, by number."""

    faces: Ints


def tet_volumes(points: Floats, tets: Ints) -> Floats:
    a, b, c, d = (points[tets[:, k]] for k in range(4))
    return np.asarray(np.einsum("ij,ij->i", np.cross(b - a, c - a), d - a) / 6.0)


class Polyhedron:
    """Signed distance (negative inside) and nearest points of a closed triangulated surface."""

    def __init__(self, vertices: Floats, faces: Ints) -> None:
        self.vertices, self.faces = np.asarray(vertices, float), np.asarray(faces, np.int64)
        self.surface = _polydata(self.vertices, self.faces)

    def signed_distance(self, points: Floats) -> Floats:
        cloud = pv.PolyData(np.ascontiguousarray(points))
        return np.asarray(cloud.compute_implicit_distance(self.surface)["implicit_distance"], float)

    def nearest(self, points: Floats) -> Floats:
        return np.asarray(self.surface.find_closest_cell(points, return_closest_point=True)[1])

    @property
    def volume(self) -> float:
        corners = self.vertices[self.faces] - self.vertices.mean(axis=0)
        return float(np.einsum("ij,ij->", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])) / 6.0)


def _polydata(vertices: Floats, faces: Ints) -> pv.PolyData:
    return pv.PolyData(vertices, np.insert(faces, 0, 3, axis=1).ravel())


class Rim:
    """A function that is negative over the window and positive over the wall; and the distance to the rim."""

    def __init__(self, polyhedron: Polyhedron, window: DiscWindow | FaceWindow) -> None:
        self.window = window
        if isinstance(window, FaceWindow):
            inside = np.zeros(len(polyhedron.faces), bool)
            inside[window.faces] = True
            self._sides = [_polydata(polyhedron.vertices, polyhedron.faces[side]) for side in (inside, ~inside)]
            self._tree = cKDTree(_rim_points(polyhedron, inside))
            corners = polyhedron.vertices[polyhedron.faces[window.faces]]
            twice = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
            self.area = float(0.5 * np.linalg.norm(twice, axis=1).sum())
            self.radius = float(np.sqrt(self.area / np.pi))
        else:
            self.area, self.radius = None, window.radius

    def level(self, points: Floats) -> Floats:
        if isinstance(self.window, DiscWindow):
            return np.linalg.norm(points - self.window.centre, axis=1) - self.window.radius
        # Distance to the window less distance to the wall: continuous, and 0 on the surface at the rim alone.
        distances = [
            np.linalg.norm(points - side.find_closest_cell(points, return_closest_point=True)[1], axis=1)
            for side in self._sides
        ]
        return np.asarray(distances[0] - distances[1])

    def distance(self, points: Floats, to_wall: Floats) -> Floats:
        if isinstance(self.window, DiscWindow):
            return np.hypot(self.level(points), to_wall)  # the sphere crosses the wall at nearly a right angle
        return np.asarray(self._tree.query(points)[0])


def _rim_points(polyhedron: Polyhedron, inside: NDArray[np.bool_]) -> Floats:
    """Points along the edges between window and wall."""
    edges = np.sort(polyhedron.faces[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    unique, which = np.unique(edges, axis=0, return_inverse=True)
    count = np.bincount(which.ravel(), weights=np.repeat(inside, 3).astype(float))
    ends = polyhedron.vertices[unique[count == 1]]
    steps = np.linspace(0.0, 1.0, 41)[:, None, None]
    return np.asarray((ends[:, 0] * (1 - steps) + ends[:, 1] * steps).reshape(-1, 3))


@dataclass(frozen=True, eq=False)
class Tetrahedra:
    """points (n, 3), tets (t, 4), the triangles (k, 3) of each window, and what was filled."""

    points: Floats
    tets: Ints
    window_facets: tuple[Ints, ...]
    polyhedron: Polyhedron | None = None
    rims: tuple[Rim, ...] = ()

    @property
    def volume(self) -> float:
        return float(tet_volumes(self.points, self.tets).sum())

    def window_area(self, window: int) -> float:
        a, b, c = (self.points[self.window_facets[window][:, k]] for k in range(3))
        return float(0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum())


def refined_at_rims(mesh: Tetrahedra, halvings: int, growth: float = 0.5) -> Tetrahedra:
    """Bisect towards the rims until every size there is 2^-halvings of what it was.

    New points are put onto the rims. But for the chords of the rims, meshes of one sequence are nested: their
    mean times rise steadily, which a fresh mesh for every size does not give.
    """
    rim = np.unique(np.concatenate([_open_edges(facets).ravel() for facets in mesh.window_facets]))
    longest = _lengths(mesh.points, mesh.tets).max(axis=1)
    largest = np.zeros(len(mesh.points))
    np.maximum.at(largest, mesh.tets.ravel(), np.repeat(longest, 4))
    tree = cKDTree(mesh.points[rim])
    points, tets, wanted = mesh.points, mesh.tets, np.empty(0)
    while True:
        away, nearest = tree.query(points[len(wanted) :])
        wanted = np.append(wanted, np.maximum(largest[rim][nearest] * 0.5**halvings, growth * away))
        coarse = _lengths(points, tets).max(axis=1) > wanted[tets].min(axis=1)
        if not coarse.any():
            break
        points, tets = _bisect(points, tets, coarse)
    old, new = boundary_facets(mesh.tets), boundary_facets(tets)
    number = {tuple(facet): k for k, facets in enumerate(mesh.window_facets) for facet in np.sort(facets, axis=1)}
    window = np.array([number.get(tuple(facet), -1) for facet in np.sort(old, axis=1)])
    parent = _polydata(mesh.points, old).find_closest_cell(points[new].mean(axis=1))
    facets = tuple(new[window[parent] == k] for k in range(len(mesh.window_facets)))
    target = points.copy()
    for k, rim in enumerate(mesh.rims):
        edges = _open_edges(facets[k])
        length = np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1)
        fresh = edges >= len(mesh.points)
        target[edges[fresh]] = _onto_rim(
            mesh.polyhedron, rim, points[edges[fresh]], np.repeat(length, 2)[fresh.ravel()]
        )
    return Tetrahedra(_moved_unless_flattened(points, target, tets), tets, facets, mesh.polyhedron, mesh.rims)


def _without_slivers(points: Floats, tets: Ints) -> Ints:
    """Leave out the slivers that lie in the wall: they hold no volume and spoil the conditioning."""
    for _ in range(3):
        wall = np.zeros(len(points), bool)
        wall[boundary_facets(tets)] = True
        sliver = wall[tets].all(axis=1) & (_flatness(points, tets) < 0.02)
        tets = _largest_part(tets[~sliver])
    return tets


def _open_edges(facets: Ints) -> Ints:
    edges = np.sort(facets[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    unique, count = np.unique(edges, axis=0, return_counts=True)
    return unique[count == 1]


def fill(vertices: Floats, faces: Ints, windows: Sequence[DiscWindow | FaceWindow], sizes: Sizes) -> Tetrahedra:
    """Tetrahedra inside a closed surface: vertices (n, 3), outward faces (m, 3)."""
    polyhedron = Polyhedron(vertices, faces)
    rims = [Rim(polyhedron, window) for window in windows]
    points, tets, depth = _graded_lattice(polyhedron, rims, sizes)
    points, tets = _cut_along_wall(polyhedron, rims, points, tets, depth)
    for rim in rims:
        points, tets = _cut_along_rim(polyhedron, rim, points, tets)
    points, tets = _compact(points, _without_slivers(points, tets))
    boundary = boundary_facets(tets)
    facets = tuple(_facets_within(rim, points, boundary) for rim in rims)
    return Tetrahedra(points, tets, facets, polyhedron, tuple(rims))


def box(counts: Sequence[Floats]) -> tuple[Floats, Ints]:
    """Points and Kuhn tetrahedra of a tensor grid with the given coordinates along x, y and z."""
    grids = np.meshgrid(*counts, indexing="ij")
    points = np.stack([grid.ravel() for grid in grids], axis=1)
    number = np.arange(len(points)).reshape(grids[0].shape)
    tets = []
    for first, second, third in ((0, 1, 2), (1, 2, 0), (2, 0, 1), (0, 2, 1), (2, 1, 0), (1, 0, 2)):
        corner, path = np.zeros(3, int), []
        for axis in (None, first, second, third):
            if axis is not None:
                corner[axis] = 1
            low, high = corner, np.array(number.shape) - 1 + corner
            path.append(number[low[0] : high[0], low[1] : high[1], low[2] : high[2]].ravel())
        tets.append(np.stack(path, axis=1))
    found = np.concatenate(tets)
    flip = tet_volumes(points, found) < 0
    found[flip] = found[flip][:, [1, 0, 2, 3]]
    return points, found


def _graded_lattice(polyhedron: Polyhedron, rims: Sequence[Rim], sizes: Sizes) -> tuple[Floats, Ints, Floats]:
    low, high = polyhedron.vertices.min(axis=0), polyhedron.vertices.max(axis=0)
    step = sizes.bulk / np.sqrt(3.0)
    # An offset that is no simple fraction keeps lattice planes off the planes of the surface.
    axes = [np.arange(a - 0.61803 * step, b + 1.5 * step, step) for a, b in zip(low, high, strict=True)]
    points, tets = box(axes)
    depth, wanted = np.empty(0), np.empty(0)
    while True:
        fresh = points[len(depth) :]
        to_wall = polyhedron.signed_distance(fresh)
        size = np.clip(sizes.growth * np.abs(to_wall), sizes.wall, sizes.bulk)
        for rim in rims:
            size = np.minimum(size, np.maximum(sizes.rim * rim.radius, sizes.growth * rim.distance(fresh, to_wall)))
        depth, wanted = np.append(depth, to_wall), np.append(wanted, size)
        longest = _lengths(points, tets).max(axis=1)
        near = depth[tets].min(axis=1) < longest  # the others lie wholly outside
        tets, longest = tets[near], longest[near]
        coarse = longest > wanted[tets].min(axis=1)
        if not coarse.any():
            return points, tets, depth
        points, tets = _bisect(points, tets, coarse)


def _lengths(points: Floats, tets: Ints) -> Floats:
    ends = points[tets[:, _EDGES]]
    return np.asarray(np.linalg.norm(ends[:, :, 0] - ends[:, :, 1], axis=2))


def _flatness(points: Floats, tets: Ints) -> Floats:
    """Volume over that of the regular tetrahedron with the same longest edge."""
    return tet_volumes(points, tets) * 6.0 * np.sqrt(2.0) / _lengths(points, tets).max(axis=1) ** 3


def _edge_numbers(tets: Ints) -> tuple[Ints, Ints]:
    """Edges (e, 2), low end first, and the edge numbers (t, 6) of each tetrahedron."""
    pairs = np.sort(tets[:, _EDGES], axis=2)
    base = int(tets.max()) + 1
    keys, which = np.unique(pairs[..., 0] * base + pairs[..., 1], return_inverse=True)
    return np.stack([keys // base, keys % base], axis=1), which.reshape(len(tets), 6)


def _bisect(points: Floats, tets: Ints, marked: NDArray[np.bool_]) -> tuple[Floats, Ints]:
    """Longest-edge bisection of the marked tetrahedra and of whatever must follow (Rivara's closure)."""
    edges, which = _edge_numbers(tets)
    length = np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1)
    # A strict order of the edges: with ties, neighbours could wait for each other.
    rank = np.empty(len(edges), np.int64)
    rank[np.argsort(length, kind="stable")] = np.arange(len(edges))
    longest = np.take_along_axis(which, rank[which].argmax(axis=1)[:, None], axis=1)[:, 0]
    split = np.zeros(len(edges), bool)
    split[longest[marked]] = True
    while True:
        missing = split[which].any(axis=1) & ~split[longest]
        if not missing.any():
            break
        split[longest[missing]] = True
    # Only edges that are the longest of all their tetrahedra are cut now; the others wait for the next pass.
    ready = split & (np.bincount(longest, minlength=len(edges)) == np.bincount(which.ravel()))
    new = np.full(len(edges), -1)
    new[ready] = len(points) + np.arange(ready.sum())
    middle = points[edges[ready]].mean(axis=1)
    return np.concatenate([points, middle]), _halve(tets, edges, longest, new)


def _halve(tets: Ints, edges: Ints, chosen: Ints, new: Ints) -> Ints:
    """Cut each tetrahedron at point `new[chosen]` of its edge `chosen`, where there is one."""
    cut = (chosen >= 0) & (new[chosen] >= 0)
    old, ends, middle = tets[cut], edges[chosen[cut]], new[chosen[cut]][:, None]
    halves = [np.where(old == ends[:, [k]], middle, old) for k in (0, 1)]
    return np.concatenate([tets[~cut], *halves])


def _split_edges(points: Floats, tets: Ints, edges: Ints, middle: Floats) -> tuple[Floats, Ints]:
    """Cut edges (k, 2) at points `middle` (k, 3), the longest first, in every tetrahedron that has them."""
    base = int(tets.max()) + 1 + len(edges)
    length = np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1)
    order = np.argsort(length, kind="stable")
    edges, middle = np.sort(edges[order], axis=1), middle[order]
    number = len(points) + np.arange(len(edges))
    points = np.concatenate([points, middle])
    by_key = np.argsort(edges[:, 0] * base + edges[:, 1])
    keys = (edges[:, 0] * base + edges[:, 1])[by_key]
    done = []
    while len(tets):
        pairs = np.sort(tets[:, _EDGES], axis=2)
        wanted = pairs[..., 0] * base + pairs[..., 1]
        place = np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)
        rank = np.where(keys[place] == wanted, by_key[place], -1)  # -1: not to be cut
        best = rank.max(axis=1)
        done.append(tets[best < 0])
        tets, rank, best = tets[best >= 0], rank[best >= 0], best[best >= 0]
        ready = np.bincount(best, minlength=len(edges)) == np.bincount(rank[rank >= 0], minlength=len(edges))
        tets = _halve(tets, edges, best, np.where(ready, number, -1))
    return points, np.concatenate(done)


def _cut_along_wall(
    polyhedron: Polyhedron, rims: Sequence[Rim], points: Floats, tets: Ints, depth: Floats
) -> tuple[Floats, Ints]:
    edges, _ = _edge_numbers(tets)
    length = np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1)
    shortest = np.full(len(points), np.inf)
    np.minimum.at(shortest, edges.ravel(), np.repeat(length, 2))
    shortest[~np.isfinite(shortest)] = 0.0
    # A vertex moved by less than 0.2 of its shortest edge turns no Kuhn tetrahedron inside out.
    close = np.flatnonzero(np.abs(depth) < 0.2 * shortest)
    target, depth = points.copy(), depth.copy()
    target[close] = polyhedron.nearest(points[close])
    for rim in rims:  # first of all onto the rims: they may be sharp edges, which the cut alone would bevel
        near = np.flatnonzero(rim.distance(points, depth) < 0.3 * shortest)
        target[near] = _onto_rim(polyhedron, rim, points[near], shortest[near])
    moved = _moved_unless_flattened(points, target, tets)
    depth[(moved != points).any(axis=1)] = 0.0
    points = moved

    crossing = edges[depth[edges[:, 0]] * depth[edges[:, 1]] < 0]
    middle = _roots(polyhedron.signed_distance, points[crossing], depth[crossing])
    points, tets = _split_edges(points, tets, crossing, middle)
    depth = np.append(depth, np.zeros(len(crossing)))
    inside = depth[tets].min(axis=1) < 0
    flat = np.flatnonzero((depth[tets] == 0).all(axis=1))
    inside[flat] = polyhedron.signed_distance(points[tets[flat]].mean(axis=1)) < 0
    return points, _largest_part(tets[inside])


def _roots(level, ends: Floats, values: Floats, steps: int = 4) -> Floats:
    """Points where `level` vanishes on segments (k, 2, 3) with end values (k, 2) of opposite sign."""
    low, high = np.zeros(len(ends)), np.ones(len(ends))
    at_low, at_high = values[:, 0].copy(), values[:, 1].copy()
    for _ in range(steps):
        t = low + (high - low) * at_low / (at_low - at_high)
        found = level(ends[:, 0] + t[:, None] * (ends[:, 1] - ends[:, 0]))
        # The kept end counts half (Illinois rule), else one end would never move.
        left = found * at_low > 0
        at_high = np.where(left, 0.5 * at_high, found)
        at_low = np.where(left, found, 0.5 * at_low)
        low, high = np.where(left, t, low), np.where(left, high, t)
    t = np.clip(t, 1e-3, 1 - 1e-3)
    return np.asarray(ends[:, 0] + t[:, None] * (ends[:, 1] - ends[:, 0]))


def _largest_part(tets: Ints) -> Ints:
    facets = np.sort(tets[:, _FACETS].reshape(-1, 3), axis=1)
    _, which = np.unique(facets, axis=0, return_inverse=True)
    order = np.argsort(which.ravel(), kind="stable")
    same = np.flatnonzero(np.diff(which.ravel()[order]) == 0)
    pairs = order[same] // 4, order[same + 1] // 4
    graph = coo_matrix((np.ones(len(same)), pairs), shape=(len(tets), len(tets)))
    _, part = connected_components(graph, directed=False)
    return tets[part == np.bincount(part).argmax()]


def _cut_along_rim(polyhedron: Polyhedron, rim: Rim, points: Floats, tets: Ints) -> tuple[Floats, Ints]:
    facets = boundary_facets(tets)
    wall = np.unique(facets)
    level = np.full(len(points), np.inf)
    level[wall] = rim.level(points[wall])
    edges = np.unique(np.sort(facets[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1), axis=0)
    length = np.linalg.norm(points[edges[:, 0]] - points[edges[:, 1]], axis=1)
    shortest = np.full(len(points), np.inf)
    np.minimum.at(shortest, edges.ravel(), np.repeat(length, 2))

    moving = wall[np.abs(level[wall]) < 0.25 * shortest[wall]]
    moved = points.copy()
    moved[moving] = _onto_rim(polyhedron, rim, points[moving], shortest[moving])
    moved = _moved_unless_flattened(points, moved, tets)
    level[wall] = rim.level(moved[wall])
    # A vertex that had to stay is taken to be on the rim if it nearly is: cutting so close to it makes
    # needles.
    longest = np.zeros(len(points))
    np.maximum.at(longest, edges.ravel(), np.repeat(length, 2))
    level[np.abs(level) < 0.03 * longest] = 0.0
    crossing = edges[level[edges[:, 0]] * level[edges[:, 1]] < 0]
    middle = _roots(rim.level, moved[crossing], level[crossing])
    if not len(crossing):
        return moved, tets
    points, tets = _split_edges(moved, tets, crossing, middle)
    # The middles lie on chords, which cut off the edge where a rim is also a sharp edge of the polyhedron.
    target = points.copy()
    target[len(moved) :] = _onto_rim(
        polyhedron, rim, middle, np.linalg.norm(np.diff(moved[crossing], axis=1)[:, 0], axis=1)
    )
    return _moved_unless_flattened(points, target, tets), tets


def _moved_unless_flattened(points: Floats, target: Floats, tets: Ints) -> Floats:
    """`target`, except where a point's move would take four fifths of the volume of a tetrahedron or more."""
    before, moved = tet_volumes(points, tets), target.copy()
    while True:
        flattened = np.unique(tets[tet_volumes(moved, tets) < 0.2 * before])
        back = flattened[(moved[flattened] != points[flattened]).any(axis=1)]
        if not len(back):
            return moved
        moved[back] = points[back]


def _onto_rim(polyhedron: Polyhedron, rim: Rim, points: Floats, reach: Floats) -> Floats:
    """Slide points of the wall to the rim; a point that would go farther than half its `reach` stays."""
    if isinstance(rim.window, FaceWindow):
        found = rim._tree.data[rim._tree.query(points)[1]]
    else:
        centre, found = np.asarray(rim.window.centre), points
        for _ in range(6):
            away = found - centre
            found = centre + away * (rim.window.radius / np.linalg.norm(away, axis=1, keepdims=True))
            found = polyhedron.nearest(found)
    far = np.linalg.norm(found - points, axis=1) > 0.5 * reach
    return np.where(far[:, None], points, found)


def boundary_facets(tets: Ints) -> Ints:
    """Triangles (k, 3) that belong to one tetrahedron alone."""
    facets = tets[:, _FACETS].reshape(-1, 3)
    _, first, count = np.unique(np.sort(facets, axis=1), axis=0, return_index=True, return_counts=True)
    return facets[first[count == 1]]


def _compact(points: Floats, tets: Ints) -> tuple[Floats, Ints]:
    used, which = np.unique(tets, return_inverse=True)
    return points[used], which.reshape(tets.shape).astype(np.int64)


def _facets_within(rim: Rim, points: Floats, boundary: Ints) -> Ints:
    inside = boundary[rim.level(points[boundary].mean(axis=1)) < 0]
    if isinstance(rim.window, FaceWindow) or not len(inside):
        return inside
    corner = np.repeat(np.arange(len(inside)), 3)
    graph = coo_matrix((np.ones(corner.size), (corner, inside.ravel())), shape=(len(inside), len(points)))
    _, part = connected_components((graph @ graph.T) >= 2, directed=False)
    nearest = np.linalg.norm(points[inside].mean(axis=1) - rim.window.centre, axis=1).argmin()
    return inside[part == part[nearest]]
