"""Winding numbers of points: how often a mesh, even one with holes, goes around them."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["winding_numbers"]

Floats = NDArray[np.float64]


def winding_numbers(points: Floats, corners: Floats) -> Floats:
    """Generalised winding number (k,) of points (k, 3) about triangles (m, 3, 3).

    The sum of signed solid angles over 4π: 1 inside a closed outward surface, 0 outside, in between where
    holes let the outside in; above one half counts as inside. Cost: k times m.

    Notes
    -----
    Jacobson, Kavan & Sorkine-Hornung (2013), doi:10.1145/2461912.2461916; solid angle of a triangle after
    van Oosterom & Strackee (1983), doi:10.1109/TBME.1983.325207.
    """
    result = np.empty(len(points))
    over_rows(
        _sum_angles, len(points), 1 + len(points) // 32,
        np.ascontiguousarray(points), np.ascontiguousarray(corners.reshape(-1, 9)), result,
    )  # fmt: skip
    return result


@njit(cache=True, nogil=True)
def _sum_angles(points, corners, result, begin, end):  # type: ignore[no-untyped-def]
    for i in range(begin, end):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        total = 0.0
        for j in range(len(corners)):
            ax, ay, az = corners[j, 0] - x, corners[j, 1] - y, corners[j, 2] - z
            bx, by, bz = corners[j, 3] - x, corners[j, 4] - y, corners[j, 5] - z
            cx, cy, cz = corners[j, 6] - x, corners[j, 7] - y, corners[j, 8] - z
            a = math.sqrt(ax * ax + ay * ay + az * az)
            b = math.sqrt(bx * bx + by * by + bz * bz)
            c = math.sqrt(cx * cx + cy * cy + cz * cz)
            triple = ax * (by * cz - bz * cy) + ay * (bz * cx - bx * cz) + az * (bx * cy - by * cx)
            ab, bc, ca = ax * bx + ay * by + az * bz, bx * cx + by * cy + bz * cz, cx * ax + cy * ay + cz * az
            total += math.atan2(triple, a * b * c + ab * c + bc * a + ca * b)
        result[i] = total / (2.0 * math.pi)
