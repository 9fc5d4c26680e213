"""Which closed shells bound the same diffusing volume."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from bemescape.surface.nesting import nesting_depths
from bemescape.surface.surface import Surface

__all__ = ["compartments", "face_parts"]

Ints = NDArray[np.int64]


def face_parts(faces: Ints) -> Ints:
    """Number of the part of each face (m,): faces that hang together through shared vertices."""
    _, vertex = np.unique(faces, return_inverse=True)
    vertex = vertex.reshape(-1, 3)
    n = int(vertex.max()) + 1
    pairs = np.concatenate([vertex[:, :2], vertex[:, 1:]])
    graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    return np.asarray(connected_components(graph, directed=False)[1])[vertex[:, 0]]


def compartments(surface: Surface) -> Ints:
    """Number of the connected volume that each face (m,) bounds: an outer shell and the obstacles within it."""
    part = face_parts(surface.faces)
    count = int(part.max()) + 1
    depth = nesting_depths(surface.vertices, surface.faces, part, count)
    home = np.arange(count)
    for inner in np.flatnonzero(depth % 2 == 1):
        for outer in np.flatnonzero(depth == depth[inner] - 1):
            pair = np.full(len(part), -1)
            pair[part == outer], pair[part == inner] = 0, 1
            if nesting_depths(surface.vertices, surface.faces, pair, 2)[1] == 1:
                home[inner] = outer
                break
    return np.unique(home[part], return_inverse=True)[1].astype(np.int64)
