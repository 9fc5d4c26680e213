"""Far field by direct summation: every pair, with each panel as a point at its centroid.

Strategy: targets are taken in tiles of neighbours. Sources are copied into single precision relative to the
tile's centre, so that close pairs keep their digits; the inner loops over sources then vectorise. Close pairs are
wrong on purpose (softened centroid rule) and corrected by the near field. Work grows as m²: about 5·10⁹ pairs a
second on two cores.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.kernels import (
    spread_dipole,
    spread_distance,
    spread_inverse,
    spread_lifted,
    spread_lifted_distance,
)
from bemescape.bem.panels import Panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = [
    "Targets",
    "cluster_double_layer",
    "distance_layer",
    "double_layer",
    "lifted_distance_layer",
    "lifted_single_layer",
    "panel_targets",
    "point_targets",
    "single_layer",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TILE = 64
_BLOCK = 256
_CHUNKS = 32
_FOUR_PI = 4.0 * math.pi


@dataclass(frozen=True)
class Targets:
    """Where potentials are wanted: points (t, 3), with normals and spread for means over panels (else zeros)."""

    points: Floats
    normals: Floats
    spread: Floats


def panel_targets(panels: Panels) -> Targets:
    """Means over all panels."""
    return Targets(panels.centroids, panels.normals, panels.spread)


def point_targets(points: Floats) -> Targets:
    """Values at points (t, 3)."""
    return Targets(points, np.zeros_like(points), np.zeros(len(points)))


# The kinds of kernel.
_SINGLE, _LIFTED, _DOUBLE, _DISTANCE, _LIFTED_DISTANCE = 1, 2, 3, 4, 5


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _pass(
    kind, points, point_normals, point_spread, sources, normals, spread, strength, first, out, first_tile, last_tile
):
    """All pairs of the targets in some tiles with all sources.

    Sources come in groups, `first[g]` up to `first[g + 1]`, and each group has a column of `out` to itself. One
    function holds all kinds since most of what takes time to compile is common; the choice is outside the inner loops.
    """
    one = np.float32(1.0)
    sx, sy, sz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
    nx, ny, nz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
    wide, weight = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
    for tile in range(first_tile, last_tile):
        begin, end = tile * _TILE, min(len(points), (tile + 1) * _TILE)
        cx, cy, cz = points[begin, 0], points[begin, 1], points[begin, 2]
        for group in range(len(first) - 1):
            for block in range(first[group], first[group + 1], _BLOCK):
                size = min(_BLOCK, first[group + 1] - block)
                for k in range(size):
                    j = block + k
                    sx[k] = np.float32(sources[j, 0] - cx)
                    sy[k] = np.float32(sources[j, 1] - cy)
                    sz[k] = np.float32(sources[j, 2] - cz)
                    nx[k], ny[k], nz[k] = normals[j, 0], normals[j, 1], normals[j, 2]
                    wide[k], weight[k] = spread[j], strength[j]
                for i in range(begin, end):
                    x = np.float32(points[i, 0] - cx)
                    y = np.float32(points[i, 1] - cy)
                    z = np.float32(points[i, 2] - cz)
                    px = np.float32(point_normals[i, 0])
                    py = np.float32(point_normals[i, 1])
                    pz = np.float32(point_normals[i, 2])
                    mine = np.float32(point_spread[i])
                    total = np.float32(0.0)
                    # fmt: off
                    if kind == _SINGLE:
                        for k in range(size):
                            dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                            inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide[k])
                            hs, ht = nx[k] * dx + ny[k] * dy + nz[k] * dz, px * dx + py * dy + pz * dz
                            total += weight[k] * spread_inverse(ht, hs, mine, wide[k], inverse)
                    elif kind == _DISTANCE:
                        for k in range(size):
                            dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                            inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide[k])
                            hs, ht = nx[k] * dx + ny[k] * dy + nz[k] * dz, px * dx + py * dy + pz * dz
                            total += weight[k] * spread_distance(ht, hs, mine, wide[k], inverse)
                    elif kind == _LIFTED:
                        for k in range(size):
                            dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                            inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide[k])
                            hs, ht = nx[k] * dx + ny[k] * dy + nz[k] * dz, px * dx + py * dy + pz * dz
                            tilt = px * nx[k] + py * ny[k] + pz * nz[k]
                            total -= weight[k] * spread_lifted(ht, hs, tilt, mine, wide[k], inverse)
                    elif kind == _LIFTED_DISTANCE:
                        for k in range(size):
                            dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                            inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide[k])
                            hs, ht = nx[k] * dx + ny[k] * dy + nz[k] * dz, px * dx + py * dy + pz * dz
                            tilt = px * nx[k] + py * ny[k] + pz * nz[k]
                            total -= weight[k] * spread_lifted_distance(ht, hs, tilt, mine, wide[k], inverse)
                    else:
                        for k in range(size):
                            dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                            inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide[k])
                            hs, ht = nx[k] * dx + ny[k] * dy + nz[k] * dz, px * dx + py * dy + pz * dz
                            tilt = px * nx[k] + py * ny[k] + pz * nz[k]
                            total += weight[k] * spread_dipole(ht, hs, tilt, mine, wide[k], inverse)
                    # fmt: on
                    out[i, group] += total


def _summed(kind: int, at: Targets, panels: Panels, used: Ints, density: Floats, first: Ints | None = None) -> Floats:
    if first is None:
        first = np.array([0, len(used)])
    out = np.zeros((len(at.points), len(first) - 1))
    strength = panels.areas[used] * density / _FOUR_PI
    tiles = -(-len(at.points) // _TILE)
    over_rows(
        _pass, tiles, max(1, tiles // _CHUNKS),
        kind, at.points, at.normals, at.spread, panels.centroids[used], panels.normals[used], panels.spread[used],
        strength, first, out,
    )  # fmt: skip
    return out


def single_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """V q at the targets: Σ density_j ∫_j G over the panels `used` (k,), density (k,)."""
    return _summed(_SINGLE, at, panels, used, density)[:, 0]


def lifted_single_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """Σ density_j h_j ∫_j G with h_j the height of panel j's plane above the target (along its normal)."""
    return _summed(_LIFTED, at, panels, used, density)[:, 0]


def double_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """K u at the targets: Σ density_j ∫_j ∂G/∂n_y over the panels `used` (k,), density (k,)."""
    return _summed(_DOUBLE, at, panels, used, density)[:, 0]


def distance_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """Σ density_j ∫_j r/4π over the panels `used` (k,), density (k,); r is the distance from the target."""
    return _summed(_DISTANCE, at, panels, used, density)[:, 0]


def lifted_distance_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """Σ density_j h_j ∫_j r/4π with h_j as in `lifted_single_layer`."""
    return _summed(_LIFTED_DISTANCE, at, panels, used, density)[:, 0]


def cluster_double_layer(at: Targets, panels: Panels, used: Ints, first: Ints) -> Floats:
    """K of the indicator of each cluster, (t, clusters), in one pass over the pairs.

    The panels `used` are sorted by cluster; cluster c holds `first[c]` up to `first[c + 1]`.
    """
    return _summed(_DOUBLE, at, panels, used, np.ones(len(used)), first)
