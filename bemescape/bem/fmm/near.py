"""Sums over the panels in sight of each other, with the very kernels of the direct far field.

Strategy: leaf by leaf. The sources that a leaf sees are copied, tile by tile, into single precision relative to the
leaf's centre and in units of its side, so that close pairs keep their digits and nothing overflows; then every target
runs along the tile. Tiles are filled up to whole vectors with sources of no strength. (Two targets at a time would save
loads, but sixteen vector registers do not hold them: measured, slower.)
"""

from __future__ import annotations

import numpy as np

from bemescape.bem.kernels import spread_dipole, spread_inverse, spread_lifted
from bemescape.compiled import njit

__all__ = ["DOUBLE", "LIFTED", "SINGLE", "near_double", "near_double_many", "near_lifted", "near_single"]

# The kinds of kernel, as compile-time constants of the loops below.
SINGLE, LIFTED, DOUBLE = 1, 2, 3

_TILE = 512
_VECTOR = 32
#: Targets whose kernel values are laid out at a time when there are several densities.
_ROWS = 32


@njit(cache=True, fastmath=True, error_model="numpy")
def _fill_tile(tile, size, begin, end, centre, scale, points, shape, strength):
    """Append sources begin … end to the tile: rows x, y, z, normal, spread, strength."""
    cx, cy, cz = centre[0], centre[1], centre[2]
    area = np.float32(scale * scale)
    for j in range(begin, end):
        k = size + j - begin
        tile[0, k] = np.float32((points[j, 0] - cx) * scale)
        tile[1, k] = np.float32((points[j, 1] - cy) * scale)
        tile[2, k] = np.float32((points[j, 2] - cz) * scale)
        tile[3, k], tile[4, k], tile[5, k] = shape[j, 0], shape[j, 1], shape[j, 2]
        tile[6, k] = shape[j, 3] * area
        tile[7, k] = strength[j]
    return size + end - begin


@njit(cache=True)
def _pad_tile(tile, size):
    """Fill up to whole vectors with sources far away and of no strength; the padded size."""
    padded = (size + _VECTOR - 1) // _VECTOR * _VECTOR
    for k in range(size, padded):
        for row in range(8):
            tile[row, k] = 0.0
        tile[0, k], tile[6, k] = 100.0, 1.0
    return padded


@njit(cache=True, fastmath=True, error_model="numpy")
def _load_target(target, i, centre, scale, points, shape):
    """Position, normal and spread of target i in units of the leaf."""
    for k in range(3):
        target[k], target[3 + k] = np.float32((points[i, k] - centre[k]) * scale), shape[i, k]
    target[6] = shape[i, 3] * np.float32(scale * scale)


def _sums(kind):
    """A compiled pass over all leaves for one kind of kernel."""

    @njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
    def run(
        chunks, near_first, near_begin, near_end, leaf_first, leaf_last, centres, scales,
        points, shape, source_points, source_shape, strength, out, first_chunk, last_chunk,
    ):  # fmt: skip
        one = np.float32(1.0)
        for chunk in range(first_chunk, last_chunk):
            tile, target = np.zeros((8, _TILE), np.float32), np.zeros(7, np.float32)
            for leaf in range(chunks[chunk], chunks[chunk + 1]):
                scale = scales[leaf]
                # Kernels in units of the leaf's side: 1/side, 1, 1/side².
                factor = scale if kind == SINGLE else (scale * scale if kind == DOUBLE else 1.0)
                size = 0
                for r in range(near_first[leaf], near_first[leaf + 1]):
                    begin = near_begin[r]
                    while begin < near_end[r]:
                        end = min(near_end[r], begin + _TILE - size)
                        size = _fill_tile(
                            tile, size, begin, end, centres[leaf], scale, source_points, source_shape, strength
                        )
                        begin = end
                        if size < _TILE and (begin < near_end[r] or r + 1 < near_first[leaf + 1]):
                            continue
                        size = _pad_tile(tile, size)
                        for i in range(leaf_first[leaf], leaf_last[leaf]):
                            _load_target(target, i, centres[leaf], scale, points, shape)
                            x, y, z = target[0], target[1], target[2]
                            px, py, pz, mine = target[3], target[4], target[5], target[6]
                            total = np.float32(0.0)
                            for k in range(size):
                                dx, dy, dz, wide = x - tile[0, k], y - tile[1, k], z - tile[2, k], tile[6, k]
                                inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide)
                                nx, ny, nz = tile[3, k], tile[4, k], tile[5, k]
                                hs = nx * dx + ny * dy + nz * dz
                                ht = px * dx + py * dy + pz * dz
                                if kind == SINGLE:
                                    total += tile[7, k] * spread_inverse(ht, hs, mine, wide, inverse)
                                else:
                                    tilt = px * nx + py * ny + pz * nz
                                    if kind == LIFTED:
                                        total -= tile[7, k] * spread_lifted(ht, hs, tilt, mine, wide, inverse)
                                    else:
                                        total += tile[7, k] * spread_dipole(ht, hs, tilt, mine, wide, inverse)
                            out[i] += factor * total
                        size = 0

    return run


near_single, near_lifted, near_double = _sums(SINGLE), _sums(LIFTED), _sums(DOUBLE)


@njit(cache=True, fastmath=True, error_model="numpy")
def _kernel_row(x, y, z, px, py, pz, mine, tile, size, row, values):
    for k in range(size):
        dx, dy, dz = x - tile[0, k], y - tile[1, k], z - tile[2, k]
        nx, ny, nz = tile[3, k], tile[4, k], tile[5, k]
        inverse = np.float32(1.0) / np.sqrt(dx * dx + dy * dy + dz * dz + tile[6, k])
        hs = nx * dx + ny * dy + nz * dz
        ht = px * dx + py * dy + pz * dz
        values[row, k] = spread_dipole(ht, hs, px * nx + py * ny + pz * nz, mine, tile[6, k], inverse)


@njit(cache=True, fastmath=True, error_model="numpy")
def _many_against_tile(first, last, centre, scale, points, shape, tile, size, dense, out):
    """Kernel values for a block of targets, times the densities of the tile."""
    area = np.float32(scale * scale)
    count = dense.shape[1]
    values = np.empty((_ROWS, size), np.float32)
    for block in range(first, last, _ROWS):
        rows = min(_ROWS, last - block)
        for i in range(rows):
            t = block + i
            _kernel_row(
                np.float32((points[t, 0] - centre[0]) * scale),
                np.float32((points[t, 1] - centre[1]) * scale),
                np.float32((points[t, 2] - centre[2]) * scale),
                shape[t, 0], shape[t, 1], shape[t, 2], shape[t, 3] * area, tile, size, np.uintp(i), values,
            )  # fmt: skip
        sums = np.dot(values[:rows], dense[:size])
        for i in range(rows):
            for c in range(count):
                out[block + i, c] += area * sums[i, c]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def near_double_many(
    chunks, near_first, near_begin, near_end, leaf_first, leaf_last, centres, scales,
    points, shape, source_points, source_shape, active, densities, out, first_chunk, last_chunk,
):  # fmt: skip
    """Double layer of several densities (n, r) at once; sources not `active` (n,) have none and are left out."""
    ones = np.ones(len(active), np.float32)
    for chunk in range(first_chunk, last_chunk):
        tile = np.zeros((8, _TILE), np.float32)
        dense = np.zeros((_TILE, densities.shape[1]), np.float32)
        for leaf in range(chunks[chunk], chunks[chunk + 1]):
            size = 0
            for r in range(near_first[leaf], near_first[leaf + 1]):
                for j in range(near_begin[r], near_end[r]):
                    if active[j]:
                        _fill_tile(tile, size, j, j + 1, centres[leaf], scales[leaf], source_points, source_shape, ones)
                        for c in range(densities.shape[1]):
                            dense[size, c] = densities[j, c]
                        size += 1
                    if size == _TILE:
                        _many_against_tile(
                            leaf_first[leaf], leaf_last[leaf], centres[leaf], scales[leaf], points, shape,
                            tile, size, dense, out,
                        )  # fmt: skip
                        size = 0
            if size > 0:
                padded = _pad_tile(tile, size)
                for k in range(size, padded):
                    for c in range(densities.shape[1]):
                        dense[k, c] = 0.0
                _many_against_tile(
                    leaf_first[leaf], leaf_last[leaf], centres[leaf], scales[leaf], points, shape,
                    tile, padded, dense, out,
                )  # fmt: skip
