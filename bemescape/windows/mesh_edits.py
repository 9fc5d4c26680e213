"""Changes of a triangle mesh that leave its shape alone: bisection, and cuts along level lines.

Both put new vertices on old edges only, so every new face lies in the plane of the old one, and both act on edges,
so neighbours always agree and a closed mesh stays closed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Mesh", "bisected_to_size", "cut_along_level", "face_pairs", "mesh_edges", "split_edges"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Mesh:
    """Vertices (n, 3) in µm, faces (m, 3), and for each face the face of the input it lies on (m,)."""

    vertices: Floats
    faces: Ints
    parent: Ints


def mesh_edges(faces: Ints) -> tuple[Ints, Ints]:
    """Unique edges (e, 2) with sorted ends, and the edges of each face (m, 3).

    Edge 0 of a face joins its corners 0 and 1, edge 1 its corners 1 and 2, edge 2 its corners 2 and 0.
    """
    ends = np.sort(np.stack([faces, np.roll(faces, -1, axis=1)], axis=2).reshape(-1, 2), axis=1)
    n = int(faces.max()) + 1
    unique, of_face = np.unique(ends[:, 0] * n + ends[:, 1], return_inverse=True)
    return np.stack([unique // n, unique % n], axis=1), of_face.reshape(-1, 3)


def face_pairs(faces: Ints) -> Ints:
    """Pairs (e, 2) of faces that share an edge."""
    _, of_face = mesh_edges(faces)
    order = np.argsort(of_face.ravel(), kind="stable")
    edge = of_face.ravel()[order]
    twin = np.flatnonzero(edge[1:] == edge[:-1])
    return np.stack([order[twin] // 3, order[twin + 1] // 3], axis=1)


def split_edges(mesh: Mesh, edges: Ints, of_face: Ints, chosen: Mask, positions: Floats) -> Mesh:
    """Split the `chosen` (e,) edges at `positions` (chosen.sum(), 3) and re-triangulate the faces beside them.

    A face with two split edges is cut between the two new vertices, and its quadrilateral along the shorter
    diagonal; a face with three gets its middle triangle.
    """
    new_number = np.full(len(edges), -1)
    new_number[chosen] = len(mesh.vertices) + np.arange(int(chosen.sum()))
    vertices = np.concatenate([mesh.vertices, positions])
    on_edge = new_number[of_face]
    marks = (on_edge >= 0).sum(axis=1)
    kept = marks == 0
    faces, parents = [mesh.faces[kept]], [mesh.parent[kept]]

    def add(rows: Ints, *triangles: tuple[Ints, Ints, Ints]) -> None:
        for triangle in triangles:
            faces.append(np.stack(triangle, axis=1))
            parents.append(mesh.parent[rows])

    def turned(rows: Ints, shift: Ints) -> tuple[Ints, Ints]:
        index = (np.arange(3)[None] + shift[:, None]) % 3
        return np.take_along_axis(mesh.faces[rows], index, 1), np.take_along_axis(on_edge[rows], index, 1)

    rows = np.flatnonzero(marks == 1)
    corner, middle = turned(rows, (on_edge[rows] >= 0).argmax(axis=1))  # split edge first: 0–1
    add(rows, (corner[:, 0], middle[:, 0], corner[:, 2]), (middle[:, 0], corner[:, 1], corner[:, 2]))

    rows = np.flatnonzero(marks == 2)
    corner, middle = turned(rows, (on_edge[rows] < 0).argmax(axis=1) + 1)  # whole edge last: 2–0
    add(rows, (middle[:, 0], corner[:, 1], middle[:, 1]))
    # Quadrilateral corner 0, middle 0, middle 1, corner 2.
    first = np.linalg.norm(vertices[corner[:, 0]] - vertices[middle[:, 1]], axis=1)
    second = np.linalg.norm(vertices[middle[:, 0]] - vertices[corner[:, 2]], axis=1)
    for shorter, pick in ((True, first <= second), (False, first > second)):
        c, m, r = corner[pick], middle[pick], rows[pick]
        if shorter:
            add(r, (c[:, 0], m[:, 0], m[:, 1]), (c[:, 0], m[:, 1], c[:, 2]))
        else:
            add(r, (c[:, 0], m[:, 0], c[:, 2]), (m[:, 0], m[:, 1], c[:, 2]))

    rows = np.flatnonzero(marks == 3)
    c, m = mesh.faces[rows], on_edge[rows]
    add(
        rows,
        (c[:, 0], m[:, 0], m[:, 2]),
        (m[:, 0], c[:, 1], m[:, 1]),
        (m[:, 2], m[:, 1], c[:, 2]),
        (m[:, 0], m[:, 1], m[:, 2]),
    )
    return Mesh(vertices, np.concatenate(faces), np.concatenate(parents))


def bisected_to_size(mesh: Mesh, size_at: Callable[[Floats], Floats], *, most_faces: int) -> Mesh:
    """Bisect edges longer than `size_at(midpoints)` until none is left or the mesh has `most_faces`.

    Longest-edge rule: a face is only ever cut across its longest edge first, which bounds its smallest angle
    (Rivara 1984, doi:10.1002/nme.1620200412).
    """
    while True:
        edges, of_face = mesh_edges(mesh.faces)
        ends = mesh.vertices[edges]
        lengths = np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)
        chosen = lengths > size_at(ends.mean(axis=1))
        if not chosen.any() or len(mesh.faces) > most_faces:
            return mesh
        # Ties are broken by edge number, the same in both faces of an edge.
        rank = np.empty(len(edges), np.int64)
        rank[np.lexsort((np.arange(len(edges)), lengths))] = np.arange(len(edges))
        longest = np.take_along_axis(of_face, rank[of_face].argmax(axis=1)[:, None], 1)[:, 0]
        while True:
            due = chosen[of_face].any(axis=1) & ~chosen[longest]
            if not due.any():
                break
            chosen[longest[due]] = True
        # One bisection a face and round: only the longest edges now, the others in the next rounds.
        shared = np.bincount(longest, minlength=len(edges)) == np.bincount(of_face.ravel(), minlength=len(edges))
        now = chosen & shared
        mesh = split_edges(mesh, edges, of_face, now, ends[now].mean(axis=1))


def cut_along_level(
    mesh: Mesh, value: Floats, level: float, *, snap: float, refine: Callable[[Floats], Floats] | None = None
) -> tuple[Mesh, Floats]:
    """Cut faces where `value` (n,), linear along edges, crosses `level`.

    Parameters
    ----------
    mesh : Mesh
    value : (n,) float64
        Values at the vertices; infinite where nothing must be cut.
    level : float
    snap : float
        A crossing nearer to an end than this part of the edge uses the end instead.
    refine : callable, optional
        (k, 3) points -> (k,) exact values: crossings are then found on the true function.

    Returns
    -------
    mesh, value
        The cut mesh and the values at its vertices, `level` exactly on the cut.
    """
    offset = value - level
    edges, of_face = mesh_edges(mesh.faces)
    start, end = offset[edges[:, 0]], offset[edges[:, 1]]
    crossing = (np.sign(start) * np.sign(end) < 0.0) & np.isfinite(start) & np.isfinite(end)
    part = np.zeros(len(edges))
    part[crossing] = start[crossing] / (start[crossing] - end[crossing])
    if refine is not None and crossing.any():
        part[crossing] = _crossings(mesh.vertices[edges[crossing]], refine, level, start[crossing] < 0.0)
    # A vertex that a crossing comes too close to is taken to lie on the level itself.
    offset = offset.copy()
    offset[edges[crossing & (part < snap), 0]] = 0.0
    offset[edges[crossing & (part > 1.0 - snap), 1]] = 0.0
    start, end = offset[edges[:, 0]], offset[edges[:, 1]]
    crossing &= np.sign(start) * np.sign(end) < 0.0
    ends = mesh.vertices[edges[crossing]]
    positions = ends[:, 0] + part[crossing, None] * (ends[:, 1] - ends[:, 0])
    cut = split_edges(mesh, edges, of_face, crossing, positions)
    return cut, np.concatenate([offset + level, np.full(int(crossing.sum()), level)])


def _crossings(ends: Floats, function: Callable[[Floats], Floats], level: float, rising: Mask) -> Floats:
    """Where along each edge (k, 2, 3) the function passes `level`, by 40 bisections."""
    low, high = np.zeros(len(ends)), np.ones(len(ends))
    for _ in range(40):
        middle = 0.5 * (low + high)
        below = function(ends[:, 0] + middle[:, None] * (ends[:, 1] - ends[:, 0])) < level
        take_high = below == rising
        low = np.where(take_high, middle, low)
        high = np.where(take_high, high, middle)
    return 0.5 * (low + high)
