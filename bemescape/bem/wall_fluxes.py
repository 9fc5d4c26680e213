"""Fluxes given at points of the wall: their potentials on panels and on one another, for reduced problems.

A flux is a set of points on panels with a weight each (flow through a small part of the wall). Everything here is
linear in the weights; several fluxes may share the points of one window.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.kernels import panel_integrals, spread_dipole, spread_inverse, spread_lifted
from bemescape.bem.panels import Panels, make_panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["TestedFluxes", "dense_single_layer", "flux_couplings", "fluxes_on_panels"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Panels closer than this many of their radii are integrated in closed form.
_EXACT = 5.0
#: A point this close to a panel's plane, in radii, lies in it: rounding must not choose a side.
_IN_PLANE = 1e-9
#: Averages over a panel of a window that lies closer to the source than this part of both radii use the fine rule.
_CLOSE = 1.0
#: Beyond this many of both radii the formula of the far field serves.
_FAR = 3.0
_FOUR_PI = 4.0 * math.pi


@dataclass(frozen=True, eq=False)
class TestedFluxes:
    """Fluxes of `sites` windows, `modes` of each, against m panels.

    Attributes
    ----------
    single : (sites, modes, m) float64
        Σ weight ∫_panel G: the potential of the flux, integrated over each panel; or the other way round.
    double : (sites, modes, m) float64
        Σ weight ∫_panel ∂G/∂n_y, the mean of both sides of the wall.
    volume : (sites, modes) float64
        Σ weight ∫_Ω G.
    """

    single: Floats
    double: Floats
    volume: Floats


@njit(cache=True, nogil=True, error_model="numpy")
def _test(
    points, weights, first, corners, centroids, normals, areas, radii, spread, single, double, volume, begin, end
):
    modes = single.shape[1]
    for site in range(begin, end):
        for s in range(first[site], first[site + 1]):
            x, y, z = points[s, 0], points[s, 1], points[s, 2]
            for j in range(len(areas)):
                dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
                square = dx * dx + dy * dy + dz * dz
                hs = dx * normals[j, 0] + dy * normals[j, 1] + dz * normals[j, 2]
                limit = _EXACT * radii[j]
                if square < limit * limit:
                    one, angle = panel_integrals(
                        corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
                        corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
                        corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
                        normals[j, 0], normals[j, 1], normals[j, 2],
                    )  # fmt: skip
                    lifted = -hs * one
                    dipole = -angle if abs(hs) > _IN_PLANE * radii[j] else 0.0
                else:
                    inverse = 1.0 / math.sqrt(square + spread[j])
                    one = areas[j] * spread_inverse(0.0, hs, 0.0, spread[j], inverse)
                    lifted = -areas[j] * spread_lifted(0.0, hs, 0.0, 0.0, spread[j], inverse)
                    dipole = areas[j] * spread_dipole(0.0, hs, 0.0, 0.0, spread[j], inverse)
                for k in range(modes):
                    weight = weights[k, s] / _FOUR_PI
                    single[site, k, j] += weight * one
                    double[site, k, j] += weight * dipole
                    volume[site, k] += 0.5 * weight * lifted


def fluxes_on_panels(panels: Panels, points: Floats, weights: Floats, first: Ints) -> TestedFluxes:
    """Test fluxes against panels.

    Parameters
    ----------
    panels : Panels
        m panels of a closed surface.
    points : (p, 3) float64
        Points on these panels; those of site i are `first[i]` to `first[i + 1]`.
    weights : (modes, p) float64
        Flow through each point, one row for each mode of the site that it belongs to.
    first : (sites + 1,) int64
    """
    sites, modes, m = len(first) - 1, len(weights), len(panels)
    out = TestedFluxes(np.zeros((sites, modes, m)), np.zeros((sites, modes, m)), np.zeros((sites, modes)))
    over_rows(
        _test, sites, 1, np.ascontiguousarray(points), np.ascontiguousarray(weights), first, panels.corners,
        panels.centroids, panels.normals, panels.areas, panels.radii, panels.spread, out.single, out.double, out.volume,
    )  # fmt: skip
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def _couple(points, weights, first, out, begin, end):
    sites, modes = len(first) - 1, len(weights)
    for i in range(begin, end):
        along = np.empty(modes)
        for j in range(sites):
            if i == j:
                continue
            for s in range(first[i], first[i + 1]):
                along[:] = 0.0
                for t in range(first[j], first[j + 1]):
                    dx = points[s, 0] - points[t, 0]
                    dy = points[s, 1] - points[t, 1]
                    dz = points[s, 2] - points[t, 2]
                    inverse = 1.0 / math.sqrt(dx * dx + dy * dy + dz * dz)
                    for b in range(modes):
                        along[b] += weights[b, t] * inverse
                for a in range(modes):
                    for b in range(modes):
                        out[i, a, j, b] += weights[a, s] * along[b] / _FOUR_PI


def flux_couplings(points: Floats, weights: Floats, first: Ints) -> Floats:
    """Σ Σ weight_s weight_t / 4πr between the fluxes of different sites, (sites, modes, sites, modes).

    Zero between fluxes of one site, where the sum over points would be singular; arguments as `fluxes_on_panels`.
    """
    sites, modes = len(first) - 1, len(weights)
    out = np.zeros((sites, modes, sites, modes))
    over_rows(_couple, sites, 1, np.ascontiguousarray(points), np.ascontiguousarray(weights), first, out)
    return out


@njit(cache=True, error_model="numpy")
def _mean_potential(points, weights, corners, normals, j):
    """Weighted mean over `points` of ∫ 1/r of panel j."""
    total = 0.0
    for p in range(len(points)):
        x, y, z = points[p, 0], points[p, 1], points[p, 2]
        one, _ = panel_integrals(
            corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
            corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
            corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
            normals[j, 0], normals[j, 1], normals[j, 2],
        )  # fmt: skip
        total += weights[p] * one
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def _dense(
    three_points, close_points, close_weights, first, corners, centroids, normals, areas, radii, spread, out, begin, end
):
    m = len(normals)
    thirds = np.full(3, 1.0 / 3.0)
    for i in range(begin, end):
        own = slice(first[i], first[i + 1])
        for j in range(m):
            dx = centroids[i, 0] - centroids[j, 0]
            dy = centroids[i, 1] - centroids[j, 1]
            dz = centroids[i, 2] - centroids[j, 2]
            square = dx * dx + dy * dy + dz * dz
            reach = (radii[i] + radii[j]) ** 2
            if square > _FAR * _FAR * reach:
                hs = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
                ht = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
                inverse = 1.0 / math.sqrt(square + spread[j])
                mean = areas[j] * spread_inverse(ht, hs, spread[i], spread[j], inverse)
            elif square < _CLOSE * _CLOSE * reach:
                mean = _mean_potential(close_points[own], close_weights[own], corners, normals, j)
            else:
                mean = _mean_potential(three_points[i], thirds, corners, normals, j)
            out[i, j] = mean / _FOUR_PI


def dense_single_layer(corners: Floats) -> tuple[Floats, Panels]:
    """∬ G over each pair of a few panels, (m, m) symmetric, and the panels, which are sorted.

    Parameters
    ----------
    corners : (m, 3, 3) float64
        The panels of one window: hundreds, not thousands.
    """
    panels = make_panels(corners)
    out = np.empty((len(panels), len(panels)))
    over_rows(
        _dense, len(panels), 32, panels.three_points, panels.close_points, panels.close_weights, panels.close_first,
        panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii, panels.spread, out,
    )  # fmt: skip
    out *= panels.areas[:, None]
    return 0.5 * (out + out.T), panels
