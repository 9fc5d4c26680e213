"""Geometry of a picture as arrays: smooth shading, rims, outlines, standard views, dashes."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = [
    "View",
    "ViewName",
    "border_edges",
    "corner_normals",
    "corner_values",
    "crossings",
    "dashes",
    "principal_axes",
    "standard_view",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
ViewName = Literal["front", "side", "top"]

# Panels that meet at a sharper angle than this are shaded as an edge, not as one smooth skin.
_CREASE = math.cos(math.radians(50.0))
# Two principal moments closer than this belong to a round shape: its axes would follow the noise of the mesh.
_ROUND = 0.03


@dataclass(frozen=True)
class View:
    """A direction of sight: `towards` points from the shape to the eye, `up` up in the picture; unit (3,)."""

    towards: Floats
    up: Floats

    @property
    def right(self) -> Floats:
        """Unit vector (3,) to the right in the picture."""
        return np.asarray(np.cross(self.up, self.towards))


def border_edges(faces: Ints, group: Ints) -> Ints:
    """Edges (k, 2) between panels of different `group` (m,), as vertex numbers."""
    edges = np.sort(faces[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    owner = np.repeat(group, 3)
    order = np.lexsort((edges[:, 1], edges[:, 0]))
    edges, owner = edges[order], owner[order]
    same = (edges[1:] == edges[:-1]).all(axis=1)
    return np.unique(edges[1:][same & (owner[1:] != owner[:-1])], axis=0)


def corner_values(faces: Ints, values: Floats, areas: Floats, group: Ints) -> Floats:
    """Panel values (m,) averaged to the corners (m, 3) of panels, weighted by area, within each `group` (m,).

    Corners of a group see that group's panels only, so that the wall's times do not leak into a window.
    """
    _, groups = np.unique(group, return_inverse=True)
    slots = faces * (int(groups.max(initial=0)) + 1) + groups[:, None]
    _, slot = np.unique(slots, return_inverse=True)
    slot = slot.reshape(faces.shape)
    # A zero-area panel has no weight; the smallest positive float keeps its corners defined.
    weight = np.repeat(np.maximum(areas, np.finfo(np.float64).tiny), 3)
    total = np.bincount(slot.ravel(), weights=weight)
    summed = np.bincount(slot.ravel(), weights=weight * np.repeat(values, 3))
    return np.asarray((summed / total)[slot])


def corner_normals(vertices: Floats, faces: Ints, normals: Floats) -> Floats:
    """Shading normals (m, 3, 3) of the corners of panels: smooth, but not across a crease.

    Weighted by the angle of each panel at the corner (Thürmer & Wüthrich 1998): the many small panels beside
    a rim lie on few flat triangles of the segmentation, and an unweighted mean would show them.
    """
    corners = vertices[faces]
    following = np.roll(corners, -1, axis=1) - corners
    previous = np.roll(corners, 1, axis=1) - corners
    length = np.linalg.norm(following, axis=2) * np.linalg.norm(previous, axis=2)
    cosine = np.einsum("ijk,ijk->ij", following, previous) / np.maximum(length, 1e-300)
    angle = np.arccos(np.clip(cosine, -1.0, 1.0)).ravel()

    corner_vertex = faces.ravel()
    corner_face = np.repeat(np.arange(len(faces)), 3)
    order = np.argsort(corner_vertex, kind="stable")
    counts = np.bincount(corner_vertex, minlength=len(vertices))
    first = np.cumsum(counts) - counts
    # All pairs (corner, other corner at the same vertex), one round of the vertex's ring at a time.
    total = np.zeros((len(corner_vertex), 3))
    for step in range(int(counts.max(initial=0))):
        here = np.flatnonzero(step < counts[corner_vertex])
        other = order[first[corner_vertex[here]] + step]
        there = normals[corner_face[other]]
        smooth = np.einsum("ij,ij->i", normals[corner_face[here]], there) > _CREASE
        total[here] += np.where(smooth, angle[other], 0.0)[:, None] * there
    size = np.linalg.norm(total, axis=1, keepdims=True)
    own = normals[corner_face]
    shaded = np.where(size > 1e-12, total / np.maximum(size, 1e-300), own)
    return np.asarray(shaded.reshape(len(faces), 3, 3))


def crossings(corners: Floats, height: Floats) -> tuple[Floats, Ints, tuple[Ints, Ints, Floats]]:
    """Where a function that is linear on each triangle passes 0.

    Parameters
    ----------
    corners : (m, 3, 3) float64
        Corners of the triangles.
    height : (m, 3) float64
        The function at the corners.

    Returns
    -------
    segments : (k, 2, 3) float64
        One per crossed triangle, in any order.
    triangles : (k,) int64
        Their numbers.
    weights : (k, 2) int64, (k, 2) int64, (k, 2) float64
        Each end lies between these two corners of its triangle, at this part of the way from the first.
    """
    # A corner at exactly 0 counts as above it: every triangle is then crossed in two points or in none.
    height = np.where(height == 0.0, np.finfo(np.float64).tiny, height)
    triangles = np.flatnonzero((height.min(axis=1) < 0.0) & (height.max(axis=1) > 0.0))
    height, corners = height[triangles], corners[triangles]
    # The lone corner is the one on its own side; the two edges that meet there are crossed.
    above = (height > 0.0).sum(axis=1)
    lone = np.where(above == 1, np.argmax(height, axis=1), np.argmin(height, axis=1))
    start = np.stack([lone, lone], axis=1)
    stop = np.stack([(lone + 1) % 3, (lone + 2) % 3], axis=1)
    row = np.arange(len(triangles))[:, None]
    part = height[row, start] / (height[row, start] - height[row, stop])
    ends = corners[row, start] + part[..., None] * (corners[row, stop] - corners[row, start])
    return ends, triangles, (start, stop, part)


def principal_axes(centroids: Floats, areas: Floats) -> tuple[Floats, Floats]:
    """Centre (3,) and principal axes (3, 3), one per row, longest first, of panels weighted by area.

    Axes of a round shape (equal moments) are taken from the coordinate axes, so that they do not follow the
    noise of its mesh. Signs are left open; `standard_view` fixes them.
    """
    weights = areas / areas.sum()
    centre = weights @ centroids
    arm = centroids - centre
    moments, vectors = np.linalg.eigh(arm.T @ (weights[:, None] * arm))
    moments, axes = moments[::-1], vectors.T[::-1].copy()
    start = 0
    while start < 3:
        stop = start + 1
        while stop < 3 and moments[stop - 1] - moments[stop] <= _ROUND * moments[0]:
            stop += 1
        if stop - start > 1:
            axes[start:stop] = _nearest_coordinate_axes(axes[start:stop])
        start = stop
    return centre, axes


def _nearest_coordinate_axes(basis: Floats) -> Floats:
    """Orthonormal basis of the span of `basis` (k, 3) that follows the coordinate axes."""
    projector = basis.T @ basis
    chosen: list[Floats] = []
    left = projector.copy()
    for _ in range(len(basis)):
        axis = int(np.argmax(np.round(np.diag(left), 6)))
        direction = left[axis] / np.linalg.norm(left[axis])
        chosen.append(direction)
        left = left - np.outer(direction, direction)
    return np.array(chosen)


def standard_view(result: EscapeResult, name: ViewName) -> View:
    """One of three views along the principal axes of the shape, on the side where the windows face the eye.

    front: along the shortest axis, the longest lies across; side: along the longest; top: along the middle.
    """
    _, (longest, middle, shortest) = principal_axes(result.panel_centroids, result.panel_areas_um2)
    towards, up = {
        "front": (shortest, middle),
        "side": (longest, middle),
        "top": (middle, shortest),
    }[name]
    return View(_window_side(result, towards), _window_side(result, up))


def _window_side(result: EscapeResult, axis: Floats) -> Floats:
    """`axis` or its reverse: where more window area faces; else by the third moment of the shape."""
    window = result.panel_window >= 0
    areas = result.panel_areas_um2
    facing = float(areas[window] @ (result.panel_normals[window] @ axis)) / max(float(areas[window].sum()), 1e-300)
    if abs(facing) > 0.05:
        return axis if facing > 0.0 else -axis
    along = result.panel_centroids @ axis
    along = along - np.average(along, weights=areas)
    spread = math.sqrt(float(np.average(along**2, weights=areas)))
    skew = float(np.average(along**3, weights=areas)) / max(spread**3, 1e-300)
    if abs(skew) > 1e-3:
        return axis if skew > 0.0 else -axis
    # Symmetric: the largest component points the positive way.
    return axis if axis[int(np.argmax(np.round(np.abs(axis), 6)))] > 0.0 else -axis


def dashes(path: Floats, dash: float) -> Floats:
    """Segments (k, 2, 3) of a polyline (p, 3), drawn as dashes of about length `dash` with equal gaps.

    A dash follows the bends of the path: a chord would dive under a convex wall.
    """
    steps = np.linalg.norm(np.diff(path, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    if along[-1] <= 0.0:
        return np.zeros((0, 2, 3))
    # An odd number of pieces: the path begins and ends with a dash.
    marks = np.linspace(0.0, along[-1], 2 * max(1, round(along[-1] / dash / 2.0)))
    stops = np.unique(np.concatenate([marks, along]))
    points = np.column_stack([np.interp(stops, along, path[:, axis]) for axis in range(3)])
    drawn = np.searchsorted(marks, 0.5 * (stops[1:] + stops[:-1])) % 2 == 1
    return np.asarray(np.stack([points[:-1], points[1:]], axis=1)[drawn])
