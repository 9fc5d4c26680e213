"""Close-ups of windows: where molecules leave."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pyvista as pv
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from bemescape.units import format_length

from .overlay import Overlay, safe_text
from .parts import (
    NO_SHADING,
    Scene,
    add_lines,
    add_skin,
    line_mesh,
    look_from,
    middle_of,
    new_plotter,
    window_colours,
)
from .pores import pore_discs, pore_shares, share_scale
from .scales import INK, ColourScale, density_scale
from .shapes import View, border_edges, standard_view

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["windows_scene"]

Floats = NDArray[np.float64]

_MOST_CLOSE_UPS = 6


def windows_scene(
    result: EscapeResult,
    *,
    size: tuple[int, int] = (1600, 1200),
    off_screen: bool = True,
    scene: Scene | None = None,
) -> pv.Plotter:
    """Close-ups of the windows with the largest shares (at most six), coloured by exit density.

    Each is seen straight on, with the wall around it; one logarithmic scale serves all. Compact pores have no panels:
    they share one picture of the whole wall, and are coloured by their shares.

    Parameters
    ----------
    result : EscapeResult
        What to draw.
    size : (int, int)
        Width and height in pixels.
    off_screen : bool
        Draw without a window.
    scene : Scene or None
        Arrays from an earlier picture of the same result, to save the work.

    Returns
    -------
    pyvista.Plotter
        To be closed by the caller.
    """
    scene = scene or Scene(result)
    present = np.unique(result.panel_window[result.panel_window >= 0])
    with_pores = 0 if result.pores is None else 1
    order = sorted(present.tolist(), key=lambda number: -result.windows[number].share)[: _MOST_CLOSE_UPS - with_pores]
    count = len(order) + with_pores
    columns = min(3, max(1, count)) if count != 4 else 2
    rows = max(1, -(-count // columns))
    plotter = new_plotter(off_screen=off_screen, size=size, shape=(rows, columns))
    scale = density_scale(result)
    for place, number in enumerate(order):
        plotter.subplot(place // columns, place % columns)
        _close_up(plotter, scene, number, scale, 0.021 if rows == 1 else 0.032)
    if with_pores:
        plotter.subplot(len(order) // columns, len(order) % columns)
        _all_pores(plotter, scene, 0.021 if rows == 1 else 0.032)
    return plotter


def _all_pores(plotter: pv.Plotter, scene: Scene, text_size: float) -> None:
    """The whole wall in grey with every compact pore in the colour of its share."""
    result = scene.result
    wall = scene.skin(np.arange(len(result.faces)))
    wall.cell_data["colour"] = np.full((wall.n_cells, 3), 232, dtype=np.uint8)
    add_skin(plotter, wall)
    add_skin(plotter, pore_discs(result, scene.size_um, shares=True), NO_SHADING)
    width, height = plotter.renderer.GetSize()
    look_from(plotter, result.vertices, standard_view(result, "front"), narrower=0.09 * height / width)
    shares = pore_shares(result)
    Overlay(
        plotter,
        title=f"{len(shares)} compact pore{'s' * (len(shares) > 1)}: {100.0 * shares.sum():.4g} % of exits",
        note=f"one takes {100.0 * shares.min():.3g} to {100.0 * shares.max():.3g} % · discs are drawn large enough to "
        "be seen",
        scale=share_scale(result),
        size=text_size,
    )


def _close_up(plotter: pv.Plotter, scene: Scene, number: int, scale: ColourScale, text_size: float) -> None:
    result = scene.result
    window = result.windows[number]
    panels = np.flatnonzero(result.panel_window == number)
    middle, outward = middle_of(result, panels)
    facing = result.panel_normals[panels] @ outward
    corners = result.vertices[result.faces[panels]].reshape(-1, 3)
    if np.average(facing, weights=result.panel_areas_um2[panels]) > 0.3:
        # Up is the shape's longest axis as far as it lies in the picture.
        view = _straight_on(result, outward)
        reach = 1.25 * float(np.linalg.norm(corners - middle, axis=1).max())
    else:
        # A window that wraps around the shape has no straight view.
        view, reach = standard_view(result, "front"), np.inf
    around = _connected_within(result, panels, middle, reach)
    opening = scene.skin(around[result.panel_window[around] == number])
    opening.cell_data["colour"] = window_colours(result, opening.cell_data["panel"], density=True)
    add_skin(plotter, opening, NO_SHADING)
    beside = around[result.panel_window[around] != number]
    if len(beside):
        rest = scene.skin(beside)
        rest.cell_data["colour"] = np.full((rest.n_cells, 3), 232, dtype=np.uint8)
        add_skin(plotter, _within(rest, middle, reach))
    rims = border_edges(result.faces, (result.panel_window == number).astype(np.int64))
    add_lines(plotter, line_mesh(result.vertices[rims]), INK, 3.0)
    framed = corners
    if np.isfinite(reach):
        framed = middle + reach * np.stack([view.up, -view.up, view.right, -view.right])
    width, height = plotter.renderer.GetSize()
    look_from(plotter, framed, view, narrower=0.09 * height / width)
    radius = (window.area_um2 / np.pi) ** 0.5
    Overlay(
        plotter,
        title=f"{safe_text(window.name, 28)}: {100.0 * window.share:.3g} % of exits",
        note=f"area {window.area_um2:.3g} µm², as a disc of radius {format_length(radius)}",
        scale=scale,
        size=text_size,
    )


def _within(mesh: pv.PolyData, middle: Floats, reach: float) -> pv.PolyData:
    """The part of `mesh` within `reach` of `middle`, with a clean edge."""
    if not np.isfinite(reach) or not mesh.n_points:
        return mesh
    mesh.point_data["distance"] = np.linalg.norm(mesh.points - middle, axis=1)
    return mesh.clip_scalar(scalars="distance", value=reach)


def _straight_on(result: EscapeResult, outward: Floats) -> View:
    front = standard_view(result, "front")
    for candidate in (front.up, front.right, front.towards):
        up = candidate - (candidate @ outward) * outward
        if np.linalg.norm(up) > 0.5:
            return View(outward, up / np.linalg.norm(up))
    return front


def _connected_within(
    result: EscapeResult, seeds: NDArray[np.int64], middle: Floats, reach: float
) -> NDArray[np.int64]:
    """Panels within `reach` of `middle` that hang together with `seeds`; other sheets nearby are left out."""
    near = (np.linalg.norm(result.vertices - middle, axis=1) <= reach)[result.faces].any(axis=1)
    near[seeds] = True
    chosen = np.flatnonzero(near)
    faces = result.faces[chosen]
    count = len(result.vertices)
    ends = faces[:, [0, 1, 1, 2]].reshape(-1, 2)
    graph = coo_matrix((np.ones(len(ends), dtype=np.int8), (ends[:, 0], ends[:, 1])), shape=(count, count))
    _, part = connected_components(graph, directed=False)
    wanted = np.isin(part[faces[:, 0]], np.unique(part[result.faces[seeds, 0]]))
    return chosen[wanted]
