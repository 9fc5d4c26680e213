"""Problems whose source is itself a solution, such as D Δm = −2u for the second moment: no volume mesh needed.

Let Δf = −s in the volume with s constant (s = 1 for the mean time at D = 1, s = 0 for a splitting probability). With
Ψ = r/8π, ΔΨ = G, and Φ = r³/96π, ΔΦ = Ψ, Green's second identity turns the potential of f into surface integrals:

    ∫_Ω G f = ∮ (f ∂Ψ/∂n − Ψ ∂f/∂n) − s ∫_Ω Ψ,      ∫_Ω Ψ = ∮ ∂Φ/∂n = ¼ Σ_j h_j ∫_j Ψ,

and with h_j the height of panel j's plane above the target, ∂Ψ/∂n = ½ h_j G: all kernels are bounded.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_matrix

from bemescape.bem.far import distance_layer, lifted_distance_layer, lifted_single_layer, panel_targets
from bemescape.bem.kernels import (
    panel_integrals,
    spread_distance,
    spread_lifted,
    spread_lifted_distance,
)
from bemescape.bem.operator import EscapeOperator
from bemescape.bem.panels import Panels
from bemescape.bem.sinks import Sinks
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["SourcePotential", "source_potential_at", "volume_integral_of_chain"]

Floats = NDArray[np.float64]

#: At a point, panels closer than this many of their radii are integrated in closed form.
_EXACT = 5.0
#: Rows that a thread takes at a time.
_ROWS = 256
_FOUR_PI = 4.0 * math.pi


@njit(cache=True, nogil=True, error_model="numpy")
def _near_corrections(
    corners, centroids, normals, areas, spread, three_points, first, column,
    lifted, distance, lifted_distance, begin, end,
):  # fmt: skip
    for i in range(begin, end):
        for slot in range(first[i], first[i + 1]):
            j = column[slot]
            one_mean = r_mean = hr_mean = 0.0
            for p in range(3):
                x, y, z = three_points[i, p, 0], three_points[i, p, 1], three_points[i, p, 2]
                height = (
                    normals[j, 0] * (centroids[j, 0] - x)
                    + normals[j, 1] * (centroids[j, 1] - y)
                    + normals[j, 2] * (centroids[j, 2] - z)
                )
                one, _ = panel_integrals(
                    corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
                    corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
                    corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
                    normals[j, 0], normals[j, 1], normals[j, 2],
                )  # fmt: skip
                r_sum = 0.0
                for s in range(3):
                    dx = three_points[j, s, 0] - x
                    dy = three_points[j, s, 1] - y
                    dz = three_points[j, s, 2] - z
                    r_sum += math.sqrt(dx * dx + dy * dy + dz * dz)
                one_mean += height * one / 3.0
                r_mean += areas[j] * r_sum / 9.0
                hr_mean += areas[j] * height * r_sum / 9.0
            # What the far field does with this pair, to be taken back.
            dx = centroids[i, 0] - centroids[j, 0]
            dy = centroids[i, 1] - centroids[j, 1]
            dz = centroids[i, 2] - centroids[j, 2]
            inverse = 1.0 / math.sqrt(dx * dx + dy * dy + dz * dz + spread[j])
            hs = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
            ht = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
            tilt = normals[i, 0] * normals[j, 0] + normals[i, 1] * normals[j, 1] + normals[i, 2] * normals[j, 2]
            far_one = -areas[j] * spread_lifted(ht, hs, tilt, spread[i], spread[j], inverse)
            far_r = areas[j] * spread_distance(ht, hs, spread[i], spread[j], inverse)
            far_hr = -areas[j] * spread_lifted_distance(ht, hs, tilt, spread[i], spread[j], inverse)
            lifted[slot] = (one_mean - far_one) / _FOUR_PI
            distance[slot] = (r_mean - far_r) / _FOUR_PI
            lifted_distance[i] += (hr_mean - far_hr) / _FOUR_PI


class SourcePotential:
    """∫_Ω G f averaged over each panel, for any f with Δf = −source, prepared for one mesh.

    Sums over all pairs, as the far field: work grows as m².
    """

    def __init__(self, operator: EscapeOperator) -> None:
        p = operator.panels
        self._panels, self._pores = p, operator.pores
        pairs = operator.near_double
        shape, rows = pairs.shape, (pairs.indices, pairs.indptr)
        lifted = np.empty(len(pairs.indices), np.float32)
        distance = np.empty(len(pairs.indices), np.float32)
        lifted_distance = np.zeros(len(p))
        over_rows(
            _near_corrections, len(p), _ROWS,
            p.corners, p.centroids, p.normals, p.areas, p.spread, p.three_points,
            pairs.indptr, pairs.indices, lifted, distance, lifted_distance,
        )  # fmt: skip
        self._near_lifted = csr_matrix((lifted, *rows), shape=shape)
        self._near_distance = csr_matrix((distance, *rows), shape=shape)
        every = np.arange(len(p))
        whole = lifted_distance_layer(panel_targets(p), p, every, np.ones(len(p))) + lifted_distance
        # Ψ = r/8π is half of what the layers of r/4π give.
        self._of_constant = whole / 8.0

    def of(self, f: Floats, slope: Floats, source: float, outflow: Floats | None = None) -> Floats:
        """∫_Ω G f, (m + p,), from f and its slope ∂f/∂n (m,) on the panels, with Δf = −source inside.

        `outflow` (p,) is that of f through the compact pores.
        """
        p = self._panels
        used = np.flatnonzero(f)
        out = 0.5 * lifted_single_layer(panel_targets(p), p, used, f[used])
        out += 0.5 * (self._near_lifted @ f.astype(np.float32))
        used = np.flatnonzero(slope)
        out -= 0.5 * distance_layer(panel_targets(p), p, used, slope[used])
        out -= 0.5 * (self._near_distance @ slope.astype(np.float32))
        out -= source * self._of_constant
        if self._pores is None or outflow is None:
            return np.asarray(out)
        # A pore's slope adds its outflow times Ψ.
        out += 0.5 * self._pores.distance_columns(outflow)
        sinks = self._pores.sinks(outflow)
        return np.concatenate([out, source_potential_at(p, f, slope, source, sinks.places, sinks)])


@njit(cache=True, nogil=True, error_model="numpy")
def _potential_at(
    points, corners, centroids, normals, areas, radii, spread, three_points, f, slope, source, out, begin, end
):
    for i in range(begin, end):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        total = 0.0
        for j in range(len(areas)):
            dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
            square = dx * dx + dy * dy + dz * dz
            hs = dx * normals[j, 0] + dy * normals[j, 1] + dz * normals[j, 2]
            limit = _EXACT * radii[j]
            if square < limit * limit:
                one, _ = panel_integrals(
                    corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
                    corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
                    corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
                    normals[j, 0], normals[j, 1], normals[j, 2],
                )  # fmt: skip
                lifted = -hs * one
                distance = 0.0
                for s in range(3):
                    ex = three_points[j, s, 0] - x
                    ey = three_points[j, s, 1] - y
                    ez = three_points[j, s, 2] - z
                    distance += areas[j] * math.sqrt(ex * ex + ey * ey + ez * ez) / 3.0
            else:
                inverse = 1.0 / math.sqrt(square + spread[j])
                lifted = -areas[j] * spread_lifted(0.0, hs, 0.0, 0.0, spread[j], inverse)
                distance = areas[j] * spread_distance(0.0, hs, 0.0, spread[j], inverse)
            total += 0.5 * f[j] * lifted - (0.5 * slope[j] - 0.125 * source * hs) * distance
        out[i] = total / _FOUR_PI


def source_potential_at(
    panels: Panels, f: Floats, slope: Floats, source: float, points: Floats, sinks: Sinks | None = None
) -> Floats:
    """∫_Ω G f at points (p, 3), as `SourcePotential.of`."""
    out = np.empty(len(points))
    over_rows(
        _potential_at, len(points), 1 + len(points) // 32,
        np.ascontiguousarray(points), panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii,
        panels.spread, panels.three_points, f, slope, source, out,
    )  # fmt: skip
    if sinks is not None:
        out += sinks.distances_at(points) / (2.0 * _FOUR_PI)
    return out


#: Barycentric points and weights exact to degree 5 on a triangle: Strang & Fix (1973), after Radon (1948).
_RADON_A, _RADON_B = (6.0 - math.sqrt(15.0)) / 21.0, (6.0 + math.sqrt(15.0)) / 21.0
_RADON_POINTS = np.array(
    [
        [1.0 / 3.0] * 3,
        *(np.roll([1.0 - 2.0 * _RADON_A, _RADON_A, _RADON_A], k) for k in range(3)),
        *(np.roll([1.0 - 2.0 * _RADON_B, _RADON_B, _RADON_B], k) for k in range(3)),
    ]
)
_RADON_WEIGHTS = np.array(
    [9.0 / 40.0, *[(155.0 - math.sqrt(15.0)) / 1200.0] * 3, *[(155.0 + math.sqrt(15.0)) / 1200.0] * 3]
)


def volume_integral_of_chain(
    panels: Panels,
    m: Floats,
    m_slope: Floats,
    factor: float,
    f: Floats,
    slope: Floats,
    source: float,
    *,
    m_sinks: Sinks | None = None,
    f_sinks: Sinks | None = None,
) -> float:
    """∫_Ω m for Δm = −factor·f and Δf = −source, from boundary values and slopes (m,) of both, and their sinks.

    Green's identity twice, with φ = |x|²/6, Δφ = 1, and χ = |x|⁴/120, Δχ = φ:
    ∫m = ∮(m ∂φ/∂n − φ ∂m/∂n) − factor·∫φf, ∫φf = ∮(f ∂χ/∂n − χ ∂f/∂n) − source·∫χ, ∫|x|⁴ = (1/7)∮|x|⁴ x·n.
    On a flat panel x·n is constant and the rest is a polynomial that the rule integrates exactly.
    """
    centre = panels.centroids.mean(axis=0)
    heights = np.einsum("ij,ij->i", panels.centroids - centre, panels.normals)
    points = np.einsum("qk,tkx->tqx", _RADON_POINTS, panels.corners - centre)
    square = (points**2).sum(axis=2)
    second = square @ _RADON_WEIGHTS
    fourth = square**2 @ _RADON_WEIGHTS
    a = panels.areas
    of_chi = float((a * fourth * heights).sum() / 840.0)
    of_phi_f = float((a * (f * second * heights / 30.0 - slope * fourth / 120.0)).sum()) - source * of_chi
    of_phi_f += 0.0 if f_sinks is None else f_sinks.power(centre, 4) / 120.0
    of_m = float((a * (m * heights / 3.0 - m_slope * second / 6.0)).sum())
    of_m += 0.0 if m_sinks is None else m_sinks.power(centre, 2) / 6.0
    return of_m - factor * of_phi_f
