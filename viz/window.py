"""The desktop window: turn the shape, cut it, and read the mean escape time where the user clicks."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pyvista as pv
from numpy.typing import NDArray
from vtkmodules.vtkCommonDataModel import vtkPlane
from vtkmodules.vtkRenderingCore import vtkCellPicker

from bemescape.errors import SettingsError
from bemescape.units import format_length, format_time

from .cutaway import CutPlane, cut_plane
from .overlay import safe_text
from .parts import Scene, display_missing, look_from, paint_time, window_colours
from .scales import density_scale, time_colours
from .scenes import add_section, wall_scene
from .shapes import ViewName, standard_view

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["KEYS", "DesktopWindow", "open_window"]

Floats = NDArray[np.float64]

KEYS = """drag: turn   wheel: zoom
click: time at the place
c  cut on / off
s  slow regions on / off
l  linear / log colours
w  windows: exit density
1 2 3  front, side, top
h  this help   q  close"""

_NO_DISPLAY = (
    "no display is available for the desktop window; draw a picture instead with "
    "'bemescape view RESULT --png FILE', or connect to this machine with a display (for instance 'ssh -X')"
)
# Window systems on which VTK draws to memory only: no window would appear.
_UNSEEN = ("vtkEGLRenderWindow", "vtkOSOpenGLRenderWindow")
# Fewer points than in a picture, so that the cut follows the hand.
_CUT_POINTS = 2500
# A press and a release within this many pixels are a click, not a turn.
_CLICK_PIXELS = 4.0


def open_window(result: EscapeResult, *, view: ViewName = "front") -> None:
    """Show `result` in a desktop window until the user closes it.

    Parameters
    ----------
    result : EscapeResult
        What to show.
    view : {"front", "side", "top"}
        The first view.

    Raises
    ------
    SettingsError
        There is no display.
    """
    if display_missing():
        raise SettingsError(_NO_DISPLAY)
    window = DesktopWindow(result, view=view)
    try:
        if window.plotter.render_window.GetClassName() in _UNSEEN:
            raise SettingsError(_NO_DISPLAY)
        window.plotter.show()
    finally:
        window.plotter.close()


class DesktopWindow:
    """The scene of a result with what the keys and the mouse do to it.

    Parameters
    ----------
    result : EscapeResult
        What to show.
    view : {"front", "side", "top"}
        The first view.
    off_screen : bool
        Draw to memory only, as the tests do.
    size : (int, int)
        Width and height in pixels.
    """

    def __init__(
        self,
        result: EscapeResult,
        *,
        view: ViewName = "front",
        off_screen: bool = False,
        size: tuple[int, int] = (1400, 1000),
    ) -> None:
        self.scene = Scene(result)
        self.plotter = wall_scene(result, view, size=size, off_screen=off_screen, scene=self.scene, corner=KEYS)
        self._result = result
        self._mode: str = "linear"
        self._density = False
        self._slow = True
        self._plane: vtkPlane | None = None
        self._marker: Any = None
        self._pressed = (0, 0)
        self._first_note = self.overlay.note
        self._listen()

    @property
    def overlay(self) -> Any:
        """The written items."""
        return self.scene.overlay

    # -- what keys do -----------------------------------------------------------------------------------

    def toggle_slow(self) -> None:
        """Show or hide the slow regions, their paths and labels."""
        self._slow = not self._slow
        for actor in self.scene.actors["slow"]:
            actor.SetVisibility(self._slow)
        self.overlay.show_labels("slow", shown=self._slow)
        self.plotter.render()

    def toggle_scale(self) -> None:
        """Change between linear and logarithmic colours of the time."""
        self._mode = "log" if self._mode == "linear" else "linear"
        scale = time_colours(self._result, "log" if self._mode == "log" else "linear")
        for name in ("wall", "section"):
            for actor in self.scene.actors.get(name, []):
                if "time" in actor.mapper.dataset.point_data:
                    paint_time(actor.mapper.dataset, scale)
        self.overlay.set_scale(scale)
        self.plotter.render()

    def toggle_density(self) -> None:
        """Change between the flat colour and the exit density on windows."""
        self._density = not self._density
        for actor in self.scene.actors["windows"]:
            mesh = actor.mapper.dataset
            panels = np.asarray(mesh.cell_data["panel"])
            mesh.cell_data["colour"][:] = window_colours(self._result, panels, density=self._density)
            mesh.cell_data["colour"].VTKObject.Modified()
        scale = density_scale(self._result)
        self.overlay.set_note(
            f"windows: {scale.label}, dark {scale.low:.3g} to bright {scale.high:.3g}, logarithmic"
            if self._density
            else self._first_note
        )
        self.plotter.render()

    def toggle_cut(self) -> None:
        """Cut the shape with a plane that can be dragged, and show the time on the section; or undo it."""
        if self._plane is not None:
            for actor in self._skins():
                actor.mapper.RemoveAllClippingPlanes()
            self._plane = None
            self.plotter.clear_plane_widgets()
            self._drop_section()
            self.plotter.render()
            return
        start = cut_plane(self._result)
        self._plane = vtkPlane()
        for actor in self._skins():
            actor.mapper.AddClippingPlane(self._plane)
        if self.plotter.iren is not None and not self.plotter.off_screen:
            self.plotter.add_plane_widget(
                self._cut_at,
                normal=tuple(start.normal),
                origin=tuple(start.origin),
                bounds=tuple(np.stack([self._low, self._high], axis=1).ravel()),
                outline_translation=False,
                interaction_event="end",
                test_callback=False,
            )
        self._cut_at(start.normal, start.origin)

    def look(self, view: ViewName) -> None:
        """Turn to a standard view."""
        look_from(self.plotter, self._result.vertices, standard_view(self._result, view))
        self.plotter.render()

    def toggle_help(self) -> None:
        """Show or hide the list of keys."""
        self.overlay.toggle_corner()
        self.plotter.render()

    # -- what clicks do ---------------------------------------------------------------------------------

    def click(self, x: float, y: float) -> str | None:
        """Mark the place under pixel (`x`, `y`), from the lower left, and say what is known of it there.

        None where the pixel shows no part of the shape.
        """
        # A cell picker gives the hit nearest to the eye; it heeds the planes that cut the shape.
        picker = vtkCellPicker()
        picker.SetTolerance(0.0)
        picker.PickFromListOn()
        for actor in [*self._surfaces(), *self.scene.actors.get("section", [])[:1]]:
            picker.AddPickList(actor)
        if not picker.Pick(x, y, 0.0, self.plotter.renderer):
            return None
        place = np.array(picker.GetPickPosition())
        mesh = picker.GetActor().GetMapper().GetInput()
        panels = mesh.GetCellData().GetArray("panel")
        if panels is None:
            time = float(self._result.time_at(place[None], outside="nan")[0])
            text = f"inside, {_where(place)}: mean escape time {format_time(time)}"
        else:
            text = self.describe(int(panels.GetTuple1(picker.GetCellId())), place)
        self._mark(place)
        self.overlay.set_note(text)
        self.plotter.render()
        return text

    def describe(self, panel: int, place: Floats) -> str:
        """What is known of `place` (3,) in µm on `panel`: time and distance to the nearest window."""
        result = self._result
        window = int(result.panel_window[panel])
        if window >= 0:
            density = result.panel_exit_density_per_um2[panel]
            return (
                f"window {safe_text(result.windows[window].name)}, {_where(place)}: mean escape time "
                f"{format_time(result.panel_time_s[panel])}, {density:.3g} of all exits per µm²"
            )
        text = f"wall, {_where(place)}: mean escape time {format_time(self._time_on(panel, place))}"
        openings = np.flatnonzero(result.panel_window >= 0)
        if len(openings):
            closest, distance = _nearest(self.scene.skin(openings), place)
            name = safe_text(result.windows[int(result.panel_window[openings[closest]])].name)
            text += f", {format_length(distance)} in a straight line from {name}"
        if result.pores is not None:
            gap = np.linalg.norm(result.pores.centre_um - place, axis=1) - result.pores.radius_um
            closest = int(gap.argmin())
            pore = result.windows[int(result.pores.window[closest])]
            text += (
                f", {format_length(max(float(gap[closest]), 0.0))} in a straight line from {safe_text(pore.name)} "
                f"({100.0 * pore.share:.3g} % of exits)"
            )
        return text

    def _time_on(self, panel: int, place: Floats) -> float:
        """Time at `place` between the corners of `panel`."""
        a, b, c = self._result.vertices[self._result.faces[panel]]
        weights, *_ = np.linalg.lstsq(np.stack([b - a, c - a], axis=1), place - a, rcond=None)
        parts = np.clip([1.0 - weights.sum(), *weights], 0.0, 1.0)
        return float(parts @ self.scene.corner_times_s[panel] / parts.sum())

    # -- inside -----------------------------------------------------------------------------------------

    @property
    def _low(self) -> Floats:
        return np.asarray(self._result.vertices.min(axis=0))

    @property
    def _high(self) -> Floats:
        return np.asarray(self._result.vertices.max(axis=0))

    def _surfaces(self) -> list[Any]:
        return [*self.scene.actors["wall"], *self.scene.actors["windows"]]

    def _skins(self) -> list[Any]:
        return [*self._surfaces(), *self.scene.actors["rims"], *self.scene.actors["slow"]]

    def _cut_at(self, normal: Any, origin: Any) -> None:
        if self._plane is None:
            return
        normal = np.asarray(normal, dtype=np.float64)
        normal = normal / np.linalg.norm(normal)
        # VTK keeps the side that its normal points into; here the normal points to what is taken away.
        self._plane.SetNormal(*-normal)
        self._plane.SetOrigin(*origin)
        self._drop_section()
        up = np.cross(normal, np.eye(3)[int(np.argmin(np.abs(normal)))])
        plane = CutPlane(np.asarray(origin, dtype=np.float64), normal, up / np.linalg.norm(up))
        scale = time_colours(self._result, "log" if self._mode == "log" else "linear")
        add_section(self.plotter, self.scene, plane, scale, _CUT_POINTS)
        self.plotter.render()

    def _drop_section(self) -> None:
        for actor in self.scene.actors.pop("section", []):
            self.plotter.remove_actor(actor, reset_camera=False, render=False)

    def _unmark(self) -> None:
        if self._marker is not None:
            self.plotter.remove_actor(self._marker, reset_camera=False, render=False)
            self._marker = None

    def _mark(self, place: Floats) -> None:
        self._unmark()
        ball = pv.Sphere(radius=0.006 * self.scene.size_um, center=place)
        self._marker = self.plotter.add_mesh(
            ball, color="#ffffff", show_edges=False, reset_camera=False, silhouette=False, pickable=False
        )

    def _listen(self) -> None:
        interactor = self.plotter.iren
        if interactor is None:
            return
        # The renderer's own keys (wireframe, stereo, fly) would answer to the same letters.
        style = interactor.interactor.GetInteractorStyle()
        style.AddObserver("CharEvent", lambda *_: None)
        interactor.clear_key_event_callbacks()
        for key, action in {
            "c": self.toggle_cut,
            "s": self.toggle_slow,
            "l": self.toggle_scale,
            "w": self.toggle_density,
            "h": self.toggle_help,
            "1": lambda: self.look("front"),
            "2": lambda: self.look("side"),
            "3": lambda: self.look("top"),
        }.items():
            interactor.add_key_event(key, action)
        interactor.add_observer("LeftButtonPressEvent", self._press)
        # The style holds the mouse while it turns the scene; its end of interaction is the release.
        style.AddObserver("EndInteractionEvent", self._release)

    def _press(self, *_: object) -> None:
        self._pressed = tuple(self.plotter.iren.interactor.GetEventPosition())

    def _release(self, *_: object) -> None:
        x, y = self.plotter.iren.interactor.GetEventPosition()
        if np.hypot(x - self._pressed[0], y - self._pressed[1]) <= _CLICK_PIXELS:
            self.click(x, y)


def _where(place: Floats) -> str:
    x, y, z = place
    return f"({x:.3f}, {y:.3f}, {z:.3f}) µm"


def _nearest(mesh: pv.PolyData, place: Floats) -> tuple[int, float]:
    """Number of the cell of `mesh` nearest to `place`, and its distance."""
    cell, closest = mesh.find_closest_cell(place, return_closest_point=True)
    return int(cell), float(np.linalg.norm(np.asarray(closest) - place))
