"""Compact pores as coloured discs on the wall: they have no panels that could be painted."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pyvista as pv
from numpy.typing import NDArray

from .scales import DENSITY_MAP_NAME, WINDOW, ColourScale, map_colours

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["pore_discs", "pore_shares", "share_scale"]

Floats = NDArray[np.float64]

#: A pore is drawn at least this large, in lengths of the bounding box's diagonal: real ones would be lost.
_SMALLEST = 0.004
#: And lifted by this much off the wall, so that it wins against the panels it lies in.
_LIFT = 1e-3
_CORNERS = 20


def pore_shares(result: EscapeResult) -> Floats:
    """Share (p,) of each compact pore."""
    if result.pores is None:
        return np.zeros(0)
    return np.array([result.windows[number].share for number in result.pores.window])


def share_scale(result: EscapeResult) -> ColourScale:
    """Linear scale of the shares of compact pores, in per cent of all exits."""
    shares = pore_shares(result)
    low, high = float(shares.min()), float(shares.max())
    if high - low < 1e-3 * high:  # all alike
        low, high = 0.9 * high, 1.1 * high
    return ColourScale(low, high, 0.01, "share of exits (%)", map_name=DENSITY_MAP_NAME)


def pore_discs(result: EscapeResult, size_um: float, *, shares: bool) -> pv.PolyData:
    """Discs (one cell a pore) coloured by share, or all in the flat colour of windows.

    Cell array `panel` holds the panel under each pore, as on the skin of the wall; `window` its number.
    """
    pores = result.pores
    if pores is None:
        return pv.PolyData()
    normal = pores.normal
    other = np.eye(3)[np.abs(normal).argmin(axis=1)]
    first = np.cross(normal, other)
    first /= np.linalg.norm(first, axis=1)[:, None]
    second = np.cross(normal, first)
    angle = 2.0 * np.pi * np.arange(_CORNERS) / _CORNERS
    radius = np.maximum(pores.radius_um, _SMALLEST * size_um)[:, None, None]
    around = np.cos(angle)[:, None] * first[:, None] + np.sin(angle)[:, None] * second[:, None]
    corners = (pores.centre_um + _LIFT * size_um * normal)[:, None] + radius * around
    count = len(pores)
    cells = np.column_stack([np.full(count, _CORNERS), np.arange(count * _CORNERS).reshape(count, -1)])
    mesh = pv.PolyData(corners.reshape(-1, 3), faces=cells.ravel())
    flat = np.tile(np.array(pv.Color(WINDOW).int_rgb, dtype=np.uint8), (count, 1))
    mesh.cell_data["colour"] = map_colours(share_scale(result), pore_shares(result)) if shares else flat
    mesh.cell_data["panel"] = pores.panel
    mesh.cell_data["window"] = pores.window
    return mesh
