"""One round pore in a wall: how its flux spreads over it, for any permeability.

With lengths in pore radii and μ = κa/D, the flux density σ (total 1) of a disc in a flat wall at one potential solves

    σ/μ + ∫ σ(y)/(2π|x − y|) dS = potential,

and the potential is the pore's resistance: ¼ for μ = ∞, where σ = 1/(2π√(1 − s²)), and 1/(πμ) + 8/(3π²) for μ → 0,
where σ is uniform. The sum ¼ + 1/(πμ) of both parts is up to 3.3 % too low in between.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import eval_legendre, gammaln, gammasgn, roots_legendre

__all__ = ["DiscFlux", "disc_flux"]

Floats = NDArray[np.float64]

#: Polynomials that carry the flux density. The conductance converges from below, at μ = ∞ as their number^(−2).
_POLYNOMIALS = 100


@dataclass(frozen=True)
class DiscFlux:
    """What a wall needs to know of the flux over a disc of radius 1.

    Attributes
    ----------
    resistance : float
        Potential over total flux.
    mean_square : float
        Mean of s², the squared distance from the middle, over the flux: from ½ (uniform) to ⅔ (absorbing).
    mean_log : float
        Mean of ln|x − y| over two places of the flux: from −¼ (uniform) to 2 ln 2 − 3/2 (absorbing).
    """

    resistance: float
    mean_square: float
    mean_log: float


#: σ = 1/(2π√(1 − s²)), of which 1 − √(1 − s²) flows within s: ⟨s²⟩ = ⅔ and ⟨ln⟩ = −∫(1 − √(1 − s²))² ds/s.
_ABSORBING = DiscFlux(0.25, 2.0 / 3.0, 2.0 * math.log(2.0) - 1.5)


@lru_cache(maxsize=256)
def disc_flux(permeability: float) -> DiscFlux:
    """The flux over a disc with μ = κa/D > 0, infinite for an absorbing one.

    Galerkin with the radial polynomials P_n(2s² − 1), n < 100: their Hankel transform is (−1)ⁿ J_{2n+1}(k)/k (Noll
    1976, J. Opt. Soc. Am. 66:207, eq. 9), and that of 1/(2πr) is 1/k, so that the matrix is a Weber–Schafheitlin
    integral ∫ J J /k² dk, in closed form (DLMF 10.22.57).
    """
    if math.isinf(permeability):
        return _ABSORBING
    degree = np.arange(_POLYNOMIALS)
    mass = 1.0 / (2.0 * (2.0 * degree + 1.0))
    matrix = _potential_matrix() + np.diag(mass / permeability)
    load = np.zeros(_POLYNOMIALS)
    load[0] = 0.5
    weights = np.linalg.solve(matrix, load)
    total = math.pi * weights[0]  # 2π ∫ σ s ds, where only P₀ counts
    # s² = (P₁ + 1)/2.
    mean_square = 0.5 + weights[1] / (6.0 * weights[0])
    nodes, node_weights = roots_legendre(2 * _POLYNOMIALS)
    t = 0.5 * (nodes + 1.0)  # t = s²
    # Part of the flux within s: ∫ P_n(2t − 1) dt = (P_{n+1} − P_{n−1})(2t − 1) / (2 (2n + 1)).
    x = 2.0 * t - 1.0
    within = weights[0] * t
    for n in degree[1:]:
        within += weights[n] * (eval_legendre(n + 1, x) - eval_legendre(n - 1, x)) / (2.0 * (2.0 * n + 1.0))
    within /= weights[0]
    # ⟨ln|x − y|⟩ = ⟨ln max(s, s')⟩ = −∫ within² ds/s, and ds/s = dt/(2t).
    mean_log = -float((0.5 * node_weights * within**2 / (2.0 * t)).sum())
    return DiscFlux(1.0 / total, float(mean_square), mean_log)


@lru_cache(maxsize=1)
def _potential_matrix() -> Floats:
    """(−1)^{m+n} ∫₀^∞ J_{2m+1}(k) J_{2n+1}(k) k⁻² dk."""
    m, n = np.meshgrid(np.arange(_POLYNOMIALS), np.arange(_POLYNOMIALS), indexing="ij")
    difference, total = (m - n).astype(float), (m + n).astype(float)
    # DLMF 10.22.57 with μ = 2m + 1, ν = 2n + 1, λ = 2; Γ(2) = 1.
    size = gammaln(total + 0.5) - gammaln(1.5 + difference) - gammaln(1.5 - difference) - gammaln(total + 2.5)
    sign = gammasgn(1.5 + difference) * gammasgn(1.5 - difference) * (-1.0) ** total
    return np.asarray(sign * np.exp(size) / 4.0)
