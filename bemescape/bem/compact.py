"""Compact pores: round windows far smaller than what surrounds them, with one unknown each.

A pore at x_j on the wall lets Q_j out. Seen from further than a few radii a it is a point on the wall, so that the
panels' equation gets one column for each pore,

    ½u + K u − V q + Σ_j Q_j G(·, x_j) = b,

and its mean over a panel is the potential of that panel at x_j, in closed form. Close to x_j, on a smooth wall of
mean curvature H, both principal curvatures' mean (convex: H > 0),

    u = −Q_j/(2πr) + Q_j (H/4π) ln r + u_j + small,

the expansion of Singer, Schuss & Holcman (2008, Phys. Rev. E 78:051111, doi:10.1103/PhysRevE.78.051111); for the ball
also Cheviakov, Ward & Straube (2010, doi:10.1137/100782620). The pore's own law closes the system: averaging the two
singular terms over the flux of the disc (`bemescape.bem.disc`) gives

    u_j − given = Q_j [ρ/a − (H/4π) (ln a + λ)],

ρ its resistance in a flat wall (¼ when absorbing; D = 1) and λ the mean of ln|x − y| over its flux.

**What flat panels miss.** u_j is the equation at x_j itself, ½u_j = b − K u + V q − Σ_{k≠j} Q_k G(x_j, x_k). There, K
acts on the pore's own −Q_j/(2πr); on a smooth wall that is logarithmic, on flat panels it is cut off somewhere at the
size of the panels. So what the panels make of it within a reach L, weighted by w = (1 − r²/L²)², is taken out, and the
integral for the smooth wall is put in: −(Q_j H/4π) ln(4L′) with ln L′ = ln L − ¾ (∫ w dr/r = ln(L/δ) − ¾ from δ on,
and ∫ d²y/(|y||x − y|) = 2π ln(4L/|x|) over a disc of radius L). What is added to a flat pore is therefore about
(H/4π) ln(h/a), h the panels' size: (aH/π) ln(h/a) of its resistance.

What is left out is of second order in a/R, and of fourth order in a/d for a neighbour at d: the mean of 1/r over both
discs is taken with its second-order term, `_pair`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_matrix

from bemescape.bem.disc import disc_flux
from bemescape.bem.far import cluster_double_layer, double_layer, lifted_single_layer, point_targets, single_layer
from bemescape.bem.kernels import panel_integrals, spread_dipole, spread_inverse, spread_lifted
from bemescape.bem.panels import Panels
from bemescape.bem.sinks import Sinks
from bemescape.bem.tree import morton_order
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["CompactPores", "PoreRows", "assemble_pores"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Panels closer to a pore than this many of their radii are integrated in closed form.
_EXACT = 5.0
#: Panels whose normals differ more than this (cosine) belong to another sheet of the wall.
_SAME_SHEET = 0.5
_FOUR_PI = 4.0 * math.pi
_TILE, _BLOCK = 64, 256


@dataclass(frozen=True)
class CompactPores:
    """p round pores on the wall.

    Attributes
    ----------
    places : (p, 3) float64
        Middles, inside their panels (not on an edge: the wall has no normal there).
    panel : (p,) int64
        The panel of each.
    radius : (p,) float64
    barrier : (p,) float64
        D/κ in µm; 0 when perfectly absorbing.
    curvature : (p,) float64
        Mean curvature of the smooth wall, positive where convex, per µm.
    reach : (p,) float64
        How far around a pore the panels stand for a smooth wall, µm.
    """

    places: Floats
    panel: Ints
    radius: Floats
    barrier: Floats
    curvature: Floats
    reach: Floats

    def __len__(self) -> int:
        return len(self.radius)


@njit(cache=True, error_model="numpy")
def _is_near(x, y, z, j, pore_reach, centroids, radii):
    dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
    limit = max(_EXACT * radii[j], pore_reach)
    return dx * dx + dy * dy + dz * dz < limit * limit


@njit(cache=True, nogil=True, error_model="numpy")
def _count_near(places, reach, centroids, radii, counts, begin, end):
    for i in range(begin, end):
        for j in range(len(radii)):
            if _is_near(places[i, 0], places[i, 1], places[i, 2], j, reach[i], centroids, radii):
                counts[i] += 1


@njit(cache=True, nogil=True, error_model="numpy")
def _fill_near(
    places, own, reach, corners, centroids, normals, areas, radii, spread, first, column, single, double, volume,
    local, begin, end,
):  # fmt: skip
    for i in range(begin, end):
        x, y, z = places[i, 0], places[i, 1], places[i, 2]
        slot = first[i]
        for j in range(len(areas)):
            if not _is_near(x, y, z, j, reach[i], centroids, radii):
                continue
            one, angle = panel_integrals(
                corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
                corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
                corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
                normals[j, 0], normals[j, 1], normals[j, 2],
            )  # fmt: skip
            dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
            hs = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
            if j == own[i]:
                angle, hs = 0.0, 0.0  # not the rounding noise of a place in the panel's plane
            square = dx * dx + dy * dy + dz * dz
            inverse = 1.0 / math.sqrt(square + spread[j])
            far_one = areas[j] * spread_inverse(0.0, hs, 0.0, spread[j], inverse)
            far_angle = areas[j] * spread_dipole(0.0, hs, 0.0, 0.0, spread[j], inverse)
            far_lifted = -areas[j] * spread_lifted(0.0, hs, 0.0, 0.0, spread[j], inverse)
            column[slot] = j
            single[slot] = (one - far_one) / _FOUR_PI
            double[slot] = (-angle - far_angle) / _FOUR_PI
            volume[i] += 0.5 * (-hs * one - far_lifted) / _FOUR_PI
            slot += 1
            tilt = (
                normals[j, 0] * normals[own[i], 0]
                + normals[j, 1] * normals[own[i], 1]
                + normals[j, 2] * normals[own[i], 2]
            )
            if square < reach[i] * reach[i] and tilt > _SAME_SHEET:
                weight = (1.0 - square / (reach[i] * reach[i])) ** 2
                local[i] += weight * (angle / _FOUR_PI) * 2.0 * one / (_FOUR_PI * areas[j])


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _column_pass(centroids, normals, spread, places, strength, out, begin, end):
    """Σ_k strength_k · mean of 1/r over each panel, by its second moment, as in `bemescape.bem.far`."""
    one = np.float32(1.0)
    zero = np.float32(0.0)
    for tile in range(begin, end, _TILE):
        cx, cy, cz = centroids[tile, 0], centroids[tile, 1], centroids[tile, 2]
        sx, sy, sz = np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32), np.empty(_BLOCK, np.float32)
        weight = np.empty(_BLOCK, np.float32)
        for block in range(0, len(places), _BLOCK):
            size = min(_BLOCK, len(places) - block)
            for k in range(size):
                sx[k] = np.float32(places[block + k, 0] - cx)
                sy[k] = np.float32(places[block + k, 1] - cy)
                sz[k] = np.float32(places[block + k, 2] - cz)
                weight[k] = strength[block + k]
            for i in range(tile, min(end, tile + _TILE)):
                x = np.float32(centroids[i, 0] - cx)
                y = np.float32(centroids[i, 1] - cy)
                z = np.float32(centroids[i, 2] - cz)
                px, py, pz = np.float32(normals[i, 0]), np.float32(normals[i, 1]), np.float32(normals[i, 2])
                wide = np.float32(spread[i])
                total = zero
                for k in range(size):
                    dx, dy, dz = sx[k] - x, sy[k] - y, sz[k] - z
                    inverse = one / np.sqrt(dx * dx + dy * dy + dz * dz + wide)
                    hs = px * dx + py * dy + pz * dz
                    total += weight[k] * spread_inverse(zero, hs, zero, wide, inverse)
                out[i] += total


@njit(cache=True, nogil=True, error_model="numpy")
def _distance_pass(centroids, normals, spread, places, strength, out, begin, end):
    """Σ_k strength_k · mean of r over each panel, to second order in its size."""
    for i in range(begin, end):
        total = 0.0
        for k in range(len(places)):
            dx, dy, dz = places[k, 0] - centroids[i, 0], places[k, 1] - centroids[i, 1], places[k, 2] - centroids[i, 2]
            r = math.sqrt(dx * dx + dy * dy + dz * dz + spread[i])
            h = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
            total += strength[k] * (r + 0.5 * spread[i] * (h / r) ** 2 / r)
        out[i] = total


@njit(cache=True, error_model="numpy")
def _pair(places, normals, square, i, k):
    """Mean of 1/r over two discs, to second order: ¼⟨s²⟩ of each times the in-plane Laplacian (1 − 3h²/r²)/r³."""
    dx, dy, dz = places[i, 0] - places[k, 0], places[i, 1] - places[k, 1], places[i, 2] - places[k, 2]
    inverse2 = 1.0 / (dx * dx + dy * dy + dz * dz)
    hi = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
    hk = normals[k, 0] * dx + normals[k, 1] * dy + normals[k, 2] * dz
    bend = square[i] * (1.0 - 3.0 * hi * hi * inverse2) + square[k] * (1.0 - 3.0 * hk * hk * inverse2)
    return math.sqrt(inverse2) * (1.0 + 0.25 * bend * inverse2)


@njit(cache=True, nogil=True, error_model="numpy")
def _pair_pass(places, normals, square, outflow, out, begin, end):
    for i in range(begin, end):
        total = 0.0
        for k in range(len(places)):
            if k != i:
                total += outflow[k] * _pair(places, normals, square, i, k)
        out[i] = total / _FOUR_PI


@njit(cache=True, error_model="numpy")
def _pair_block(places, normals, square, members):
    block = np.zeros((len(members), len(members)))
    for a in range(len(members)):
        for b in range(len(members)):
            if a != b:
                block[a, b] = _pair(places, normals, square, members[a], members[b]) / _FOUR_PI
    return block


class PoreRows:
    """The p rows and columns that compact pores add to the equation of m panels.

    Parameters
    ----------
    panels : Panels
    is_window : (m,) bool
    pores : CompactPores

    Attributes
    ----------
    resistance : (p,) float64
        (u_j − given)/Q_j with what the panels miss, per µm, for D = 1.
    curvature_part : (p,) float64
        The part of `resistance` that a flat wall of the same panels does not have.
    volume_potential : (p,) float64
        ∫_Ω G dy at each pore.
    """

    def __init__(self, panels: Panels, is_window: NDArray[np.bool_], pores: CompactPores) -> None:
        self.pores = pores
        self._panels = panels
        self._normals = panels.normals[pores.panel]
        self._windows = np.flatnonzero(is_window)
        self._morton = morton_order(pores.places)
        m, p = len(panels), len(pores)
        count = np.zeros(p, np.int64)
        over_rows(_count_near, p, 64, pores.places, pores.reach, panels.centroids, panels.radii, count)
        first = np.concatenate([[0], np.cumsum(count)])
        column, single, double = np.empty(first[-1], np.int64), np.empty(first[-1]), np.empty(first[-1])
        volume, local = np.zeros(p), np.zeros(p)
        over_rows(
            _fill_near, p, 32,
            pores.places, pores.panel, pores.reach, panels.corners, panels.centroids, panels.normals, panels.areas,
            panels.radii, panels.spread, first, column, single, double, volume, local,
        )  # fmt: skip
        near_single = csr_matrix((single, column, first), shape=(p, m))
        self._near_columns = near_single.multiply(1.0 / panels.areas[None]).T.tocsr()
        self._near_single = near_single[:, self._windows]
        self._near_double = csr_matrix((double, column, first), shape=(p, m))
        every, ones = np.arange(m), np.ones(m)
        # The solid angles of all panels sum to −½ seen from one of them; what the far field leaves goes to its own.
        row_sum = self._at_places(double_layer, every, ones) + self._near_double @ ones
        self._own_double = -0.5 - row_sum
        self.volume_potential = 0.5 * self._at_places(lifted_single_layer, every, ones) + volume
        fluxes = [
            disc_flux(float(a / barrier) if barrier > 0.0 else math.inf)
            for a, barrier in zip(pores.radius, pores.barrier, strict=True)
        ]
        self._mean_square = np.array([flux.mean_square for flux in fluxes]) * pores.radius**2
        mean_log = np.array([flux.mean_log for flux in fluxes])
        smooth = pores.curvature / _FOUR_PI * (np.log(4.0 * pores.reach / pores.radius) - 0.75 - mean_log)
        self.curvature_part = smooth - 2.0 * local
        self.resistance = np.array([flux.resistance for flux in fluxes]) / pores.radius + self.curvature_part

    def __len__(self) -> int:
        return len(self.pores)

    def _at_places(self, layer, used: Ints, density: Floats) -> Floats:  # type: ignore[no-untyped-def]
        """A far-field sum at the pores, in an order that keeps neighbours together."""
        out = np.empty(len(self))
        out[self._morton] = layer(point_targets(self.pores.places[self._morton]), self._panels, used, density)
        return out

    def columns(self, outflow: Floats) -> Floats:
        """Σ Q_j G(·, x_j), averaged over the panels: (p,) -> (m,)."""
        panels = self._panels
        out = np.zeros(len(panels))
        over_rows(
            _column_pass, len(panels), 8 * _TILE,
            panels.centroids, panels.normals, panels.spread, self.pores.places[self._morton],
            outflow[self._morton] / _FOUR_PI, out,
        )  # fmt: skip
        return np.asarray(out + self._near_columns @ outflow)

    def single(self, q_window: Floats) -> Floats:
        """V q at the pores, q (w,) on the window panels: -> (p,)."""
        if not len(self._windows):
            return np.zeros(len(self))
        return np.asarray(self._at_places(single_layer, self._windows, q_window) + self._near_single @ q_window)

    def double(self, u: Floats) -> Floats:
        """K u at the pores, u (m,): -> (p,)."""
        used = np.flatnonzero(u)
        far = self._at_places(double_layer, used, u[used])
        return np.asarray(far + self._near_double @ u + self._own_double * u[self.pores.panel])

    def double_of_clusters(self, cluster_of: Ints, count: int) -> Floats:
        """`double` of the indicator of each cluster: (p, count)."""
        used = np.flatnonzero(cluster_of >= 0)
        by_cluster = used[np.argsort(cluster_of[used], kind="stable")]
        first = np.searchsorted(cluster_of[by_cluster], np.arange(count + 1))
        image = np.empty((len(self), count))
        at = point_targets(self.pores.places[self._morton])
        image[self._morton] = cluster_double_layer(at, self._panels, by_cluster, first)
        shape = (len(self._panels), count)
        image += (self._near_double @ csr_matrix((np.ones(len(used)), (used, cluster_of[used])), shape=shape)).toarray()
        own = cluster_of[self.pores.panel]
        inside = np.flatnonzero(own >= 0)
        image[inside, own[inside]] += self._own_double[inside]
        return image

    def between(self, outflow: Floats) -> Floats:
        """What the pores' own equations make of the outflow: Σ_{k≠j} Q_k G(x_j, x_k) + ½ resistance Q_j."""
        out = np.zeros(len(self))
        over_rows(_pair_pass, len(self), 64, self.pores.places, self._normals, self._mean_square, outflow, out)
        return np.asarray(out + 0.5 * self.resistance * outflow)

    def block(self, members: Ints) -> Floats:
        """`between` as a dense matrix, for some pores among themselves."""
        block = _pair_block(self.pores.places, self._normals, self._mean_square, members)
        block[np.diag_indices(len(members))] += 0.5 * self.resistance[members]
        return np.asarray(block)

    def pieces(self, largest: int) -> list[Ints]:
        """All pores in groups of neighbours, of at most this size."""
        return list(np.array_split(self._morton, max(1, -(-len(self) // largest))))

    def sinks(self, outflow: Floats) -> Sinks:
        """The pores with what each lets out."""
        return Sinks(self.pores.places, self._normals, self.pores.radius, outflow)

    def distance_columns(self, outflow: Floats) -> Floats:
        """Σ Q_j r/4π from each pore, averaged over the panels: (p,) -> (m,)."""
        panels = self._panels
        out = np.empty(len(panels))
        over_rows(
            _distance_pass, len(panels), 256,
            panels.centroids, panels.normals, panels.spread, self.pores.places, outflow / _FOUR_PI, out
        )  # fmt: skip
        return out


def assemble_pores(panels: Panels, is_window: NDArray[np.bool_], pores: CompactPores | None) -> PoreRows | None:
    """Rows and columns of compact pores, or None where there are none."""
    return None if pores is None or not len(pores) else PoreRows(panels, is_window, pores)
