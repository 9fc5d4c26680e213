"""Repairs of single kinds of damage: a mesh in, a changed copy out, or None where nothing was wrong."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.surface.health import ZERO_ALTITUDE
from bemescape.surface.measure import altitudes, edge_lengths, equal_rows, triangle_keys
from bemescape.surface.topology import Edges, linked_groups
from bemescape.surface.working import Working

__all__ = [
    "Repair",
    "drop_collapsed_faces",
    "drop_doubled_faces",
    "drop_unused_vertices",
    "remove_flat_faces",
    "weld_equal_vertices",
    "weld_near_vertices",
]

Ints = NDArray[np.int64]

#: Vertices on open edges closer than this part of the bounding box's diagonal are one (rounding of text
#: files)...
_WELD_NEAR = (1e-9, 1e-7, 1e-6)
#: ...unless that would swallow an edge: the distance stays below this part of the shortest open edge.
_WELD_EDGE_SHARE = 0.2
#: A flat face that cannot be turned away is pulled together only where its shortest edge is below this
#: part of the diagonal, so that the shape does not move.
_PULL = 1e-6
_PASSES = 12


@dataclass(frozen=True)
class Repair:
    """A changed mesh and what was changed.

    `faces` are numbers of the original mesh. Several repairs made at once share the mesh with all of them
    done and carry their own `volume_change` (µm³) and `area_change` (µm²); otherwise these follow from the
    meshes before and after.
    """

    mesh: Working
    count: int
    detail: str
    faces: Ints
    volume_change: float | None = None
    area_change: float | None = None


def drop_unused_vertices(mesh: Working) -> Repair | None:
    """Drop vertices that no face uses."""
    lean = mesh.without_unused_vertices()
    count = len(mesh.vertices) - len(lean.vertices)
    if not count:
        return None
    return Repair(lean, count, f"{count} vertices belonged to no face", np.zeros(0, np.int64))


def weld_equal_vertices(mesh: Working) -> Repair | None:
    """Make vertices on open edges one where their positions are equal.

    Vertices away from open edges stay apart: equal positions there are sheets that touch and were told
    apart on purpose.
    """
    rim = _rim_vertices(mesh)
    if not len(rim):
        return None
    group = equal_rows(mesh.vertices[rim] + 0.0)
    return _welded(mesh, rim, group, "at equal positions")


def weld_near_vertices(mesh: Working) -> Repair | None:
    """Make vertices on open edges one where they differ by rounding only."""
    start, count = mesh, 0
    touched: list[Ints] = []
    for share in _WELD_NEAR:
        rim = _rim_vertices(mesh)
        if not len(rim):
            break
        edges = mesh.edges
        ends = mesh.vertices[edges.ends[edges.counts == 1]]
        lengths = np.linalg.norm(ends[:, 0] - ends[:, 1], axis=1)
        shortest = float(lengths[lengths > 0.0].min(initial=np.inf))
        distance = min(share * mesh.diagonal, _WELD_EDGE_SHARE * shortest)
        near = cKDTree(mesh.vertices[rim]).query_pairs(distance, output_type="ndarray")
        if len(near):
            _, group = linked_groups(len(rim), near[:, 0], near[:, 1])
            repair = _welded(mesh, rim, group, "")
            if repair is not None:
                mesh, count = repair.mesh, count + repair.count
                touched.append(repair.faces)
    if mesh is start:
        return None
    detail = f"{count} vertices that differed from another by rounding only were joined to it"
    return Repair(mesh, count, detail, np.unique(np.concatenate(touched)))


def _rim_vertices(mesh: Working) -> Ints:
    edges = mesh.edges
    return np.unique(edges.ends[edges.counts == 1])


def _welded(mesh: Working, rim: Ints, group: Ints, where: str) -> Repair | None:
    first = np.full(int(group.max()) + 1, len(mesh.vertices), dtype=np.int64)
    np.minimum.at(first, group, rim)
    number = np.arange(len(mesh.vertices))
    number[rim] = first[group]
    moved = number != np.arange(len(number))
    count = int(moved.sum())
    if not count:
        return None
    touched = mesh.face_source[moved[mesh.faces].any(axis=1)]
    welded = mesh.renumbered(number)
    return Repair(welded, count, f"{count} vertices {where} were joined to another", touched)


def drop_collapsed_faces(mesh: Working) -> Repair | None:
    """Drop faces that name a vertex twice."""
    a, b, c = mesh.faces.T
    collapsed = (a == b) | (b == c) | (c == a)
    count = int(collapsed.sum())
    if not count:
        return None
    return Repair(mesh.keeping(~collapsed), count, f"{count} faces named a vertex twice", mesh.face_source[collapsed])


def drop_doubled_faces(mesh: Working) -> Repair | None:
    """Keep one of faces with the same corners, or none where they are a wall inside the volume.

    Doubled faces that hang together are judged as one sheet by what else meets at its border: one other
    face at each border edge means that the sheet belongs to the surface; two mean that it divides a volume
    (as where cells of a segmentation were joined).
    """
    keys = triangle_keys(mesh.faces)
    _, first = np.unique(keys, return_index=True)
    if len(first) == len(keys):
        return None
    faces = mesh.faces[first]
    doubled = np.bincount(keys)[keys[first]] > 1
    edges = Edges.of(faces)
    edge = edges.of_half_edge
    is_doubled = np.repeat(doubled, 3)
    singles = np.bincount(edge, weights=~is_doubled, minlength=len(edges.counts)).astype(np.int64)
    # Doubled half-edges of one edge are neighbours in this order: link each to the one before.
    chain = edges.order[is_doubled[edges.order]]
    same = edge[chain[1:]] == edge[chain[:-1]]
    _, sheet = linked_groups(len(faces), chain[:-1][same] // 3, chain[1:][same] // 3)
    border = np.flatnonzero(is_doubled & (singles[edge] > 0))
    votes = np.bincount(
        sheet[border // 3], weights=np.where(singles[edge[border]] % 2 == 1, 1.0, -1.0), minlength=len(faces)
    )
    keep_first = ~doubled | (votes[sheet] >= 0)
    keep = np.zeros(len(keys), dtype=bool)
    keep[first[keep_first]] = True
    count = int((~keep).sum())
    walls = int((~keep_first).sum())
    detail = f"{count} faces had the corners of another"
    if walls:
        detail += f"; {walls} of these positions were walls inside the volume and were opened"
    return Repair(mesh.keeping(keep), count, detail, mesh.face_source[~keep])


def remove_flat_faces(mesh: Working) -> Repair | None:
    """Remove faces without area and leave no crack.

    A flat face whose longest edge has a neighbour is turned away: the middle corner, which lies on that
    edge, becomes a corner of the neighbour, which is cut in two; no point of the surface moves. What
    cannot be turned is pulled together along its shortest edge, if that is short enough not to move the
    shape.
    """
    count = 0
    touched: list[Ints] = []
    turned_count = pulled_count = 0
    for _ in range(_PASSES):
        lengths = edge_lengths(mesh.vertices, mesh.faces)
        bad = altitudes(mesh.areas, lengths) <= ZERO_ALTITUDE * mesh.diagonal
        flat = np.flatnonzero(bad)
        if not len(flat):
            break
        touched.append(mesh.face_source[flat])
        count = max(count, len(flat))
        short = lengths[flat].min(axis=1) <= ZERO_ALTITUDE * mesh.diagonal
        turned, done = _turned_away(mesh, flat[~short], bad, lengths, into_existing=False)
        turned_count += done
        if done == 0:
            turned, done = _pulled_together(mesh, flat, lengths)
            pulled_count += done
        if done == 0:
            # The new edge doubles another one; the sheets along it are told apart afterwards.
            turned, done = _turned_away(mesh, flat[~short], bad, lengths, into_existing=True)
            turned_count += done
        if done == 0:
            break
        mesh = turned
    if not turned_count and not pulled_count:
        return None
    detail = f"{turned_count} flat faces were turned away and {pulled_count} pulled together along a short edge"
    return Repair(mesh, count, detail, np.unique(np.concatenate(touched)))


def _turned_away(
    mesh: Working, flat: Ints, bad: NDArray[np.bool_], lengths: NDArray[np.float64], *, into_existing: bool
) -> tuple[Working, int]:
    edges = mesh.edges
    twin = np.full(3 * len(mesh.faces), -1, dtype=np.int64)
    agreeing = edges.pairs[~edges.same_way]
    twin[agreeing[:, 0]], twin[agreeing[:, 1]] = agreeing[:, 1], agreeing[:, 0]
    long = 3 * flat + lengths[flat].argmax(axis=1)
    usable = (twin[long] >= 0) & ~bad[twin[long] // 3]
    flat, long = flat[usable], long[usable]
    if not len(flat):
        return mesh, 0
    other = twin[long]
    _, chosen = np.unique(other // 3, return_index=True)  # each neighbour takes one at a time
    flat, long, other = flat[chosen], long[chosen], other[chosen]
    a, b = edges.tail[long], edges.head[long]
    c = mesh.faces[flat, (long % 3 + 2) % 3]
    d = mesh.faces[other // 3, (other % 3 + 2) % 3]
    base = len(mesh.vertices)
    known = np.unique(edges.ends[:, 0] * base + edges.ends[:, 1])
    new = np.minimum(c, d) * base + np.maximum(c, d)
    _, alone = np.unique(new, return_index=True)
    free = np.zeros(len(new), dtype=bool)
    free[alone] = True
    free &= c != d
    if not into_existing:
        free &= ~np.isin(new, known)
    flat, other, a, b, c, d = (array[free] for array in (flat, other, a, b, c, d))
    faces, source = mesh.faces.copy(), mesh.face_source.copy()
    faces[flat] = np.stack([a, d, c], axis=1)
    faces[other // 3] = np.stack([d, b, c], axis=1)
    source[flat] = source[other // 3]
    return mesh.with_faces(faces, source), len(flat)


def _pulled_together(mesh: Working, flat: Ints, lengths: NDArray[np.float64]) -> tuple[Working, int]:
    shortest = lengths[flat].argmin(axis=1)
    flat_short = lengths[flat, shortest] <= _PULL * mesh.diagonal
    flat, shortest = flat[flat_short], shortest[flat_short]
    if not len(flat):
        return mesh, 0
    a, b = mesh.faces[flat, shortest], mesh.faces[flat, (shortest + 1) % 3]
    _, group = linked_groups(len(mesh.vertices), a, b)
    first = np.full(int(group.max()) + 1, len(mesh.vertices), dtype=np.int64)
    np.minimum.at(first, group, np.arange(len(group)))
    pulled = mesh.renumbered(first[group])
    corner = pulled.faces
    keep = (corner[:, 0] != corner[:, 1]) & (corner[:, 1] != corner[:, 2]) & (corner[:, 2] != corner[:, 0])
    return pulled.keeping(keep), len(flat)
