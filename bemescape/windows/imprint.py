"""Rims cut into a mesh along the levels of patches.

Strategy: many discs are cut in one pass over the mesh, those whose balls are further apart than an edge is long: a
point of an edge to be cut is then nearest to an inside vertex of its own disc. The others, and contacts, wait for a
next pass, on the mesh that the first have been cut into.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.windows.mesh_edits import Mesh, cut_along_level, mesh_edges
from bemescape.windows.patch import Patch

__all__ = ["rims_cut"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]

#: A crossing closer to a vertex than this part of the edge uses the vertex.
_SNAP = 0.005


@dataclass(frozen=True)
class _Inside:
    """Vertices inside a patch (k,), all that share an edge with them (j,), and the longest of these edges."""

    own: Ints
    around: Ints
    edge: float


def rims_cut(mesh: Mesh, patches: Sequence[Patch]) -> tuple[Mesh, list[Ints]]:
    """Cut along the level of every patch that has one, in its own pieces only.

    Returns
    -------
    mesh, members
        The cut mesh, and the faces of each patch in it: whole input faces where a patch has no level.

    Raises
    ------
    WindowError
        A patch lies between the vertices: it is smaller than the panels.
    """
    waiting = [number for number, patch in enumerate(patches) if patch.level is not None]
    found: dict[int, Mask] = {}
    while waiting:
        numbered = Mesh(mesh.vertices, mesh.faces, np.arange(len(mesh.faces)))
        chosen, waiting = _apart(numbered, patches, waiting)
        cut, face_patch = _cut(numbered, patches, chosen)
        found = {number: inside[cut.parent] for number, inside in found.items()}
        found |= {number: face_patch == number for number in chosen}
        mesh = Mesh(cut.vertices, cut.faces, mesh.parent[cut.parent])
    return mesh, [
        np.flatnonzero(found[number] if patch.level is not None else np.isin(mesh.parent, patch.faces))
        for number, patch in enumerate(patches)
    ]


def _apart(mesh: Mesh, patches: Sequence[Patch], waiting: Sequence[int]) -> tuple[dict[int, _Inside], list[int]]:
    """Patches that can be cut at once, with their vertices, and those that have to wait."""
    edges, _ = mesh_edges(mesh.faces)
    n = len(mesh.vertices)
    ends = np.concatenate([edges, edges[:, ::-1]])
    graph = csr_matrix((np.ones(len(ends), np.int8), (ends[:, 0], ends[:, 1])), shape=(n, n))
    longest = np.zeros(n)
    np.maximum.at(longest, ends[:, 0], np.linalg.norm(mesh.vertices[ends[:, 0]] - mesh.vertices[ends[:, 1]], axis=1))
    tree = cKDTree(mesh.vertices)
    chosen: dict[int, _Inside] = {}
    later = []
    for number in waiting:
        patch = patches[number]
        inside = _inside(mesh, patch, graph, tree, longest)
        if all(_far_apart(patch, inside, patches[k], other) for k, other in chosen.items()):
            chosen[number] = inside
        else:
            later.append(number)
    return chosen, later


def _far_apart(patch: Patch, inside: _Inside, other: Patch, inside_other: _Inside) -> bool:
    if patch.disc is None or other.disc is None:
        return False
    gap = float(np.linalg.norm(np.subtract(patch.disc.centre_um, other.disc.centre_um)))
    return gap > patch.radius_um + other.radius_um + 2.0 * max(inside.edge, inside_other.edge)


def _inside(mesh: Mesh, patch: Patch, graph: csr_matrix, tree: cKDTree, longest: Floats) -> _Inside:
    if patch.level is None:
        raise ValueError("a window of whole faces is not cut")
    if patch.disc is not None:
        near = np.sort(np.array(tree.query_ball_point(patch.disc.centre_um, patch.disc.radius_um), np.int64))
    else:
        near = np.arange(len(mesh.vertices))
    near = near[patch.level(mesh.vertices[near]) < 0.0] if len(near) else near
    if not len(near):
        raise WindowError(
            f"window {patch.name!r} (radius {patch.radius_um:.4g} µm) is smaller than the panels can be made here; "
            "raise the panel budget or enlarge the window"
        )
    # Another sheet within the level stays wall.
    label = connected_components(graph[near][:, near], directed=False)[1]
    _, nearest = cKDTree(mesh.vertices[near]).query(patch.starts)
    own = near[np.isin(label, label[nearest])]
    return _Inside(own, np.union1d(own, graph[own].indices), float(longest[own].max()))


def _cut(mesh: Mesh, patches: Sequence[Patch], chosen: dict[int, _Inside]) -> tuple[Mesh, Ints]:
    """The mesh cut along the chosen patches' rims, and the patch of each of its faces (m,), −1 elsewhere."""
    owner = np.full(len(mesh.vertices), -1)
    value = np.full(len(mesh.vertices), np.inf)
    for number, inside in chosen.items():
        value[inside.around] = np.abs(_level(patches[number], mesh.vertices[inside.around]))
        value[inside.own] *= -1.0
        owner[inside.own] = number
    within = np.flatnonzero(owner >= 0)
    nearest = cKDTree(mesh.vertices[within])

    def level(points: Floats) -> Floats:
        patch = owner[within[nearest.query(points)[1]]]
        result = np.empty(len(points))
        for number in np.unique(patch).tolist():
            result[patch == number] = _level(patches[number], points[patch == number])
        return result

    cut, value = cut_along_level(mesh, value, 0.0, snap=_SNAP, refine=level)
    corner = value[cut.faces]
    candidates = np.flatnonzero((corner <= 0.0).all(axis=1))
    # A face with all three corners on the rim itself goes by its middle.
    flat = (corner[candidates] == 0.0).all(axis=1)
    middles = cut.vertices[cut.faces[candidates]].mean(axis=1)
    kept = ~flat
    kept[flat] = level(middles[flat]) < 0.0
    candidates, middles = candidates[kept], middles[kept]
    of_corner = np.append(owner, np.full(len(cut.vertices) - len(owner), -1))[cut.faces[candidates]].max(axis=1)
    by_place = owner[within[nearest.query(middles)[1]]] if len(middles) else of_corner
    face_patch = np.full(len(cut.faces), -1)
    face_patch[candidates] = np.where(of_corner >= 0, of_corner, by_place)
    return cut, face_patch


def _level(patch: Patch, points: Floats) -> Floats:
    if patch.level is None:
        raise ValueError("a window of whole faces has no level")
    return patch.level(points)
