"""What is written over a scene: title, colour bar, scale bar and labels, laid out anew for every frame.

The items live in the pixels of one renderer. They follow the window's size and the camera, so that the scale
bar stays true while a user zooms (the projection is parallel: one µm has one length all over the picture).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import pyvista as pv
from numpy.typing import NDArray
from vtkmodules.vtkRenderingCore import vtkActor2D, vtkPolyDataMapper2D, vtkTextActor

from bemescape.units import format_length

from .scales import BACKGROUND, INK, ColourScale, bar_length_um, map_colours

__all__ = ["FONT_FILE", "SHAPE_FRAME", "Label", "Overlay", "safe_text"]

Floats = NDArray[np.float64]

# The renderer's built-in font lacks superscripts and Greek; this one comes with matplotlib.
FONT_FILE = str(Path(matplotlib.get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf")
#: Part of the picture that the shape may fill: left, bottom, right, top.
SHAPE_FRAME = (0.07, 0.13, 0.82, 0.88)
_BAR_LEFT, _BAR_BOTTOM, _BAR_TOP = 0.885, 0.20, 0.80


@dataclass(frozen=True)
class Label:
    """Text beside a `place` (3,) of the shape, in µm; labels of one `kind` are shown and hidden together."""

    text: str
    place: Floats
    kind: str = "window"
    colour: str = INK


def safe_text(text: str, limit: int = 48) -> str:
    """One printable line of at most `limit` characters, free of what the renderer takes for a formula."""
    line = " ".join("".join(char if char.isprintable() else " " for char in text).split())
    if len(line) > limit:
        line = line[: limit - 1] + "…"
    return line.replace("\\", "∖").replace("$", "\\$").replace("|", "❘")


class Overlay:
    """The written items of one renderer.

    Parameters
    ----------
    plotter : pyvista.Plotter
        Its active renderer is written on.
    title : str
        One line at the top, already safe.
    note : str
        A smaller line under the title.
    scale : ColourScale or None
        Draws a colour bar.
    labels : sequence of Label
        Drawn where their place is in sight.
    hidden : callable or None
        (place, direction to the eye) -> True where the shape hides the place.
    corner : str
        Lines in the lower right corner.
    size : float
        Text height as part of the picture's height.
    """

    def __init__(
        self,
        plotter: pv.Plotter,
        *,
        title: str,
        note: str = "",
        scale: ColourScale | None = None,
        labels: Sequence[Label] = (),
        hidden: Callable[[Floats, Floats], bool] | None = None,
        corner: str = "",
        size: float = 0.021,
    ) -> None:
        self._renderer: Any = plotter.renderer
        self._hidden = hidden
        self._size = size
        self._title = self._text(title)
        self._note = self._text(note)
        self._corner = self._text(corner)
        self._corner.GetTextProperty().SetLineSpacing(1.05)
        self._scale: ColourScale | None = None
        self._bar_parts: list[Any] = []
        self._tick_texts: list[tuple[Any, float]] = []
        self._ruler = self._lines()
        self._ruler_text = self._text("")
        self._leaders = self._lines(width=1.5)
        self._off: set[str] = set()
        self._labels = [(label, self._text(label.text, colour=label.colour)) for label in labels]
        for _, actor in self._labels:
            actor.GetTextProperty().SetBackgroundColor(pv.Color(BACKGROUND).float_rgb)
            actor.GetTextProperty().SetBackgroundOpacity(0.8)
        if scale is not None:
            self.set_scale(scale)
        self._observer: int = self._renderer.AddObserver("StartEvent", self._update)

    @property
    def ruler_um(self) -> float:
        """Length of the scale bar in µm for the present camera."""
        return bar_length_um(self._width_um() * (SHAPE_FRAME[2] - SHAPE_FRAME[0]))

    @property
    def ruler_pixels(self) -> float:
        """Length of the scale bar in pixels for the present camera."""
        pixels: float = self.ruler_um / self._width_um() * float(self._renderer.GetSize()[0])
        return pixels

    def set_scale(self, scale: ColourScale) -> None:
        """Replace the colour bar."""
        for actor in [*self._bar_parts, *(text for text, _ in self._tick_texts)]:
            self._renderer.RemoveViewProp(actor)
        self._scale = scale
        self._tick_texts = [(self._text(scale.text(tick)), tick) for tick in scale.ticks]
        ends = [(scale.low, "≤")] if scale.clipped else []
        ends += [(scale.high, "≥")] if scale.clipped_above else []
        for end, sign in ends:
            place = float(scale.position(np.array([end]))[0])
            kept = []
            for text, tick in self._tick_texts:
                if abs(float(scale.position(np.array([tick]))[0]) - place) > 0.04:
                    kept.append((text, tick))
                else:
                    self._renderer.RemoveViewProp(text)
            label = self._text(f"{sign} {scale.text(float(f'{end:.3g}'))}")
            self._tick_texts = [*kept, (label, end)]
        self._strip = self._polygons()
        self._tick_lines = self._lines(width=1.5)
        self._bar_title = self._text(scale.label)
        self._bar_title.SetOrientation(90.0)
        self._bar_parts = [self._strip, self._tick_lines, self._bar_title]

    @property
    def note(self) -> str:
        """The line under the title."""
        return str(self._note.GetInput())

    def set_note(self, note: str) -> None:
        """Replace the line under the title."""
        self._note.SetInput(note)

    def toggle_corner(self) -> None:
        """Show or hide the lines in the corner."""
        self._corner.SetVisibility(not self._corner.GetVisibility())

    def show_labels(self, kind: str, *, shown: bool) -> None:
        """Show or hide the labels of one kind."""
        (self._off.discard if shown else self._off.add)(kind)

    # -- drawing -------------------------------------------------------------------------------------------

    def _text(self, text: str, *, colour: str = INK) -> Any:
        actor = vtkTextActor()
        actor.SetInput(text)
        style = actor.GetTextProperty()
        style.SetFontFamily(4)  # VTKFONT_FILE
        style.SetFontFile(FONT_FILE)
        style.SetColor(pv.Color(colour).float_rgb)
        self._renderer.AddViewProp(actor)
        return actor

    def _lines(self, width: float = 2.0) -> Any:
        actor = self._polygons()
        actor.GetProperty().SetColor(pv.Color(INK).float_rgb)
        actor.GetProperty().SetLineWidth(width)
        return actor

    def _polygons(self) -> Any:
        actor = vtkActor2D()
        mapper = vtkPolyDataMapper2D()
        mapper.SetInputData(pv.PolyData())
        actor.SetMapper(mapper)
        self._renderer.AddViewProp(actor)
        return actor

    def _width_um(self) -> float:
        width, height = self._renderer.GetSize()
        scale = float(self._renderer.GetActiveCamera().GetParallelScale())
        return 2.0 * scale * float(width) / max(float(height), 1.0)

    def _update(self, *_: object) -> None:
        width, height = (float(value) for value in self._renderer.GetSize())
        if width < 2.0 or height < 2.0:
            return
        font = max(9, round(self._size * height))
        self._place(self._title, 0.025 * width, height - 0.4 * font, font + 2, vertical="top")
        self._place(self._note, 0.025 * width, height - 2.3 * font, round(0.85 * font), vertical="top")
        self._place(
            self._corner,
            0.99 * width,
            0.015 * height,
            round(0.72 * font),
            horizontal="right",
            vertical="bottom",
        )
        self._draw_ruler(width, height, font)
        if self._scale is not None:
            self._draw_bar(self._scale, width, height, font)
        self._draw_labels(width, height, font)

    @staticmethod
    def _place(
        actor: Any, x: float, y: float, font: int, *, horizontal: str = "left", vertical: str = "centre"
    ) -> None:
        style = actor.GetTextProperty()
        style.SetFontSize(font)
        style.SetJustification({"left": 0, "centre": 1, "right": 2}[horizontal])
        style.SetVerticalJustification({"bottom": 0, "centre": 1, "top": 2}[vertical])
        actor.SetPosition(x, y)

    def _draw_ruler(self, width: float, height: float, font: int) -> None:
        left, y, tick = 0.03 * width, 0.045 * height, 0.3 * font
        right = left + self.ruler_pixels
        segments = [[[left, y], [right, y]]]
        segments += [[[end, y - tick], [end, y + tick]] for end in (left, right)]
        _set_segments(self._ruler, np.array(segments))
        self._ruler_text.SetInput(format_length(self.ruler_um))
        self._ruler_text.GetTextProperty().SetFontSize(font)
        size = [0.0, 0.0]
        self._ruler_text.GetSize(self._renderer, size)
        middle = max(0.5 * (left + right), 0.5 * size[0] + 0.3 * font)
        self._place(self._ruler_text, middle, y + 0.55 * font, font, horizontal="centre", vertical="bottom")

    def _draw_bar(self, scale: ColourScale, width: float, height: float, font: int) -> None:
        bottom, top = _BAR_BOTTOM * height, _BAR_TOP * height
        widest = 0.0
        for text, _ in self._tick_texts:
            text.GetTextProperty().SetFontSize(font)
            size = [0.0, 0.0]
            text.GetSize(self._renderer, size)
            widest = max(widest, size[0])
        # A narrow picture still shows the numbers whole.
        left = min(_BAR_LEFT * width, width - widest - 1.8 * font)
        right = left + 0.9 * font
        count = 128
        y = np.linspace(bottom, top, count + 1)
        corners = np.zeros((count, 4, 3))
        corners[:, :, 0] = [left, right, right, left]
        corners[:, :, 1] = np.column_stack([y[:-1], y[:-1], y[1:], y[1:]])
        quads = np.column_stack([np.full(count, 4), np.arange(4 * count).reshape(count, 4)])
        strip = pv.PolyData(corners.reshape(-1, 3), faces=quads.ravel())
        middle = (np.arange(count) + 0.5) / count
        values = (
            scale.low * (scale.high / scale.low) ** middle
            if scale.log
            else scale.low + (scale.high - scale.low) * middle
        )
        strip.cell_data["colour"] = map_colours(scale, values)
        strip.cell_data.active_scalars_name = "colour"
        self._strip.GetMapper().SetInputData(strip)
        tick_y = []
        for text, tick in self._tick_texts:
            tick_y.append(bottom + float(scale.position(np.array([tick]))[0]) * (top - bottom))
            self._place(text, right + 0.55 * font, tick_y[-1], font)
        segments = [[[right, level], [right + 0.3 * font, level]] for level in tick_y]
        frame = [[left, bottom], [right, bottom], [right, top], [left, top], [left, bottom]]
        segments += [[a, b] for a, b in pairwise(frame)]
        _set_segments(self._tick_lines, np.array(segments))
        self._place(
            self._bar_title,
            left - 0.5 * font,
            0.5 * (bottom + top),
            font,
            horizontal="centre",
            vertical="bottom",
        )

    def _draw_labels(self, width: float, height: float, font: int) -> None:
        to_eye = -np.array(self._renderer.GetActiveCamera().GetDirectionOfProjection())
        middle = np.array([0.5 * (SHAPE_FRAME[0] + SHAPE_FRAME[2]) * width, 0.5 * height])
        shown = []
        for label, actor in self._labels:
            hide = label.kind in self._off or (self._hidden and self._hidden(label.place, to_eye))
            actor.SetVisibility(not hide)
            if not hide:
                shown.append((actor, self.pixel(label.place)))
        # Text stays clear of the title, the scale bar, the colour bar, the places and other text.
        room = (0.015 * width, 0.10 * height, (_BAR_LEFT - 0.045) * width, height - 4.0 * font)
        taken = [_box(anchor, (font, font), "centre") for _, anchor in shown]
        leaders = []
        for actor, anchor in shown:
            self._place(actor, 0.0, 0.0, round(0.95 * font))
            size = [0.0, 0.0]
            actor.GetSize(self._renderer, size)
            spot, side = _free_spot(anchor, anchor - middle, size, 0.07 * height, room, taken)
            taken.append(_box(spot, size, side))
            self._place(actor, float(spot[0]), float(spot[1]), round(0.95 * font), horizontal=side)
            leaders.append([anchor, spot])
        _set_segments(self._leaders, np.array(leaders).reshape(-1, 2, 2))

    def pixel(self, place: Floats) -> Floats:
        """Where `place` (3,) in µm lies in the picture: pixels from the lower left corner."""
        self._renderer.SetWorldPoint(*place, 1.0)
        self._renderer.WorldToDisplay()
        x, y, _ = self._renderer.GetDisplayPoint()
        origin = self._renderer.GetOrigin()
        return np.array([x - origin[0], y - origin[1]])


def _set_segments(actor: Any, segments: Floats) -> None:
    """Draw 2D segments (k, 2, 2), in pixels, with `actor`."""
    data = pv.PolyData()
    if len(segments):
        points = np.column_stack([segments.reshape(-1, 2), np.zeros(2 * len(segments))])
        lines = np.column_stack([np.full(len(segments), 2), np.arange(2 * len(segments)).reshape(-1, 2)])
        data = pv.PolyData(points, lines=lines.ravel())
    actor.GetMapper().SetInputData(data)


_Box = tuple[float, float, float, float]


def _free_spot(
    anchor: Floats, away: Floats, size: Sequence[float], length: float, room: _Box, taken: Sequence[_Box]
) -> tuple[Floats, str]:
    """Where the text of a label goes: away from the shape's middle, else the nearest direction with room."""
    start = math.atan2(away[1], away[0]) if np.linalg.norm(away) > 0.3 * length else math.pi / 4
    best = (math.inf, anchor, "left")
    for reach in (length, 1.6 * length, 2.4 * length):
        for turn in (0.0, 0.6, -0.6, 1.2, -1.2, 1.9, -1.9, math.pi):
            spot = anchor + reach * np.array([math.cos(start + turn), math.sin(start + turn)])
            side = "left" if spot[0] >= anchor[0] else "right"
            box = _box(spot, size, side)
            outside = max(room[0] - box[0], room[1] - box[1], box[2] - room[2], box[3] - room[3], 0.0)
            clash = outside + size[1] * sum(_overlap(box, other) for other in taken)
            if clash < best[0]:
                best = (clash, spot, side)
            if clash == 0.0:
                return spot, side
    return best[1], best[2]


def _box(spot: Floats, size: Sequence[float], side: str) -> _Box:
    left = float(spot[0]) - {"left": 0.0, "centre": 0.5, "right": 1.0}[side] * size[0]
    return left, float(spot[1]) - 0.6 * size[1], left + size[0], float(spot[1]) + 0.6 * size[1]


def _overlap(a: _Box, b: _Box) -> bool:
    return a[0] < b[2] and b[0] < a[2] and a[1] < b[3] and b[1] < a[3]
