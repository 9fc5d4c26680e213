"""Small pictures of many shapes: the time on the wall in one colour scale for all, and in a scale of its own."""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pyvista as pv
from matplotlib.figure import Figure
from matplotlib.image import imsave
from numpy.typing import NDArray

from bemescape.units import time_scale

from .overlay import Overlay
from .parts import Scene, add_lines, add_skin, line_mesh, look_from, new_plotter, paint_time, window_colours
from .pores import pore_discs
from .scales import INK, OUTLINE, ColourScale, map_colours, round_ticks, time_colours
from .shapes import border_edges, standard_view

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["colour_bar", "common_scale", "picture_width_um", "thumbnails"]

#: Above this ratio of the slowest shape to the fastest, a linear scale would leave the fast ones in one colour.
_WIDE = 20.0
#: A picture without a colour bar: the shape may fill nearly all of it.
_WHOLE_FRAME = (0.04, 0.06, 0.96, 0.94)


def common_scale(slowest_s: Sequence[float]) -> ColourScale:
    """One scale for shapes whose slowest places take these times: from 0, or logarithmic where they differ a lot."""
    high, low = max(slowest_s), min(slowest_s)
    factor, unit = time_scale(high)
    label = f"mean escape time ({unit}), all shapes"
    if high > _WIDE * low:
        return ColourScale(0.1 * low, high, factor, label, log=True, clipped=True)
    return ColourScale(0.0, high, factor, label)


def picture_width_um(result: EscapeResult, size: tuple[int, int]) -> float:
    """Width in µm of a picture of so many pixels that the shape just fills."""
    view = standard_view(result, "front")
    left, bottom, right, top = _WHOLE_FRAME
    across, along = float(np.ptp(result.vertices @ view.right)), float(np.ptp(result.vertices @ view.up))
    return max(across / (right - left), along / (top - bottom) * size[0] / size[1])


def thumbnails(
    result: EscapeResult,
    scales: Sequence[ColourScale | None],
    *,
    size: tuple[int, int] = (320, 240),
    slow: bool = False,
    width_um: float | None = None,
) -> list[bytes]:
    """PNG pictures of the wall, one for each scale; None stands for the scale of this result alone.

    Parameters
    ----------
    result : EscapeResult
        What to draw, seen along its shortest axis.
    scales : sequence of ColourScale or None
    size : (int, int)
        Pixels.
    slow : bool
        Outline the slow regions.
    width_um : float, optional
        Width of the picture in µm, so that shapes can be compared in size; by default the shape fills it.
    """
    scene = Scene(result)
    plotter = new_plotter(off_screen=True, size=size)
    try:
        skin = _with_parts(plotter, scene, slow=slow)
        look_from(plotter, result.vertices, standard_view(result, "front"), frame=_WHOLE_FRAME)
        if width_um is not None:
            plotter.camera.SetParallelScale(0.5 * width_um * size[1] / size[0])
        scene.overlay = Overlay(plotter, title="", size=0.05)
        pictures = []
        for scale in scales:
            if skin is not None:
                paint_time(skin, scale or time_colours(result))
                plotter.render()
            pictures.append(_png(plotter.screenshot(return_img=True)))
    finally:
        plotter.close()
    return pictures


def _with_parts(plotter: pv.Plotter, scene: Scene, *, slow: bool) -> pv.PolyData | None:
    """The skin of the wall, whose colours may be painted anew; windows and rims are put beside it."""
    result = scene.result
    opening = np.flatnonzero(result.panel_window >= 0)
    if len(opening):
        skin = scene.skin(opening)
        skin.cell_data["colour"] = window_colours(result, opening, density=False)
        add_skin(plotter, skin)
    pores = pore_discs(result, scene.size_um, shares=False)
    if pores.n_cells:
        add_skin(plotter, pores)
    add_lines(plotter, line_mesh(result.vertices[border_edges(result.faces, result.panel_window)]), INK, 1.5)
    if slow:
        add_lines(plotter, line_mesh(scene.slow_outline), OUTLINE, 2.5)
    wall = np.flatnonzero(result.panel_window < 0)
    if not len(wall):
        return None
    skin = scene.skin(wall)
    skin.point_data["time"] = scene.corner_times_s[wall].ravel()
    paint_time(skin, time_colours(result))
    add_skin(plotter, skin)
    return skin


def _png(pixels: NDArray[np.uint8]) -> bytes:
    stream = io.BytesIO()
    imsave(stream, pixels, format="png")
    return stream.getvalue()


def colour_bar(scale: ColourScale) -> Figure:
    """A lying colour bar with its ticks, to stand above pictures that share it."""
    figure = Figure(figsize=(5.2, 0.75), dpi=150, layout="constrained")
    axes = figure.subplots()
    low, high = scale.low / scale.factor, scale.high / scale.factor
    steps = np.geomspace(scale.low, scale.high, 256) if scale.log else np.linspace(scale.low, scale.high, 256)
    axes.imshow(map_colours(scale, steps)[None], aspect="auto", extent=(0.0, 1.0, 0.0, 1.0))
    ticks = np.array(round_ticks(low, high, log=scale.log))
    axes.set_xticks(scale.position(ticks * scale.factor), [scale.text(tick * scale.factor) for tick in ticks])
    axes.set_yticks([])
    axes.set_xlabel(scale.label, fontsize=8)
    axes.tick_params(labelsize=8)
    return figure
