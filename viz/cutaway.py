"""The interior on a plane: a bounded triangle mesh of the section, with the time at its points."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import Delaunay, cKDTree

from .shapes import View, crossings, principal_axes

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["CutPlane", "Section", "cut_plane", "section"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TILT_DEGREES = 22.0
_FEW_WINDOWS = 4


@dataclass(frozen=True)
class CutPlane:
    """A plane through `origin` (3,) in µm.

    The half that `normal` (3,) points into is taken away; `up` (3,) lies in the plane.
    """

    origin: Floats
    normal: Floats
    up: Floats

    @property
    def view(self) -> View:
        """Onto the section from a little above, so that the wall behind is seen.

        The tilt is about the horizontal: lengths across the picture, such as the scale bar's, stay true.
        """
        tilt = math.radians(_TILT_DEGREES)
        return View(
            math.cos(tilt) * self.normal + math.sin(tilt) * self.up,
            math.cos(tilt) * self.up - math.sin(tilt) * self.normal,
        )


@dataclass(frozen=True)
class Section:
    """Triangles of the cut.

    `points` (p, 3) in µm, `faces` (f, 3), `times_s` (p,), and the `edges` (e, 2, 3) of the border.
    """

    points: Floats
    faces: Ints
    times_s: Floats
    edges: Floats


def cut_plane(result: EscapeResult) -> CutPlane:
    """A plane through the middle of the shape that shows the way out.

    It holds the window with the largest share, and the second largest where there are two to four windows;
    else, or where those three points lie in a line, the longest axis of the shape.
    """
    centre, (longest, middle, shortest) = principal_axes(result.panel_centroids, result.panel_areas_um2)
    arms = [_unit(place - centre) for place in _largest_windows(result)]
    second = arms[1:] if len(result.windows) <= _FEW_WINDOWS else []
    normal = shortest
    for other in (*second, longest):
        across = np.cross(arms[0], other) if arms else np.zeros(3)
        # Nearly in a line, the points do not fix the plane: rounding would.
        if np.linalg.norm(across) > 0.25:
            normal = _unit(across)
            break
    # The sign follows the front view, so that the same side faces the eye in both pictures.
    if normal @ shortest < 0.0:
        normal = -normal
    along = longest if abs(longest @ normal) < 0.7 else middle
    up = _unit(np.cross(normal, along))
    return CutPlane(centre, normal, up if up @ middle >= 0.0 else -up)


def _largest_windows(result: EscapeResult) -> list[Floats]:
    """Middles of the windows with the two largest shares."""
    order = sorted(range(len(result.windows)), key=lambda number: -result.windows[number].share)
    places = []
    for number in order[:2]:
        panels = result.panel_window == number
        if result.pores is not None and number in result.pores.window:
            places.append(result.pores.centre_um[int(np.flatnonzero(result.pores.window == number)[0])])
        if panels.any():
            weights = result.panel_areas_um2[panels]
            places.append(np.average(result.panel_centroids[panels], axis=0, weights=weights))
    return places


def _unit(vector: Floats) -> Floats:
    return np.asarray(vector / max(float(np.linalg.norm(vector)), 1e-300))


def section(result: EscapeResult, plane: CutPlane, corner_times_s: Floats, *, max_points: int = 6000) -> Section | None:
    """The section of the diffusing volume with `plane`, or None where the plane misses it.

    Parameters
    ----------
    result : EscapeResult
        Its `time_at` gives the field inside.
    plane : CutPlane
        Where to cut.
    corner_times_s : (m, 3) float64
        Times at the corners of panels: the values on the border of the section.
    max_points : int
        Bound on the points of the section (grid and border each); the spacing follows from it.
    """
    border, border_times = _border(result, plane, corner_times_s)
    if not len(border):
        return None
    across = np.cross(plane.up, plane.normal)
    flat = np.stack([(border - plane.origin) @ across, (border - plane.origin) @ plane.up], axis=-1)
    low, high = flat.min(axis=(0, 1)), flat.max(axis=(0, 1))
    step = float(np.sqrt(_enclosed_area(flat) / max_points))
    if step <= 0.0:
        return None
    rim, rim_times = _resampled(flat, border_times, max(step, _total_length(flat) / max_points))
    grid = _grid(low, high, step)
    grid = grid[_inside(grid, flat)]
    # Grid points on top of the border would only make slivers.
    if len(grid):
        grid = grid[cKDTree(rim).query(grid)[0] > 0.45 * step]
    inner = plane.origin + grid[:, :1] * across + grid[:, 1:] * plane.up
    inner_times = result.time_at(inner, outside="nan") if len(inner) else np.zeros(0)
    known = np.isfinite(inner_times)
    points = np.concatenate([rim, grid[known]])
    times = np.concatenate([rim_times, inner_times[known]])
    triangles = Delaunay(points).simplices.astype(np.int64)
    triangles = triangles[_inside(points[triangles].mean(axis=1), flat)]
    placed = plane.origin + points[:, :1] * across + points[:, 1:] * plane.up
    return Section(placed, triangles, times, border)


def _border(result: EscapeResult, plane: CutPlane, corner_times_s: Floats) -> tuple[Floats, Floats]:
    """Segments (e, 2, 3) where panels cross the plane, in any order, and the times (e, 2) at their ends."""
    height = (result.vertices - plane.origin) @ plane.normal
    segments, panels, (start, stop, part) = crossings(result.vertices[result.faces], height[result.faces])
    times, row = corner_times_s[panels], np.arange(len(panels))[:, None]
    return segments, times[row, start] + part * (times[row, stop] - times[row, start])


def _enclosed_area(segments: Floats, lines: int = 400) -> float:
    """Area between closed outlines given as unordered segments (e, 2, 2): even-odd lengths on scan lines."""
    a, b = segments[:, 0], segments[:, 1]
    low, high = float(segments[..., 1].min()), float(segments[..., 1].max())
    covered = 0.0
    for level in low + (high - low) * (np.arange(lines) + 0.5) / lines:
        hit = (a[:, 1] > level) != (b[:, 1] > level)
        part = (level - a[hit, 1]) / (b[hit, 1] - a[hit, 1])
        x = np.sort(a[hit, 0] + part * (b[hit, 0] - a[hit, 0]))
        covered += float((x[1::2] - x[::2]).sum())
    return covered * (high - low) / lines


def _total_length(segments: Floats) -> float:
    return float(np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1).sum())


def _resampled(segments: Floats, times: Floats, step: float) -> tuple[Floats, Floats]:
    """Points (r, 2) at most `step` apart on unordered segments, and the times there."""
    length = np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1)
    pieces = np.maximum(1, np.ceil(length / step)).astype(np.int64)
    which = np.repeat(np.arange(len(segments)), pieces)
    number = np.arange(len(which)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    part = number / pieces[which]
    points = segments[which, 0] + part[:, None] * (segments[which, 1] - segments[which, 0])
    values = times[which, 0] + part * (times[which, 1] - times[which, 0])
    # A border finer than the grid needs one point per cell, not all of them.
    _, kept = np.unique(np.floor(points / (0.4 * step)).astype(np.int64), axis=0, return_index=True)
    return points[kept], values[kept]


def _grid(low: Floats, high: Floats, step: float) -> Floats:
    """Points (g, 2) of a triangular lattice over a rectangle."""
    rows = np.arange(low[1] + 0.5 * step, high[1], step * np.sqrt(0.75))
    columns = np.arange(low[0], high[0] + step, step)
    x = columns[None, :] + 0.5 * step * (np.arange(len(rows)) % 2)[:, None]
    return np.stack([x, np.broadcast_to(rows[:, None], x.shape)], axis=-1).reshape(-1, 2)


def _inside(points: Floats, segments: Floats) -> NDArray[np.bool_]:
    """True for points (p, 2) inside closed outlines given as unordered segments (even-odd rule)."""
    if not len(points):
        return np.zeros(0, dtype=bool)
    # Sorted by height, each segment meets a contiguous run of points: no point-by-segment table is needed.
    order = np.argsort(points[:, 1], kind="stable")
    x, y = points[order, 0], points[order, 1]
    odd = np.zeros(len(points), dtype=bool)
    for (ax, ay), (bx, by) in segments:
        if ay > by:
            ax, ay, bx, by = bx, by, ax, ay
        first, last = np.searchsorted(y, (ay, by), side="left")
        if first < last:
            run = slice(first, last)
            odd[run] ^= x[run] < ax + (y[run] - ay) / (by - ay) * (bx - ax)
    inside = np.empty(len(points), dtype=bool)
    inside[order] = odd
    return inside
