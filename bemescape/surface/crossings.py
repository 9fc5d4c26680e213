"""Faces that pass through one another."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["CROSSING_FACES_LIMIT", "Crossings", "find_crossings"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Larger meshes, or meshes with more near pairs, are not searched.
CROSSING_FACES_LIMIT = 250_000
_PAIRS_LIMIT = 12_000_000
_CHUNK = 400_000


@dataclass(frozen=True)
class Crossings:
    """Pairs of faces (k, 2) that cross; `complete` is False where the search was given up."""

    pairs: Ints
    complete: bool


def find_crossings(vertices: Floats, faces: Ints) -> Crossings:
    """Pairs of faces without a common vertex, one of which has an edge that passes through the other.

    Faces that only touch, or overlap within one plane, are not counted. Near pairs are found by sorting
    triangles into the cells of a grid; each pair is compared once, in the cell where their boxes begin to
    overlap.
    """
    none = np.zeros((0, 2), dtype=np.int64)
    if len(faces) > CROSSING_FACES_LIMIT:
        return Crossings(none, complete=False)
    corners = vertices[faces]
    low, high = corners.min(axis=1), corners.max(axis=1)
    # Cells about as large as a typical triangle: smaller ones repeat it in too many, larger ones pair too
    # much.
    cell = max(float(np.percentile((high - low).max(axis=1), 90)), float((high - low).max()) / 64.0)
    if not cell > 0.0:
        return Crossings(none, complete=True)
    origin = low.min(axis=0)
    first = np.floor((low - origin) / cell).astype(np.int64)
    span = np.floor((high - origin) / cell).astype(np.int64) - first + 1
    copies = span.prod(axis=1)
    if copies.sum() > _PAIRS_LIMIT:
        return Crossings(none, complete=False)
    face = np.repeat(np.arange(len(faces)), copies)
    step = np.arange(len(face)) - np.repeat(np.cumsum(copies) - copies, copies)
    wide, tall = span[face, 0], span[face, 1]
    place = first[face] + np.stack([step % wide, (step // wide) % tall, step // (wide * tall)], axis=1)
    shape = place.max(axis=0) + 1
    key = (place[:, 2] * shape[1] + place[:, 1]) * shape[0] + place[:, 0]
    order = np.argsort(key, kind="stable")
    key, face = key[order], face[order]
    begin = np.flatnonzero(np.r_[True, np.diff(key) > 0])
    size = np.diff(np.r_[begin, len(key)])
    rank = np.arange(len(key)) - np.repeat(begin, size)
    if rank.sum() > 4 * _PAIRS_LIMIT:
        return Crossings(none, complete=False)
    found = []
    # Entry i of a cell meets the `rank` entries before it.
    ends = np.cumsum(rank)
    at = 0
    while at < len(rank):
        stop = max(int(np.searchsorted(ends, (ends[at - 1] if at else 0) + _CHUNK * 4, side="right")), at + 1)
        later = np.repeat(np.arange(at, stop), rank[at:stop])
        back = np.arange(len(later)) - np.repeat(np.cumsum(rank[at:stop]) - rank[at:stop], rank[at:stop])
        earlier = later - 1 - back
        a, b = face[later], face[earlier]
        overlap = ((low[a] <= high[b]) & (low[b] <= high[a])).all(axis=1)
        a, b, cells = a[overlap], b[overlap], key[later[overlap]]
        # The same two triangles may share several cells: count them where both begin.
        meet = np.maximum(first[a], first[b])
        own = (meet[:, 2] * shape[1] + meet[:, 1]) * shape[0] + meet[:, 0] == cells
        a, b = a[own], b[own]
        apart = (faces[a][:, :, None] != faces[b][:, None, :]).all(axis=(1, 2))
        a, b = a[apart], b[apart]
        if len(a):
            crossing = _cross(corners[a], corners[b])
            found.append(np.stack([a[crossing], b[crossing]], axis=1))
        at = stop
    return Crossings(np.concatenate(found) if found else none, complete=True)


def _cross(one: Floats, two: Floats) -> NDArray[np.bool_]:
    """Whether an edge of one triangle (k, 3, 3) passes through the other."""
    return _pierces(one, two) | _pierces(two, one)


def _pierces(edges: Floats, target: Floats) -> NDArray[np.bool_]:
    a, b, c = target[:, 0], target[:, 1], target[:, 2]
    normal = np.cross(b - a, c - a)
    side = np.einsum("ij,ikj->ik", normal, edges - a[:, None])
    # Closer to the plane than rounding of its own coordinates: a touch, not a passage.
    scale = np.abs(normal).sum(axis=1) * np.abs(edges - a[:, None]).max(axis=(1, 2)) * 1e-9
    result = np.zeros(len(edges), dtype=bool)
    for k in range(3):
        p, q = edges[:, k], edges[:, (k + 1) % 3]
        sp, sq = side[:, k], side[:, (k + 1) % 3]
        opposite = (np.minimum(sp, sq) < -scale) & (np.maximum(sp, sq) > scale)
        rows = np.flatnonzero(opposite)
        if not len(rows):
            continue
        direction = q[rows] - p[rows]
        turns = []
        for u, v in ((a, b), (b, c), (c, a)):
            turns.append(np.einsum("ij,ij->i", direction, np.cross(u[rows] - p[rows], v[rows] - p[rows])))
        turn = np.stack(turns, axis=1)
        # Through an edge of the other triangle counts as through it.
        margin = 1e-12 * np.abs(turn).max(axis=1, keepdims=True)
        result[rows] |= (turn >= -margin).all(axis=1) | (turn <= margin).all(axis=1)
    return result
