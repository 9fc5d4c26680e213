"""Where the wall's panels are too coarse for the solution on them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["coarse_panels"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def coarse_panels(
    vertices: Floats, faces: Ints, u: Floats, is_window: NDArray[np.bool_], *, part: float = 0.7
) -> NDArray[np.bool_]:
    """Wall panels (m,) that carry `part` of the error of taking u as constant on each panel.

    The mean time is an energy (∫|∇u|² = ∫u for Δu = −1), so its error is the square of the energy norm of the
    error of u: on a boundary, about panel size × area × |∇u|². The size that counts is the panel's extent along ∇u,
    so that size × |∇u| is the range of u over its corners: of two equally long slivers, the one that u changes
    along is coarse and the one that it changes across is not. Panels are taken from the largest down (bulk chasing,
    Dörfler 1996, doi:10.1137/0733054).
    """
    corners = vertices[faces]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    double = np.linalg.norm(cross, axis=1)
    area, normal = 0.5 * double, cross / double[:, None]
    weight = np.repeat(area, 3)
    total = np.bincount(faces.ravel(), weights=weight, minlength=len(vertices))
    weighted = np.bincount(faces.ravel(), weights=weight * np.repeat(u, 3), minlength=len(vertices))
    at_vertex = weighted / np.maximum(total, 1e-300)
    # Gradient of the linear function through the three corner values.
    opposite = corners[:, [2, 0, 1]] - corners[:, [1, 2, 0]]
    at_corners = at_vertex[faces]
    gradient = np.einsum("ik,ikx->ix", at_corners, np.cross(normal[:, None], opposite)) / double[:, None]
    share = area * np.linalg.norm(gradient, axis=1) * np.ptp(at_corners, axis=1)
    share[is_window] = 0.0
    order = np.argsort(-share)
    covered = np.cumsum(share[order])
    out = np.zeros(len(faces), bool)
    out[order[: int(np.searchsorted(covered, part * covered[-1])) + 1]] = covered[-1] > 0.0
    return out & ~is_window
