"""Result → pyvista scene: the time on the wall, a cut-away with the time inside, and the windows.

Every function hands out a `pyvista.Plotter` that is ready to be shown or photographed; the projection is
parallel, so that the scale bar holds everywhere.
"""

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
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from vtkmodules.vtkCommonCore import vtkLogger, vtkPoints
from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator

from bemescape.units import format_length, format_time

from .cutaway import CutPlane, cut_plane, section
from .overlay import SHAPE_FRAME, Label, Overlay, safe_text
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
from .shapes import (
    View,
    ViewName,
    border_edges,
    corner_normals,
    corner_values,
    crossings,
    dashes,
    standard_view,
)

if TYPE_CHECKING:
    from bemescape.results.measures import SlowRegions
    from bemescape.results.result import EscapeResult

__all__ = [
    "Scene",
    "add_section",
    "cutaway_scene",
    "display_missing",
    "headline",
    "look_from",
    "paint_time",
    "scene_parts",
    "wall_scene",
    "window_colours",
    "windows_scene",
]

Floats = NDArray[np.float64]
ScaleMode = Literal["linear", "log"]

# Beyond these numbers labels would hide the shape; the rest is in the tables of the report.
_MOST_WINDOW_LABELS = 12
_MOST_SLOW_LABELS = 3
_MOST_CLOSE_UPS = 6
# Colours have to be read against the bar, so shading may only darken them a little.
_LIGHT = {"ambient": 0.55, "diffuse": 0.48, "specular": 0.0}
_NO_SHADING = {"ambient": 1.0, "diffuse": 0.0, "specular": 0.0}
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
        segments, _, _ = crossings(
            result.vertices[result.faces[near]], self.corner_times_s[near] - self.slow.level_s
        )
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


# -- parts ---------------------------------------------------------------------------------------------


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
        scene.actors["wall"] = _present(_add_skin(plotter, keep(skin)))
    opening = np.flatnonzero(result.panel_window >= 0)
    if len(opening):
        skin = scene.skin(opening)
        skin.cell_data["colour"] = window_colours(result, opening, density=windows == "density")
        scene.actors["windows"] = _present(_add_skin(plotter, keep(skin)))
    rims = border_edges(result.faces, result.panel_window)
    scene.actors["rims"] = _present(_add_lines(plotter, keep(_lines(result.vertices[rims])), INK, 3.5))
    if slow:
        outline = keep(_lines(scene.slow_outline))
        scene.actors["slow"] += _present(_add_lines(plotter, outline, OUTLINE, 4.0))
        for region in list(scene.slow)[:_MOST_SLOW_LABELS]:
            path = np.asarray(region.path_um, dtype=np.float64)
            pieces = dashes(path, 0.012 * scene.size_um)
            scene.actors["slow"] += _present(_add_lines(plotter, keep(_lines(pieces)), OUTLINE, 3.0))
    return scale


def _present(actor: Any) -> list[Any]:
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


def _add_skin(plotter: pv.Plotter, mesh: pv.PolyData, light: dict[str, float] | None = None) -> Any:
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


def _lines(segments: Floats) -> pv.PolyData:
    """Segments (k, 2, 3) as a mesh of lines."""
    if not len(segments):
        return pv.PolyData()
    cells = np.column_stack([np.full(len(segments), 2), np.arange(2 * len(segments)).reshape(-1, 2)])
    return pv.PolyData(segments.reshape(-1, 3), lines=cells.ravel())


def _add_lines(plotter: pv.Plotter, mesh: pv.PolyData, colour: str, width: float) -> Any:
    if not mesh.n_points:
        return None
    actor = plotter.add_mesh(mesh, color=colour, line_width=width, lighting=False, reset_camera=False)
    # The lines lie in the wall: pulled towards the eye they win against it at every zoom.
    actor.mapper.SetResolveCoincidentTopologyToPolygonOffset()
    actor.mapper.SetRelativeCoincidentTopologyLineOffsetParameters(-1.0, -80.0)
    return actor


def _labels(scene: Scene, *, slow: bool) -> list[Label]:
    result = scene.result
    labels = []
    if len(result.windows) <= _MOST_WINDOW_LABELS:
        for number, window in enumerate(result.windows):
            panels = np.flatnonzero(result.panel_window == number)
            if len(panels):
                place, _ = _middle_of(result, panels)
                labels.append(Label(safe_text(window.name, 24), place))
    if slow:
        for number, region in enumerate(list(scene.slow)[:_MOST_SLOW_LABELS], start=1):
            text = f"slow {number}: {format_time(region.mean_time_s, 3)}"
            centre = np.asarray(region.centre_um, dtype=np.float64)
            labels.append(Label(text, centre, "slow", OUTLINE))
    return labels


def _middle_of(result: EscapeResult, panels: NDArray[np.int64]) -> tuple[Floats, Floats]:
    """A point on `panels` closest to their middle, and their mean normal."""
    areas = result.panel_areas_um2[panels]
    middle = np.average(result.panel_centroids[panels], axis=0, weights=areas)
    nearest = panels[int(np.argmin(np.linalg.norm(result.panel_centroids[panels] - middle, axis=1)))]
    normal = areas @ result.panel_normals[panels]
    return result.panel_centroids[nearest], normal / max(float(np.linalg.norm(normal)), 1e-300)


def look_from(plotter: pv.Plotter, points: Floats, view: View, *, narrower: float = 0.0) -> None:
    """Parallel projection along `view`; `points` (p, 3) fill the part of the picture meant for the shape.

    `narrower` leaves this part of the width to a colour bar whose numbers need more room.
    """
    width, height = plotter.renderer.GetSize()
    across, along, deep = points @ view.right, points @ view.up, points @ view.towards
    middle = (
        0.5 * (across.min() + across.max()) * view.right
        + 0.5 * (along.min() + along.max()) * view.up
        + 0.5 * (deep.min() + deep.max()) * view.towards
    )
    left, bottom, right, top = SHAPE_FRAME
    right -= narrower
    half = 0.5 * max(
        float(np.ptp(along)) / (top - bottom), float(np.ptp(across)) / (right - left) * height / width
    )
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


# -- scenes --------------------------------------------------------------------------------------------


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
        note="cut-away: time inside, on a plane through the middle · thin lines: equal time · "
        "light blue: windows",
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
                place, _ = _middle_of(result, edge)
                labels.append(Label(safe_text(window.name, 24), place))
    return labels if len(labels) <= _MOST_WINDOW_LABELS else []


def add_section(
    plotter: pv.Plotter, scene: Scene, plane: CutPlane, scale: ColourScale, max_points: int
) -> None:
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
    border = _lines(cut.edges + lift)
    if levels.n_points:
        levels.points = levels.points + lift
    scene.actors["section"] += _present(_add_lines(plotter, levels, "#ffffff", 1.2))
    scene.actors["section"] += _present(_add_lines(plotter, border, INK, 2.5))


def windows_scene(
    result: EscapeResult,
    *,
    size: tuple[int, int] = (1600, 1200),
    off_screen: bool = True,
    scene: Scene | None = None,
) -> pv.Plotter:
    """Close-ups of the windows with the largest shares (at most six), coloured by exit density.

    Each is seen straight on, with the wall around it; one logarithmic scale serves all.

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
    order = sorted(present.tolist(), key=lambda number: -result.windows[number].share)[:_MOST_CLOSE_UPS]
    columns = min(3, max(1, len(order))) if len(order) != 4 else 2
    rows = max(1, -(-len(order) // columns))
    plotter = new_plotter(off_screen=off_screen, size=size, shape=(rows, columns))
    scale = density_scale(result)
    for place, number in enumerate(order):
        plotter.subplot(place // columns, place % columns)
        _close_up(plotter, scene, number, scale, 0.021 if rows == 1 else 0.032)
    return plotter


def _close_up(plotter: pv.Plotter, scene: Scene, number: int, scale: ColourScale, text_size: float) -> None:
    result = scene.result
    window = result.windows[number]
    panels = np.flatnonzero(result.panel_window == number)
    middle, outward = _middle_of(result, panels)
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
    _add_skin(plotter, opening, _NO_SHADING)
    beside = around[result.panel_window[around] != number]
    if len(beside):
        rest = scene.skin(beside)
        rest.cell_data["colour"] = np.full((rest.n_cells, 3), 232, dtype=np.uint8)
        _add_skin(plotter, _within(rest, middle, reach))
    rims = border_edges(result.faces, (result.panel_window == number).astype(np.int64))
    _add_lines(plotter, _lines(result.vertices[rims]), INK, 3.0)
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


def display_missing() -> bool:
    """True on a system whose windows need a display server that the environment does not name."""
    return sys.platform.startswith("linux") and not os.environ.get("DISPLAY")
