"""Volume averages from boundary values alone, for D = 1."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.panels import Panels
from bemescape.bem.sinks import Sinks

__all__ = ["enclosed_volume", "volume_integral"]

Floats = NDArray[np.float64]


def enclosed_volume(panels: Panels) -> float:
    """Volume in µm³, by the divergence theorem."""
    centre = panels.centroids.mean(axis=0)
    heights = np.einsum("ij,ij->i", panels.centroids - centre, panels.normals)
    return float((panels.areas * heights).sum() / 3.0)


def volume_integral(panels: Panels, u: Floats, q: Floats, source: float, sinks: Sinks | None = None) -> float:
    """∫_Ω u for Δu = −source, from u and q = ∂u/∂n (m,) on the panels, and the outflow of compact pores.

    Green's identity with φ = |x|²/6, Δφ = 1: ∫u = ∮(u ∂φ/∂n − φ q) − source·∫φ, with the origin at the middle of
    the panels, and ∫|x|² = (1/5)∮|x|² x·n. On a flat panel x·n is constant and |x|² is integrated exactly by the
    three-point rule, so the only errors are those of u and q. A pore's u is that of a point on the wall, whose integral
    over the wall is that of the disc.
    """
    centre = panels.centroids.mean(axis=0)
    heights = np.einsum("ij,ij->i", panels.centroids - centre, panels.normals)
    squares = ((panels.three_points - centre) ** 2).sum(axis=2).mean(axis=1)
    integral_phi = float((panels.areas * squares * heights).sum() / 30.0)
    boundary = panels.areas * (u * heights / 3.0 - q * squares / 6.0)
    of_pores = 0.0 if sinks is None else sinks.power(centre, 2) / 6.0
    return float(boundary.sum() + of_pores - source * integral_phi)
