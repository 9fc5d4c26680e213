"""Panels sorted along a space-filling curve, and a tree of bounding boxes over that order.

Neighbours in space become neighbours in memory: the far field works on contiguous tiles, and near pairs are
found by walking the tree.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.compiled import njit

__all__ = ["BoxTree", "build_box_tree", "morton_codes", "morton_order"]

_LEAF = 8
_BITS = 21


def _spread(value: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Insert two zero bits between the lowest 21 bits."""
    x = value & np.uint64(0x1FFFFF)
    x = (x | (x << np.uint64(32))) & np.uint64(0x1F00000000FFFF)
    x = (x | (x << np.uint64(16))) & np.uint64(0x1F0000FF0000FF)
    x = (x | (x << np.uint64(8))) & np.uint64(0x100F00F00F00F00F)
    x = (x | (x << np.uint64(4))) & np.uint64(0x10C30C30C30C30C3)
    return (x | (x << np.uint64(2))) & np.uint64(0x1249249249249249)


def morton_codes(cells: NDArray[np.int64]) -> NDArray[np.uint64]:
    """Numbers (n,) along the Morton curve of cells (n, 3), whose indices are below 2^21."""
    x, y, z = _spread(cells.T.astype(np.uint64))
    return np.asarray(x | (y << np.uint64(1)) | (z << np.uint64(2)))


def morton_order(points: NDArray[np.float64]) -> NDArray[np.int64]:
    """Order (n,) that sorts points (n, 3) along the Morton curve of their bounding cube."""
    low = points.min(axis=0)
    span = max(float((points.max(axis=0) - low).max()), 1e-300)
    cells = np.minimum(((points - low) / span * 2**_BITS).astype(np.int64), 2**_BITS - 1)
    return np.argsort(morton_codes(cells), kind="stable")


@dataclass(frozen=True)
class BoxTree:
    """Complete binary tree over sorted points; node k has the children 2k + 1 and 2k + 2.

    Attributes
    ----------
    first, last : (nodes,) int64
        Half-open range of points in each node.
    low, high : (nodes, 3) float64
        Bounding box of these points.
    reach : (nodes,) float64
        Largest radius among them.
    """

    first: NDArray[np.int64]
    last: NDArray[np.int64]
    low: NDArray[np.float64]
    high: NDArray[np.float64]
    reach: NDArray[np.float64]


@njit(cache=True)
def _fill(points, radii, first, last, low, high, reach):
    n = len(points)
    nodes = len(first)
    first[0], last[0] = 0, n
    for node in range((nodes - 1) // 2):
        middle = (first[node] + last[node]) // 2
        first[2 * node + 1], last[2 * node + 1] = first[node], middle
        first[2 * node + 2], last[2 * node + 2] = middle, last[node]
    for node in range(nodes - 1, -1, -1):
        if node >= nodes // 2:
            low[node, :] = np.inf
            high[node, :] = -np.inf
            for i in range(first[node], last[node]):
                for k in range(3):
                    low[node, k] = min(low[node, k], points[i, k])
                    high[node, k] = max(high[node, k], points[i, k])
                reach[node] = max(reach[node], radii[i])
        else:
            left, right = 2 * node + 1, 2 * node + 2
            for k in range(3):
                low[node, k] = min(low[left, k], low[right, k])
                high[node, k] = max(high[left, k], high[right, k])
            reach[node] = max(reach[left], reach[right])


def build_box_tree(points: NDArray[np.float64], radii: NDArray[np.float64]) -> BoxTree:
    """Tree over points (n, 3), already in Morton order, with a radius (n,) each."""
    depth = 0
    while len(points) > _LEAF * 2**depth:
        depth += 1
    nodes = 2 ** (depth + 1) - 1
    tree = BoxTree(
        np.zeros(nodes, np.int64),
        np.zeros(nodes, np.int64),
        np.zeros((nodes, 3)),
        np.zeros((nodes, 3)),
        np.zeros(nodes),
    )
    _fill(points, radii, tree.first, tree.last, tree.low, tree.high, tree.reach)
    return tree
