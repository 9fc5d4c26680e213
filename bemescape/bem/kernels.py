"""Closed-form integrals over one flat triangle: scalars in, scalars out, nothing checked.

Corners are given relative to the target, in µm. The results lack the factor 1/4π of Green's function, which the
callers apply once.
"""

from __future__ import annotations

import math

import numpy as np

from bemescape.compiled import njit

__all__ = [
    "panel_integrals",
    "self_mean_inverse_distance",
    "spread_dipole",
    "spread_distance",
    "spread_inverse",
    "spread_lifted",
    "spread_lifted_distance",
]

_TINY = 1e-300

# Single-precision constants keep a single-precision loop in single precision, and are exact in a double one.
_HALF, _ONE, _TWO, _THREE, _SIX, _TWELVE, _FIFTEEN = (np.float32(x) for x in (0.5, 1, 2, 3, 6, 12, 15))


@njit(cache=True, inline="always", error_model="numpy")
def _edge_log(length, from_start, from_end):
    """ln((R₁ + R₂ + L)/(R₁ + R₂ − L)): the potential of a unit line charge on an edge of length L.

    On the edge itself R₁ + R₂ − L is rounding noise of either sign; the logarithm is multiplied by the distance to
    the edge there, so any small positive number serves.
    """
    total = from_start + from_end
    return math.log((total + length) / (max(total - length, 1e-15 * total) + _TINY))


@njit(cache=True, error_model="numpy")
def panel_integrals(ax, ay, az, bx, by, bz, cx, cy, cz, nx, ny, nz):
    """∫ 1/r dS and the signed solid angle Ω = ∫ h/r³ dS of a flat triangle, seen from the origin.

    h = y·n is the height of the panel's plane above the target: Ω is positive when the target lies behind the
    panel (on the side away from the normal (nx, ny, nz)). In the plane of the panel Ω is 0: on the panel itself
    that is the mean of the two one-sided limits ±2π, which is what a boundary integral wants. On an edge or a
    corner the potential is still finite and correct to rounding.

    Sources: Ω, van Oosterom & Strackee (1983), doi:10.1109/TBME.1983.325207; ∫ 1/r = Σ t·ln(…) − hΩ over the
    edges, with t the in-plane distance to the edge, Wilton et al. (1984), doi:10.1109/TAP.1984.1143304.
    """
    ra = math.sqrt(ax * ax + ay * ay + az * az)
    rb = math.sqrt(bx * bx + by * by + bz * bz)
    rc = math.sqrt(cx * cx + cy * cy + cz * cz)
    height = ax * nx + ay * ny + az * nz

    triple = ax * (by * cz - bz * cy) + ay * (bz * cx - bx * cz) + az * (bx * cy - by * cx)
    ab = ax * bx + ay * by + az * bz
    bc = bx * cx + by * cy + bz * cz
    ca = cx * ax + cy * ay + cz * az
    below = ra * rb * rc + ab * rc + bc * ra + ca * rb
    # In the plane, `triple` is rounding noise around 0 and would pick one of the limits ±2π at random.
    size = ra * rb * rc
    angle = 2.0 * math.atan2(triple, below) if abs(triple) > 1e-14 * size else 0.0

    potential = -height * angle

    ex, ey, ez = bx - ax, by - ay, bz - az
    length = math.sqrt(ex * ex + ey * ey + ez * ez)
    t = (ax * (ey * nz - ez * ny) + ay * (ez * nx - ex * nz) + az * (ex * ny - ey * nx)) / length
    potential += t * _edge_log(length, ra, rb)

    ex, ey, ez = cx - bx, cy - by, cz - bz
    length = math.sqrt(ex * ex + ey * ey + ez * ez)
    t = (bx * (ey * nz - ez * ny) + by * (ez * nx - ex * nz) + bz * (ex * ny - ey * nx)) / length
    potential += t * _edge_log(length, rb, rc)

    ex, ey, ez = ax - cx, ay - cy, az - cz
    length = math.sqrt(ex * ex + ey * ey + ez * ez)
    t = (cx * (ey * nz - ez * ny) + cy * (ez * nx - ex * nz) + cz * (ex * ny - ey * nx)) / length
    potential += t * _edge_log(length, rc, ra)
    return potential, angle


@njit(cache=True, error_model="numpy")
def self_mean_inverse_distance(a, b, c, area):
    """(1/A) ∫∫ 1/|x−y| dS dS over one triangle with edge lengths a, b, c: A·(−4/3) Σ ln(1 − l/p)/l.

    p is half the perimeter. Source: Eibert & Hansen (1995), doi:10.1109/8.475946, the constant-constant case.
    """
    p = 0.5 * (a + b + c)
    total = math.log(1.0 - a / p) / a + math.log(1.0 - b / p) / b + math.log(1.0 - c / p) / c
    return -4.0 / 3.0 * area * total


@njit(cache=True, inline="always", error_model="numpy")
def spread_inverse(ht, hs, spread_target, spread_source, inverse):
    """Mean of 1/|x − y| over two panels, to second order in their size, from their centroids.

    With d from source to target centroid, r = |d|, hs = n_source·d and ht = n_target·d. `inverse` is 1/ρ with
    ρ² = r² + spread_source: that keeps close pairs, which the near field replaces, at the size of their neighbours,
    so that nothing is lost when single-precision sums are corrected by them; its own effect at a distance,
    −spread_source/(2r³), is put back here.

    A panel's second moment is taken as isotropic in its plane, spread·(I − n nᵀ); since 1/r is harmonic its
    in-plane Laplacian is −∂²/∂n², hence spread/(2r³)·(1 − 3h²/r²) for each panel. Without it every neighbour in a
    flat stretch of wall is underrated, and the error falls only with the panel size, not with its square.
    """
    inverse2 = inverse * inverse
    return inverse + _HALF * inverse2 * inverse * (
        spread_target * (_ONE - _THREE * ht * ht * inverse2) + spread_source * (_TWO - _THREE * hs * hs * inverse2)
    )


@njit(cache=True, inline="always", error_model="numpy")
def spread_lifted(ht, hs, tilt, spread_target, spread_source, inverse):
    """Mean of n_source·(x − y)/|x − y| over two panels, as `spread_inverse`; tilt = n_target·n_source.

    Over the source the height is constant; over the target ½ spread (Δ − ∂²/∂n_target²) acts on hs/r, which is
    not harmonic: Δ(hs/r) = −2 hs/r³.
    """
    inverse2 = inverse * inverse
    return hs * inverse + _HALF * inverse2 * inverse * (
        spread_target * (_TWO * tilt * ht - hs - _THREE * hs * ht * ht * inverse2)
        + spread_source * hs * (_TWO - _THREE * hs * hs * inverse2)
    )


@njit(cache=True, inline="always", error_model="numpy")
def spread_dipole(ht, hs, tilt, spread_target, spread_source, inverse):
    """Mean of n_source·(x − y)/|x − y|³ over two panels, as `spread_inverse`: harmonic in x and in y."""
    inverse2 = inverse * inverse
    return (inverse2 * inverse) * (
        hs
        + _HALF
        * inverse2
        * (
            spread_source * hs * (_TWELVE - _FIFTEEN * hs * hs * inverse2)
            + spread_target * (_SIX * tilt * ht + _THREE * hs - _FIFTEEN * hs * ht * ht * inverse2)
        )
    )


@njit(cache=True, inline="always", error_model="numpy")
def spread_distance(ht, hs, spread_target, spread_source, inverse):
    """Mean of |x − y| over two panels, as `spread_inverse`; in a plane at height h, Δr = 1/r + h²/r³.

    What ρ adds to r, spread_source/(2r), is the first part of the source's own term.
    """
    inverse2 = inverse * inverse
    return _ONE / inverse + _HALF * inverse * (
        spread_target * (_ONE + ht * ht * inverse2) + spread_source * hs * hs * inverse2
    )


@njit(cache=True, inline="always", error_model="numpy")
def spread_lifted_distance(ht, hs, tilt, spread_target, spread_source, inverse):
    """Mean of n_source·(x − y) |x − y| over two panels, as `spread_lifted`; in space Δ(hs r) = 4 hs/r."""
    inverse2 = inverse * inverse
    return hs / inverse + _HALF * inverse * (
        spread_target * (_THREE * hs - _TWO * tilt * ht + hs * ht * ht * inverse2)
        + spread_source * hs * hs * hs * inverse2
    )
