"""Clusters of panels whose constants carry the slow modes of a branched shape."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csr_matrix
from scipy.sparse.csgraph import connected_components, dijkstra

__all__ = ["wall_clusters"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def wall_clusters(
    centroids: Floats, neighbours: Ints, is_window: NDArray[np.bool_], start: Ints, *, wanted: int = 64
) -> Ints:
    """Cluster number (m,) of each wall panel, −1 in none: slices of the wall between equal distances to `start`.

    Distances run along the wall, so the slices of a branched shape are connected pieces of its branches: along a
    neck a slice is a ring, and u changes little within it.

    Parameters
    ----------
    centroids : (m, 3) float64
    neighbours : (e, 2) int64
        Pairs of panels that share an edge.
    is_window : (m,) bool
    start : (s,) int64
        Panels that distances count from: those of the windows.
    wanted : int
        This many clusters at most, half as many at least, if the shape allows.
    """
    m = len(centroids)
    none = np.full(m, -1)
    if is_window.all():
        return none
    length = np.linalg.norm(centroids[neighbours[:, 0]] - centroids[neighbours[:, 1]], axis=1)
    graph = csr_matrix(coo_matrix((np.maximum(length, 1e-300), neighbours.T), shape=(m, m)))
    distance = dijkstra(graph, directed=False, indices=start, min_only=True)
    # A shell without a window (an obstacle) is sliced by height instead.
    apart = ~np.isfinite(distance)
    distance[apart] = centroids[apart, 2] - centroids[apart, 2].min(initial=0.0)
    slices, best = max(2, wanted // 16), none
    for _ in range(16):
        found = _sliced(distance, neighbours, is_window, slices, m // (20 * wanted))
        # Thin slices of a round body fall to pieces, and pieces that leave gaps serve worse than fewer whole ones.
        if best is not none and found.max() >= wanted:
            break
        best = found
        if best.max() >= wanted // 2:
            break
        slices = int(1.3 * slices) + 1
    return best


def _sliced(distance: Floats, neighbours: Ints, is_window: NDArray[np.bool_], slices: int, smallest: int) -> Ints:
    """Connected pieces (m,) of so many slices; −1 on windows and in pieces of few panels."""
    m = len(distance)
    band = np.floor(distance / (distance.max() * (1.0 + 1e-9)) * slices).astype(np.int64)
    band[is_window] = -1
    same = band[neighbours[:, 0]] == band[neighbours[:, 1]]
    pairs = neighbours[same]
    joined = coo_matrix((np.ones(len(pairs)), pairs.T), shape=(m, m))
    label = connected_components(joined, directed=False)[1]
    label = np.where(is_window, -1, label)
    numbers, size = np.unique(label[label >= 0], return_counts=True)
    kept = numbers[size >= max(4, smallest)]
    number = np.full(int(label.max()) + 1, -1)
    number[kept] = np.arange(len(kept))
    return np.where(label >= 0, number[label], -1)
