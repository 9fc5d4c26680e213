"""Round pores as sinks on the wall: their potential at points, and what they carry out of a volume integral.

A panel's u as the solver has it holds −Q/(2πr) of each pore, averaged over the panel. Over a whole plane that has the
same integral as the field of the disc, −(Q/2πa) arcsin(a/r), so that nothing else depends on it; but a panel as small
as the pore would show times below zero, and a point inside, within a panel's size of a pore, would see the average
where it should see the pore.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.kernels import panel_integrals
from bemescape.bem.panels import Panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["Sinks", "with_discs"]

Floats = NDArray[np.float64]

_FOUR_PI = 4.0 * math.pi
#: Panels with a radius below this many pore radii feel that a pore is a disc.
_FINE = 2.0
#: A point closer to a pore than this many radii of the panel under it sees the pore's field on the panels as it is, and
#: not averaged over each of them.
_CLOSE = 2.0


@njit(cache=True, error_model="numpy")
def _disc(dx, dy, dz, nx, ny, nz, a):
    """∫ σ/r over a disc of radius a with the density of an absorbing one, total 1; beyond 20 radii 1/r."""
    square = dx * dx + dy * dy + dz * dz
    if square > 400.0 * a * a:
        return 1.0 / math.sqrt(square)
    h = nx * dx + ny * dy + nz * dz
    s = math.sqrt(max(square - h * h, 0.0))
    span = math.sqrt((s - a) ** 2 + h * h) + math.sqrt((s + a) ** 2 + h * h)
    return math.asin(min(1.0, 2.0 * a / span)) / a


@njit(cache=True, nogil=True, error_model="numpy")
def _disc_potential(points, places, normals, radius, outflow, out, begin, end):
    for i in range(begin, end):
        total = 0.0
        for k in range(len(places)):
            dx, dy, dz = points[i, 0] - places[k, 0], points[i, 1] - places[k, 1], points[i, 2] - places[k, 2]
            total += outflow[k] * _disc(dx, dy, dz, normals[k, 0], normals[k, 1], normals[k, 2], radius[k])
        out[i] = total / _FOUR_PI


@njit(cache=True, error_model="numpy")
def _integrals(corners, normals, j, x, y, z):
    return panel_integrals(
        corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
        corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
        corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
        normals[j, 0], normals[j, 1], normals[j, 2],
    )  # fmt: skip


@njit(cache=True, error_model="numpy")
def _disc_mean(corners, j, x, y, z, nx, ny, nz, a):
    """Mean over panel j of `_disc`, by 64 equal parts of it."""
    total = 0.0
    for p in range(8):
        for r in range(8 - p):
            for up in range(2):
                if up == 1 and p + r > 6:
                    continue
                s, t = (p + (1.0 + up) / 3.0) / 8.0, (r + (1.0 + up) / 3.0) / 8.0
                dx = corners[j, 0, 0] + s * (corners[j, 1, 0] - corners[j, 0, 0]) - x
                dy = corners[j, 0, 1] + s * (corners[j, 1, 1] - corners[j, 0, 1]) - y
                dz = corners[j, 0, 2] + s * (corners[j, 1, 2] - corners[j, 0, 2]) - z
                dx += t * (corners[j, 2, 0] - corners[j, 0, 0])
                dy += t * (corners[j, 2, 1] - corners[j, 0, 1])
                dz += t * (corners[j, 2, 2] - corners[j, 0, 2])
                total += _disc(dx, dy, dz, nx, ny, nz, a)
    return total / 64.0


@njit(cache=True, nogil=True, error_model="numpy")
def _disc_excess(corners, centroids, normals, areas, radii, places, pore_normals, radius, outflow, out, begin, end):
    for j in range(begin, end):
        x, y, z = centroids[j, 0], centroids[j, 1], centroids[j, 2]
        for k in range(len(places)):
            a = radius[k]
            if radii[j] > _FINE * a:
                continue
            dx, dy, dz = x - places[k, 0], y - places[k, 1], z - places[k, 2]
            if dx * dx + dy * dy + dz * dz > (4.0 * a + radii[j]) ** 2:
                continue
            point, _ = _integrals(corners, normals, j, places[k, 0], places[k, 1], places[k, 2])
            disc = _disc_mean(
                corners, j, places[k, 0], places[k, 1], places[k, 2],
                pore_normals[k, 0], pore_normals[k, 1], pore_normals[k, 2], a,
            )  # fmt: skip
            out[j] += outflow[k] * (point / areas[j] - disc)


@njit(cache=True, error_model="numpy")
def _double_mean(corners, normals, j, x, y, z, px, py, pz, nx, ny, nz, a, area):
    """∫ over panel j of (solid angle seen from a point) × (∫ σ/r from a pore), by 64 equal parts of it."""
    total = 0.0
    part = np.empty((1, 3, 3))
    for p in range(8):
        for r in range(8 - p):
            for up in range(2):
                if up == 1 and p + r > 6:
                    continue
                for axis in range(3):
                    first = (corners[j, 1, axis] - corners[j, 0, axis]) / 8.0
                    second = (corners[j, 2, axis] - corners[j, 0, axis]) / 8.0
                    part[0, 0, axis] = corners[j, 0, axis] + (p + up) * first + r * second
                    part[0, 1, axis] = corners[j, 0, axis] + (p + 1) * first + (r + up) * second
                    part[0, 2, axis] = corners[j, 0, axis] + p * first + (r + 1) * second
                _, angle = _integrals(part, normals[j : j + 1], 0, x, y, z)
                if math.sqrt(area) / 8.0 > a:
                    inverse, _ = _integrals(part, normals[j : j + 1], 0, px, py, pz)
                    total += angle * inverse / (area / 64.0)
                else:
                    mx = (part[0, 0, 0] + part[0, 1, 0] + part[0, 2, 0]) / 3.0
                    my = (part[0, 0, 1] + part[0, 1, 1] + part[0, 2, 1]) / 3.0
                    mz = (part[0, 0, 2] + part[0, 1, 2] + part[0, 2, 2]) / 3.0
                    total += angle * _disc(mx - px, my - py, mz - pz, nx, ny, nz, a)
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def _close_excess(
    points, corners, centroids, normals, areas, radii, places, pore_normals, radius, outflow, reach, out,
    begin, end,
):  # fmt: skip
    for i in range(begin, end):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        for k in range(len(places)):
            px, py, pz, a = places[k, 0], places[k, 1], places[k, 2], radius[k]
            if (x - px) ** 2 + (y - py) ** 2 + (z - pz) ** 2 >= reach[k] * reach[k]:
                continue
            nx, ny, nz = pore_normals[k, 0], pore_normals[k, 1], pore_normals[k, 2]
            for j in range(len(areas)):
                ex, ey, ez = centroids[j, 0] - px, centroids[j, 1] - py, centroids[j, 2] - pz
                square = ex * ex + ey * ey + ez * ez
                if square >= (reach[k] + radii[j]) ** 2:
                    continue
                _, angle = _integrals(corners, normals, j, x, y, z)
                if radii[j] <= _FINE * a and square <= (4.0 * a + radii[j]) ** 2:
                    mean = _disc_mean(corners, j, px, py, pz, nx, ny, nz, a)
                else:
                    mean, _ = _integrals(corners, normals, j, px, py, pz)
                    mean /= areas[j]
                exact = _double_mean(corners, normals, j, x, y, z, px, py, pz, nx, ny, nz, a, areas[j])
                out[i] += outflow[k] * 2.0 * (exact - angle * mean) / (_FOUR_PI * _FOUR_PI)


@njit(cache=True, nogil=True, error_model="numpy")
def _distances(points, places, outflow, out, begin, end):
    for i in range(begin, end):
        total = 0.0
        for k in range(len(places)):
            dx, dy, dz = points[i, 0] - places[k, 0], points[i, 1] - places[k, 1], points[i, 2] - places[k, 2]
            total += outflow[k] * math.sqrt(dx * dx + dy * dy + dz * dz)
        out[i] = total


@dataclass(frozen=True)
class Sinks:
    """p round pores with what each lets out.

    Attributes
    ----------
    places, normals : (p, 3) float64
    radius : (p,) float64
    outflow : (p,) float64
        −∫ ∂f/∂n over each pore, for the solution f in question.
    """

    places: Floats
    normals: Floats
    radius: Floats
    outflow: Floats

    @property
    def total(self) -> float:
        """Outflow through all pores."""
        return float(self.outflow.sum())

    def potential_at(self, points: Floats) -> Floats:
        """∫ G over each pore times its outflow density, summed, at points (k, 3).

        The density is that of an absorbing disc, whose potential is (1/a) arcsin(2a/(r₊ + r₋)) with r± the distances
        to the nearest and farthest point of the rim (Weber 1873; common practice); a point beyond 20 radii.
        """
        out = np.empty(len(points))
        arrays = (self.places, self.normals, self.radius, self.outflow)
        over_rows(_disc_potential, len(points), 64, np.ascontiguousarray(points), *arrays, out)
        return out

    def close_to_pores(self, panels: Panels, under: NDArray[np.int64], points: Floats) -> Floats:
        """What panel averages of u miss at points (k, 3) inside, close to pores on the panels `under` (p,)."""
        out = np.zeros(len(points))
        reach = np.maximum(_CLOSE * panels.radii[under], 2.0 * self.radius)
        over_rows(
            _close_excess, len(points), 8,
            np.ascontiguousarray(points), panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii,
            self.places, self.normals, self.radius, self.outflow, reach, out,
        )  # fmt: skip
        return -out

    def distances_at(self, points: Floats) -> Floats:
        """Σ outflow · |x − place| at points (k, 3)."""
        out = np.empty(len(points))
        over_rows(_distances, len(points), 64, np.ascontiguousarray(points), self.places, self.outflow, out)
        return out

    def power(self, centre: Floats, exponent: int) -> float:
        """Σ outflow · |x − centre|^exponent."""
        distance = np.linalg.norm(self.places - centre, axis=1)
        return float((self.outflow * distance**exponent).sum())


def with_discs(panels: Panels, u: Floats, sinks: Sinks | None, *, least: float = -np.inf) -> Floats:
    """The values u (m,) where each pore is the disc that it is, and not a point.

    The disc is flat, so that u on panels of the pore itself is off by about a/R of its surroundings: `least` is what u
    cannot be below.
    """
    if sinks is None:
        return u
    excess = np.zeros(len(panels))
    over_rows(
        _disc_excess, len(panels), 256,
        panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii,
        sinks.places, sinks.normals, sinks.radius, sinks.outflow, excess,
    )  # fmt: skip
    return np.asarray(np.maximum(u + 2.0 * excess / _FOUR_PI, least))
