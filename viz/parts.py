"""The parts of a scene: skin of the wall and of windows, rims, outlines, the camera; arrays they share."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pyvista as pv
from numpy.typing import NDArray
from vtkmodules.vtkCommonCore import vtkLogger, vtkPoints
from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator

from bemescape.units import format_time

from .overlay import SHAPE_FRAME, Overlay, safe_text
from .pores import pore_discs
from .scales import (
    BACKGROUND,
    INK,
    MAP_NAME,
    OUTLINE,
    WINDOW,
    ColourScale,
    density_scale,
    map_colours,
    time_colours,
)
from .shapes import View, border_edges, corner_normals, corner_values, crossings, dashes

if TYPE_CHECKING:
    from bemescape.results.measures import SlowRegions
    from bemescape.results.result import EscapeResult

__all__ = [
    "MOST_SLOW_PATHS",
    "NO_SHADING",
    "ScaleMode",
    "Scene",
    "add_lines",
    "add_skin",
    "display_missing",
    "headline",
    "line_mesh",
    "look_from",
    "middle_of",
    "new_plotter",
    "paint_time",
    "present",
    "scene_parts",
    "window_colours",
]

Floats = NDArray[np.float64]
ScaleMode = Literal["linear", "log"]

#: Paths of more slow regions than these would hide the shape; all are in the table of the report.
MOST_SLOW_PATHS = 3
# Colours have to be read against the bar, so shading may only darken them a little.
_LIGHT = {"ambient": 0.55, "diffuse": 0.48, "specular": 0.0}
NO_SHADING = {"ambient": 1.0, "diffuse": 0.0, "specular": 0.0}
_PLAIN: dict[str, Any] = {
    "smooth_shading": False,
    "show_scalar_bar": False,
    "reset_camera": False,
    "copy_mesh": False,
}


@dataclass
class Scene:
    """Arrays of a result that several pictures share, and the parts put into one plotter.

    Attributes
    ----------
    result : EscapeResult
        What is drawn.
    actors : dict of str to list
        Parts in the plotter: "wall", "windows", "rims", "slow", "section".
    """

    result: EscapeResult
    actors: dict[str, list[Any]] = field(default_factory=dict)
    overlay: Overlay | None = None

    @cached_property
    def corner_times_s(self) -> Floats:
        """Times (m, 3) at the corners of panels, wall and windows apart."""
        result = self.result
        return corner_values(
            result.faces, result.panel_time_s, result.panel_areas_um2, np.minimum(result.panel_window, 0)
        )

    @cached_property
    def corner_normals(self) -> Floats:
        """Shading normals (m, 3, 3)."""
        return corner_normals(self.result.vertices, self.result.faces, self.result.panel_normals)

    @cached_property
    def slow(self) -> SlowRegions:
        """Slow regions at the default level."""
        return self.result.slow_regions()

    @cached_property
    def slow_outline(self) -> Floats:
        """Segments (k, 2, 3) around the slow regions.

        The line of equal time at their level, on the panels of the regions and those that touch them: edges
        of panels would zigzag. Regions of so few panels that no such line crosses them keep the edges.
        """
        result, region = self.result, np.where(self.result.panel_window < 0, self.slow.panel_region, -1)
        touched = np.zeros(len(result.vertices), dtype=bool)
        touched[result.faces[region >= 0]] = True
        near = np.flatnonzero(touched[result.faces].any(axis=1) & (result.panel_window < 0))
        segments, _, _ = crossings(result.vertices[result.faces[near]], self.corner_times_s[near] - self.slow.level_s)
        if len(segments):
            return segments
        edges: Floats = result.vertices[border_edges(result.faces, region)]
        return edges

    @cached_property
    def size_um(self) -> float:
        """Diagonal of the bounding box."""
        return float(np.linalg.norm(np.ptp(self.result.vertices, axis=0)))

    @cached_property
    def locator(self) -> Any:
        """Finds the first panel on a line."""
        return _locator(self.skin(np.arange(len(self.result.faces))))

    def skin(self, panels: NDArray[np.int64]) -> pv.PolyData:
        """The chosen panels as a mesh with corners of their own; cell array `panel` holds their numbers."""
        if not len(panels):
            return pv.PolyData()
        corners = self.result.vertices[self.result.faces[panels]].reshape(-1, 3)
        cells = np.column_stack([np.full(len(panels), 3), np.arange(3 * len(panels)).reshape(-1, 3)])
        mesh = pv.PolyData(corners, faces=cells.ravel())
        mesh.cell_data["panel"] = panels
        mesh.point_data["Normals"] = self.corner_normals[panels].reshape(-1, 3)
        mesh.point_data.active_normals_name = "Normals"
        return mesh

    def hidden(self, place: Floats, to_eye: Floats) -> bool:
        """True where the shape itself is between `place` and an eye far away in direction `to_eye`."""
        start = place + 2e-3 * self.size_um * to_eye
        stop = place + 2.0 * self.size_um * to_eye
        points = vtkPoints()
        return bool(self.locator.IntersectWithLine(start, stop, points, None))


def _locator(mesh: pv.PolyData) -> Any:
    locator = vtkStaticCellLocator()
    locator.SetDataSet(mesh)
    locator.BuildLocator()
    return locator


def headline(result: EscapeResult) -> str:
    """Name, mean escape time with its error, and D, in one line of plain text."""
    return (
        f"{safe_text(result.name)}: mean escape time {format_time(result.mean_time_s)} "
        f"± {100.0 * result.relative_error:.2g} %  (D = {result.diffusion_um2_s:.4g} µm²/s)"
    )


@contextmanager
def quiet_renderer() -> Iterator[None]:
    """Keep VTK from writing to stderr that there is no display, where none is needed."""
    before = vtkLogger.GetCurrentVerbosityCutoff()
    vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_OFF)
    try:
        yield
    finally:
        vtkLogger.SetStderrVerbosity(before)


def new_plotter(
    *, off_screen: bool, size: tuple[int, int], shape: tuple[int, int] = (1, 1), title: str = "bemescape"
) -> pv.Plotter:
    """A plotter in the look of this package."""
    with quiet_renderer():
        plotter = pv.Plotter(
            off_screen=off_screen,
            window_size=list(size),
            shape=shape,
            border=False,
            title=title,
            lighting="none",
        )
    for renderer in plotter.renderers:
        # One lamp beside the eye: no side of the shape lies in the dark, and its form still shows.
        renderer.add_light(pv.Light(position=(-0.15, 0.25, 1.0), light_type="camera light"))
    plotter.set_background(BACKGROUND, all_renderers=True)
    plotter.enable_anti_aliasing("msaa", multi_samples=8)
    return plotter


def scene_parts(
    plotter: pv.Plotter,
    scene: Scene,
    *,
    mode: ScaleMode = "linear",
    windows: Literal["flat", "density"] = "flat",
    slow: bool = True,
    keep: Callable[[pv.PolyData], pv.PolyData] | None = None,
) -> ColourScale:
    """Put the wall, the windows, the rims and the slow regions of `scene` into `plotter`.

    Parameters
    ----------
    plotter : pyvista.Plotter
        Receives the parts; they are also listed in `scene.actors`.
    scene : Scene
        What to draw.
    mode : {"linear", "log"}
        Colour scale of the time.
    windows : {"flat", "density"}
        Windows in one flat colour, or coloured by exit density.
    slow : bool
        Outline slow regions and draw the path of each to its nearest window.
    keep : callable or None
        Applied to every mesh before it is drawn: cuts away what shall not be seen.

    Returns
    -------
    ColourScale
        The scale of the wall's colours.
    """
    result = scene.result
    keep = keep or (lambda mesh: mesh)
    scale = time_colours(result, mode)
    scene.actors = {"wall": [], "windows": [], "slow": []}
    wall = np.flatnonzero(result.panel_window < 0)
    if len(wall):
        skin = scene.skin(wall)
        skin.point_data["time"] = scene.corner_times_s[wall].ravel()
        paint_time(skin, scale)
        scene.actors["wall"] = present(add_skin(plotter, keep(skin)))
    opening = np.flatnonzero(result.panel_window >= 0)
    if len(opening):
        skin = scene.skin(opening)
        skin.cell_data["colour"] = window_colours(result, opening, density=windows == "density")
        scene.actors["windows"] = present(add_skin(plotter, keep(skin)))
    pores = pore_discs(result, scene.size_um, shares=windows == "density")
    if pores.n_cells:
        scene.actors["windows"] += present(add_skin(plotter, keep(pores), NO_SHADING))
    rims = border_edges(result.faces, result.panel_window)
    scene.actors["rims"] = present(add_lines(plotter, keep(line_mesh(result.vertices[rims])), INK, 3.5))
    if slow:
        outline = keep(line_mesh(scene.slow_outline))
        scene.actors["slow"] += present(add_lines(plotter, outline, OUTLINE, 4.0))
        for region in list(scene.slow)[:MOST_SLOW_PATHS]:
            path = np.asarray(region.path_um, dtype=np.float64)
            pieces = dashes(path, 0.012 * scene.size_um)
            scene.actors["slow"] += present(add_lines(plotter, keep(line_mesh(pieces)), OUTLINE, 3.0))
    return scale


def present(actor: Any) -> list[Any]:
    """The actor of a part, or nothing where the part is empty."""
    return [] if actor is None else [actor]


def window_colours(result: EscapeResult, panels: NDArray[np.int64], *, density: bool) -> NDArray[np.uint8]:
    """Colours (k, 3) of window panels: by exit density, or all in the flat colour of windows."""
    if density:
        return map_colours(density_scale(result), result.panel_exit_density_per_um2[panels])
    return np.tile(np.array(pv.Color(WINDOW).int_rgb, dtype=np.uint8), (len(panels), 1))


def paint_time(mesh: pv.PolyData, scale: ColourScale) -> None:
    """Colour `mesh` by its point array `time`.

    The place on the scale is interpolated across a panel and looked up in the map: blending the colours of
    the corners instead would show colours that the map does not have.
    """
    position = scale.position(np.asarray(mesh.point_data["time"]))
    if "position" not in mesh.point_data:
        mesh.point_data["position"] = position
        return
    # A drawn mesh shares its arrays with the mapper's copy of it: a new array would not reach the picture.
    mesh.point_data["position"][:] = position
    mesh.point_data["position"].VTKObject.Modified()


def add_skin(plotter: pv.Plotter, mesh: pv.PolyData, light: dict[str, float] | None = None) -> Any:
    """Draw `mesh`: array `position` (time on the scale) or `colour` (RGB); None where it is empty."""
    look: dict[str, Any] = (
        {"scalars": "position", "cmap": MAP_NAME, "clim": (0.0, 1.0), "interpolate_before_map": True}
        if "position" in mesh.point_data
        else {"scalars": "colour", "rgb": True}
    )
    if not mesh.n_cells:
        return None
    actor = plotter.add_mesh(mesh, **look, **(light or _LIGHT), **_PLAIN)
    # The mesh brings its own normals; the plotter's smooth shading would replace them by unweighted ones.
    actor.prop.interpolation = "Phong"
    return actor


def line_mesh(segments: Floats) -> pv.PolyData:
    """Segments (k, 2, 3) as a mesh of lines."""
    if not len(segments):
        return pv.PolyData()
    cells = np.column_stack([np.full(len(segments), 2), np.arange(2 * len(segments)).reshape(-1, 2)])
    return pv.PolyData(segments.reshape(-1, 3), lines=cells.ravel())


def add_lines(plotter: pv.Plotter, mesh: pv.PolyData, colour: str, width: float) -> Any:
    """Draw lines in one colour, `width` pixels wide; None where there are none."""
    if not mesh.n_points:
        return None
    actor = plotter.add_mesh(mesh, color=colour, line_width=width, lighting=False, reset_camera=False)
    # The lines lie in the wall: pulled towards the eye they win against it at every zoom.
    actor.mapper.SetResolveCoincidentTopologyToPolygonOffset()
    actor.mapper.SetRelativeCoincidentTopologyLineOffsetParameters(-1.0, -80.0)
    return actor


def middle_of(result: EscapeResult, panels: NDArray[np.int64]) -> tuple[Floats, Floats]:
    """A point on `panels` closest to their middle, and their mean normal."""
    areas = result.panel_areas_um2[panels]
    middle = np.average(result.panel_centroids[panels], axis=0, weights=areas)
    nearest = panels[int(np.argmin(np.linalg.norm(result.panel_centroids[panels] - middle, axis=1)))]
    normal = areas @ result.panel_normals[panels]
    return result.panel_centroids[nearest], normal / max(float(np.linalg.norm(normal)), 1e-300)


def look_from(
    plotter: pv.Plotter,
    points: Floats,
    view: View,
    *,
    narrower: float = 0.0,
    frame: tuple[float, float, float, float] = SHAPE_FRAME,
) -> None:
    """Parallel projection along `view`; `points` (p, 3) fill the part of the picture meant for the shape.

    `narrower` leaves this part of the width to a colour bar whose numbers need more room; `frame` is the part of the
    picture meant for the shape: left, bottom, right, top.
    """
    width, height = plotter.renderer.GetSize()
    across, along, deep = points @ view.right, points @ view.up, points @ view.towards
    middle = (
        0.5 * (across.min() + across.max()) * view.right
        + 0.5 * (along.min() + along.max()) * view.up
        + 0.5 * (deep.min() + deep.max()) * view.towards
    )
    left, bottom, right, top = frame
    right -= narrower
    half = 0.5 * max(float(np.ptp(along)) / (top - bottom), float(np.ptp(across)) / (right - left) * height / width)
    far = 2.0 * max(float(np.ptp(deep)), half)
    camera = plotter.camera
    camera.ParallelProjectionOn()
    camera.SetFocalPoint(*middle)
    camera.SetPosition(*(middle + far * view.towards))
    camera.SetViewUp(*view.up)
    camera.SetParallelScale(max(half, 1e-12))
    # The shape's middle is put into the middle of its frame, and stays the centre of rotation.
    camera.SetWindowCenter(1.0 - (left + right), 1.0 - (bottom + top))
    plotter.renderer.camera_set = True
    plotter.renderer.ResetCameraClippingRange()


def display_missing() -> bool:
    """True on a system whose windows need a display server that the environment does not name."""
    return sys.platform.startswith("linux") and not os.environ.get("DISPLAY")
