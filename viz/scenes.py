"""Result → pyvista scene: the time on the wall, and a cut-away with the time inside.

Every function hands out a `pyvista.Plotter` that is ready to be shown or photographed; the projection is
parallel, so that the scale bar holds everywhere.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import numpy as np
import pyvista as pv
from numpy.typing import NDArray

from bemescape.units import format_time

from .cutaway import CutPlane, cut_plane, section
from .overlay import Label, Overlay, safe_text
from .parts import (
    MOST_SLOW_PATHS,
    ScaleMode,
    Scene,
    add_lines,
    headline,
    line_mesh,
    look_from,
    middle_of,
    new_plotter,
    paint_time,
    present,
    scene_parts,
)
from .scales import INK, OUTLINE, ColourScale
from .shapes import ViewName, standard_view

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["add_section", "cutaway_scene", "wall_scene"]

Floats = NDArray[np.float64]

# With more labels than these nobody would see the shape.
_MOST_WINDOW_LABELS = 12


def wall_scene(
    result: EscapeResult,
    view: ViewName = "front",
    *,
    mode: ScaleMode = "linear",
    windows: Literal["flat", "density"] = "flat",
    slow: bool = True,
    size: tuple[int, int] = (1600, 1200),
    off_screen: bool = True,
    scene: Scene | None = None,
    corner: str = "",
) -> pv.Plotter:
    """The mean escape time on the wall, seen along a principal axis of the shape.

    Parameters
    ----------
    result : EscapeResult
        What to draw.
    view : {"front", "side", "top"}
        Along the shortest, the longest or the middle principal axis.
    mode : {"linear", "log"}
        Colour scale.
    windows : {"flat", "density"}
        Windows in one flat colour, or coloured by exit density (logarithmic).
    slow : bool
        Outline slow regions, with a dashed path from each to its nearest window.
    size : (int, int)
        Width and height in pixels.
    off_screen : bool
        Draw without a window.
    scene : Scene or None
        Arrays from an earlier picture of the same result, to save the work.
    corner : str
        Lines written in the lower right corner.

    Returns
    -------
    pyvista.Plotter
        To be closed by the caller.
    """
    scene = scene or Scene(result)
    plotter = new_plotter(off_screen=off_screen, size=size)
    scale = scene_parts(plotter, scene, mode=mode, windows=windows, slow=slow)
    look_from(plotter, result.vertices, standard_view(result, view))
    scene.overlay = Overlay(
        plotter,
        title=headline(result),
        note=f"{view} view · {_legend(scene, slow=slow)}",
        scale=scale,
        labels=_labels(scene, slow=slow),
        hidden=scene.hidden,
        corner=corner,
    )
    return plotter


def _legend(scene: Scene, *, slow: bool) -> str:
    count = len(scene.result.windows)
    parts = [f"light blue: {'window' if count == 1 else f'{count} windows'}"]
    if slow and len(list(scene.slow)):
        parts.append(f"red outline: slowest {100.0 * scene.slow.wall_fraction:.3g} % of the wall")
    return " · ".join(parts)


def cutaway_scene(
    result: EscapeResult,
    *,
    mode: ScaleMode = "linear",
    size: tuple[int, int] = (1600, 1200),
    off_screen: bool = True,
    max_points: int = 6000,
    scene: Scene | None = None,
) -> pv.Plotter:
    """The shape cut open, with the mean escape time inside on the section, in the colours of the wall.

    The plane holds the middle of the shape, its longest axis and, as far as it can, the window with the
    largest share.

    Parameters
    ----------
    result : EscapeResult
        What to draw.
    mode : {"linear", "log"}
        Colour scale.
    size : (int, int)
        Width and height in pixels.
    off_screen : bool
        Draw without a window.
    max_points : int
        Bound on the points of the section at which the field is evaluated.
    scene : Scene or None
        Arrays from an earlier picture of the same result, to save the work.

    Returns
    -------
    pyvista.Plotter
        To be closed by the caller.
    """
    scene = scene or Scene(result)
    plane = cut_plane(result)
    plotter = new_plotter(off_screen=off_screen, size=size)
    scale = scene_parts(plotter, scene, mode=mode, slow=False, keep=lambda mesh: _clipped(mesh, plane))
    add_section(plotter, scene, plane, scale, max_points)
    look_from(plotter, result.vertices, plane.view)
    scene.overlay = Overlay(
        plotter,
        title=headline(result),
        note="cut-away: time inside, on a plane through the middle · thin lines: equal time · light blue: windows",
        scale=scale,
        labels=_cut_labels(scene, plane),
    )
    return plotter


def _clipped(mesh: pv.PolyData, plane: CutPlane) -> pv.PolyData:
    if not mesh.n_points:
        return mesh
    return mesh.clip(normal=plane.normal, origin=plane.origin, invert=True)


def _cut_labels(scene: Scene, plane: CutPlane) -> list[Label]:
    """Labels of the windows that the plane cuts, at what is left of them."""
    result = scene.result
    height = (result.panel_centroids - plane.origin) @ plane.normal
    labels = []
    for number, window in enumerate(result.windows):
        kept = np.flatnonzero((result.panel_window == number) & (height < 0.0))
        if len(kept) and (height[result.panel_window == number] >= 0.0).any():
            edge = kept[height[kept] > -0.02 * scene.size_um]
            if len(edge):
                place, _ = middle_of(result, edge)
                labels.append(Label(safe_text(window.name, 24), place))
    return labels if len(labels) <= _MOST_WINDOW_LABELS else []


def add_section(plotter: pv.Plotter, scene: Scene, plane: CutPlane, scale: ColourScale, max_points: int) -> None:
    """Put the section with `plane`, its border and its lines of equal time into `plotter`."""
    cut = section(scene.result, plane, scene.corner_times_s, max_points=max_points)
    scene.actors["section"] = []
    if cut is None:
        return
    cells = np.column_stack([np.full(len(cut.faces), 3), cut.faces])
    mesh = pv.PolyData(cut.points, faces=cells.ravel())
    mesh.point_data["time"] = cut.times_s
    paint_time(mesh, scale)
    # Unlit: the section's colours are exactly those of the bar.
    scene.actors["section"].append(
        plotter.add_mesh(
            mesh,
            scalars="position",
            cmap=scale.map_name,
            clim=(0.0, 1.0),
            interpolate_before_map=True,
            lighting=False,
            show_scalar_bar=False,
            reset_camera=False,
        )
    )
    ticks = [tick for tick in scale.ticks if scale.low < tick < scale.high]
    levels = mesh.contour(ticks, scalars="time") if ticks else pv.PolyData()
    # Just in front of the section, which would swallow half of each line.
    lift = 1e-3 * scene.size_um * plane.normal
    border = line_mesh(cut.edges + lift)
    if levels.n_points:
        levels.points = levels.points + lift
    scene.actors["section"] += present(add_lines(plotter, levels, "#ffffff", 1.2))
    scene.actors["section"] += present(add_lines(plotter, border, INK, 2.5))


def _labels(scene: Scene, *, slow: bool) -> list[Label]:
    result = scene.result
    labels = []
    if len(result.windows) <= _MOST_WINDOW_LABELS:
        for number, window in enumerate(result.windows):
            panels = np.flatnonzero(result.panel_window == number)
            if len(panels):
                place, _ = middle_of(result, panels)
                labels.append(Label(safe_text(window.name, 24), place))
    if slow:
        for number, region in enumerate(list(scene.slow)[:MOST_SLOW_PATHS], start=1):
            text = f"slow {number}: {format_time(region.mean_time_s, 3)}"
            centre = np.asarray(region.centre_um, dtype=np.float64)
            labels.append(Label(text, centre, "slow", OUTLINE))
    return labels
