"""The solution at points inside, from its boundary values."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.kernels import panel_integrals, spread_dipole, spread_inverse, spread_lifted
from bemescape.bem.panels import Panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["FieldValues", "field_at", "triangle_distance"]

Floats = NDArray[np.float64]

#: Panels closer than this many of their radii are integrated in closed form.
_EXACT = 5.0
_FOUR_PI = 4.0 * math.pi


@dataclass(frozen=True)
class FieldValues:
    """u at points, and where they lie.

    Attributes
    ----------
    u : (p,) float64
        Meaningful inside only.
    winding : (p,) float64
        Solid angle of the surface over 4π: 1 inside, 0 outside, ½ on the wall.
    gap : (p,) float64
        Distance to the nearest panel, µm; exact for points close to the wall, an estimate elsewhere.
    nearest : (p,) int64
        That panel.
    """

    u: Floats
    winding: Floats
    gap: Floats
    nearest: NDArray[np.int64]


@njit(cache=True, error_model="numpy")
def triangle_distance(x, y, z, corners, j):
    """Distance from a point to a triangle: in its plane's prism the height, else the nearest edge."""
    best = np.inf
    inside = True
    ux = corners[j, 1, 0] - corners[j, 0, 0]
    uy = corners[j, 1, 1] - corners[j, 0, 1]
    uz = corners[j, 1, 2] - corners[j, 0, 2]
    vx = corners[j, 2, 0] - corners[j, 0, 0]
    vy = corners[j, 2, 1] - corners[j, 0, 1]
    vz = corners[j, 2, 2] - corners[j, 0, 2]
    nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
    for k in range(3):
        after = (k + 1) % 3
        ex = corners[j, after, 0] - corners[j, k, 0]
        ey = corners[j, after, 1] - corners[j, k, 1]
        ez = corners[j, after, 2] - corners[j, k, 2]
        px, py, pz = x - corners[j, k, 0], y - corners[j, k, 1], z - corners[j, k, 2]
        side = (ey * nz - ez * ny) * px + (ez * nx - ex * nz) * py + (ex * ny - ey * nx) * pz
        if side > 0.0:
            inside = False
        part = (px * ex + py * ey + pz * ez) / (ex * ex + ey * ey + ez * ez)
        part = min(max(part, 0.0), 1.0)
        dx, dy, dz = px - part * ex, py - part * ey, pz - part * ez
        best = min(best, dx * dx + dy * dy + dz * dz)
    if inside:
        height = nx * (x - corners[j, 0, 0]) + ny * (y - corners[j, 0, 1]) + nz * (z - corners[j, 0, 2])
        return abs(height) / math.sqrt(nx * nx + ny * ny + nz * nz)
    return math.sqrt(best)


@njit(cache=True, nogil=True, error_model="numpy")
def _sums(
    points, corners, centroids, normals, areas, radii, spread, u, q, source, value, winding, gap, nearest, begin, end
):
    m = len(areas)
    for i in range(begin, end):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        total = 0.0
        angle_sum = 0.0
        closest = np.inf
        for j in range(m):
            dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
            square = dx * dx + dy * dy + dz * dz
            limit = _EXACT * radii[j]
            hs = dx * normals[j, 0] + dy * normals[j, 1] + dz * normals[j, 2]
            if square < limit * limit:
                one, angle = panel_integrals(
                    corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
                    corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
                    corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
                    normals[j, 0], normals[j, 1], normals[j, 2],
                )  # fmt: skip
                lifted = -hs * one
                distance = triangle_distance(x, y, z, corners, j)
            else:
                inverse = 1.0 / math.sqrt(square + spread[j])
                one = areas[j] * spread_inverse(0.0, hs, 0.0, spread[j], inverse)
                lifted = -areas[j] * spread_lifted(0.0, hs, 0.0, 0.0, spread[j], inverse)
                angle = -areas[j] * spread_dipole(0.0, hs, 0.0, 0.0, spread[j], inverse)
                distance = math.sqrt(square) - radii[j]
            total += q[j] * one + u[j] * angle + 0.5 * source * lifted
            angle_sum += angle
            if distance < closest:
                closest = distance
                nearest[i] = j
        value[i] = total / _FOUR_PI
        winding[i] = angle_sum / _FOUR_PI
        gap[i] = closest


def field_at(panels: Panels, u: Floats, q: Floats, source: float, points: Floats) -> FieldValues:
    """U = source·∫_Ω G + V q − K u at points (p, 3), for Δu = −source with u and q = ∂u/∂n (m,) on the panels.

    A constant is taken out of u before summing and put back afterwards, so that the small error of the far solid
    angles does not multiply the whole of u.
    """
    level = float((panels.areas * u).sum() / panels.areas.sum())
    count = len(points)
    value, winding, gap = np.zeros(count), np.zeros(count), np.zeros(count)
    nearest = np.zeros(count, np.int64)
    over_rows(
        _sums, count, 1 + count // 32,
        np.ascontiguousarray(points), panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii,
        panels.spread, u - level, q, source, value, winding, gap, nearest,
    )  # fmt: skip
    return FieldValues(value + level, winding, gap, nearest)
