"""Far field by direct summation: every pair, with each panel as a point at its centroid.

Strategy: targets are taken in tiles of neighbours. Sources are copied into single precision relative to the
tile's centre, so that close pairs keep their digits; the inner loop over sources then vectorises. Close pairs are
wrong on purpose (softened centroid rule) and corrected by the near field. Work grows as m²: about 5·10⁹ pairs a
second on two cores.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from bemescape.bem.panels import Panels

__all__ = [
    "Targets",
    "cluster_double_layer",
    "double_layer",
    "lifted_single_layer",
    "panel_targets",
    "point_targets",
    "single_layer",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TILE = 64
_BLOCK = 256
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


@njit(cache=True, parallel=True, fastmath=True, error_model="numpy")
def _single(points, point_normals, point_spread, sources, normals, spread, softening2, strength, lifted, out):
    """Σ s/ρ, or with `lifted` Σ s·n·(y − x)/ρ, as the scalars `spread_inverse` and `spread_lifted` say."""
    n = len(sources)
    half, one, two, three = np.float32(0.5), np.float32(1.0), np.float32(2.0), np.float32(3.0)
    for tile in prange((len(points) + _TILE - 1) // _TILE):
        begin, end = tile * _TILE, min(len(points), (tile + 1) * _TILE)
        cx, cy, cz = points[begin, 0], points[begin, 1], points[begin, 2]
        sx, sy, sz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        nx, ny, nz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        soft, wide = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        weight = np.empty(_BLOCK, np.float32)
        for block in range(0, n, _BLOCK):
            size = min(_BLOCK, n - block)
            for k in range(size):
                j = block + k
                sx[k] = np.float32(sources[j, 0] - cx)
                sy[k] = np.float32(sources[j, 1] - cy)
                sz[k] = np.float32(sources[j, 2] - cz)
                nx[k], ny[k], nz[k] = normals[j, 0], normals[j, 1], normals[j, 2]
                soft[k], wide[k], weight[k] = softening2[j], spread[j], strength[j]
            for i in range(begin, end):
                x = np.float32(points[i, 0] - cx)
                y = np.float32(points[i, 1] - cy)
                z = np.float32(points[i, 2] - cz)
                px = np.float32(point_normals[i, 0])
                py = np.float32(point_normals[i, 1])
                pz = np.float32(point_normals[i, 2])
                mine = np.float32(point_spread[i])
                total = np.float32(0.0)
                if lifted:
                    for k in range(size):
                        dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                        inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + soft[k])
                        hs = nx[k] * dx + ny[k] * dy + nz[k] * dz
                        ht = px * dx + py * dy + pz * dz
                        tilt = px * nx[k] + py * ny[k] + pz * nz[k]
                        inverse2 = inverse * inverse
                        total -= weight[k] * (
                            hs * inverse
                            + half
                            * inverse2
                            * inverse
                            * (
                                mine * (two * tilt * ht - hs - three * hs * ht * ht * inverse2)
                                + wide[k] * hs * (one - three * hs * hs * inverse2)
                            )
                        )
                else:
                    for k in range(size):
                        dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                        inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + soft[k])
                        hs = nx[k] * dx + ny[k] * dy + nz[k] * dz
                        ht = px * dx + py * dy + pz * dz
                        inverse2 = inverse * inverse
                        total += (
                            weight[k]
                            * inverse
                            * (
                                one
                                + half
                                * inverse2
                                * (
                                    mine * (one - three * ht * ht * inverse2)
                                    + wide[k] * (one - three * hs * hs * inverse2)
                                )
                            )
                        )
                out[i] += total


@njit(cache=True, parallel=True, fastmath=True, error_model="numpy")
def _double(points, sources, softening2, moment, out):
    n = len(sources)
    for tile in prange((len(points) + _TILE - 1) // _TILE):
        begin, end = tile * _TILE, min(len(points), (tile + 1) * _TILE)
        cx, cy, cz = points[begin, 0], points[begin, 1], points[begin, 2]
        sx, sy, sz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        mx, my, mz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        soft = np.empty(_BLOCK, np.float32)
        for block in range(0, n, _BLOCK):
            size = min(_BLOCK, n - block)
            for k in range(size):
                j = block + k
                sx[k] = np.float32(sources[j, 0] - cx)
                sy[k] = np.float32(sources[j, 1] - cy)
                sz[k] = np.float32(sources[j, 2] - cz)
                mx[k], my[k], mz[k] = moment[j, 0], moment[j, 1], moment[j, 2]
                soft[k] = softening2[j]
            for i in range(begin, end):
                x = np.float32(points[i, 0] - cx)
                y = np.float32(points[i, 1] - cy)
                z = np.float32(points[i, 2] - cz)
                total = np.float32(0.0)
                for k in range(size):
                    dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                    inverse = np.float32(1.0) / np.sqrt(dx * dx + dy * dy + dz * dz + soft[k])
                    total += (mx[k] * dx + my[k] * dy + mz[k] * dz) * inverse * inverse * inverse
                out[i] += total


def single_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """V q at the targets: Σ density_j ∫_j G over the panels `used` (k,), density (k,)."""
    return _run_single(at, panels, used, density, lifted=False)


def lifted_single_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """Σ density_j h_j ∫_j G with h_j the height of panel j's plane above the target (along its normal)."""
    return _run_single(at, panels, used, density, lifted=True)


def _run_single(at: Targets, panels: Panels, used: Ints, density: Floats, *, lifted: bool) -> Floats:
    out = np.zeros(len(at.points))
    strength = panels.areas[used] * density / _FOUR_PI
    _single(
        at.points, at.normals, at.spread, panels.centroids[used], panels.normals[used], panels.spread[used],
        panels.softening2[used], strength, lifted, out,
    )  # fmt: skip
    return out


def double_layer(at: Targets, panels: Panels, used: Ints, density: Floats) -> Floats:
    """K u at the targets: Σ density_j ∫_j ∂G/∂n_y over the panels `used` (k,), density (k,)."""
    out = np.zeros(len(at.points))
    moment = (panels.areas[used] * density / _FOUR_PI)[:, None] * panels.normals[used]
    _double(at.points, panels.centroids[used], panels.softening2[used], moment, out)
    return out


@njit(cache=True, parallel=True, fastmath=True, error_model="numpy")
def _clusters(targets, sources, softening2, moment, first, out):
    for tile in prange((len(targets) + _TILE - 1) // _TILE):
        begin, end = tile * _TILE, min(len(targets), (tile + 1) * _TILE)
        cx, cy, cz = targets[begin, 0], targets[begin, 1], targets[begin, 2]
        n = len(sources)
        sx, sy, sz = np.empty(n, np.float32), np.empty(n, np.float32), np.empty(n, np.float32)
        for k in range(n):
            sx[k] = np.float32(sources[k, 0] - cx)
            sy[k] = np.float32(sources[k, 1] - cy)
            sz[k] = np.float32(sources[k, 2] - cz)
        for i in range(begin, end):
            x = np.float32(targets[i, 0] - cx)
            y = np.float32(targets[i, 1] - cy)
            z = np.float32(targets[i, 2] - cz)
            for cluster in range(len(first) - 1):
                total = np.float32(0.0)
                for k in range(first[cluster], first[cluster + 1]):
                    dx, dy, dz = x - sx[k], y - sy[k], z - sz[k]
                    square = dx * dx + dy * dy + dz * dz + softening2[k]
                    total += (moment[k, 0] * dx + moment[k, 1] * dy + moment[k, 2] * dz) / (
                        square * np.sqrt(square)
                    )
                out[i, cluster] = total


def cluster_double_layer(at: Targets, panels: Panels, used: Ints, first: Ints) -> Floats:
    """K of the indicator of each cluster, (t, clusters), in one pass over the pairs.

    The panels `used` are sorted by cluster; cluster c holds `first[c]` up to `first[c + 1]`.
    """
    out = np.zeros((len(at.points), len(first) - 1), np.float32)
    moment = (panels.areas[used, None] * panels.normals[used] / _FOUR_PI).astype(np.float32)
    _clusters(
        at.points, panels.centroids[used], panels.softening2[used].astype(np.float32), moment, first, out
    )
    return out.astype(np.float64)
