"""Where on the wall a window lies: found or refused, before any mesh is cut."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import trimesh
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.surface.compartments import face_parts
from bemescape.surface.surface import Surface
from bemescape.units import format_length
from bemescape.windows.mesh_edits import Mesh, mesh_edges
from bemescape.windows.window import Disc, Labels, Window

__all__ = ["Patch", "connected_vertices", "find_patches"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A disc's centre may lie this part of its radius off the wall; further off, the circle cut out is much smaller.
FARTHEST_OFF = 0.5
#: Smallest radius, in lengths of the bounding box's diagonal: single-precision offsets still resolve its panels.
SMALLEST = 1e-5


@dataclass(frozen=True)
class Patch:
    """A window located on the wall.

    Attributes
    ----------
    name : str
    touchdown_um : (3,)
        A point of the wall inside the window.
    touchdown_face : int
        The face of the surface it lies on.
    radius_um : float
        Radius of the disc, or of the disc that has the same ratio of area to rim length.
    disc : Disc or None
    faces : (k,) int64
        Faces of the surface, for a window by labels.
    rim_start, rim_end : (s, 3) float64
        Its rim, for a window by labels; empty if it has none.
    """

    name: str
    touchdown_um: tuple[float, float, float]
    touchdown_face: int
    radius_um: float
    disc: Disc | None
    faces: Ints
    rim_start: Floats
    rim_end: Floats

    def distance_to_rim(self, points: Floats) -> Floats:
        """Straight-line distance (k,) from points (k, 3) to the rim; infinite if there is none."""
        if self.disc is not None:
            return np.abs(
                np.linalg.norm(points - np.asarray(self.disc.centre_um), axis=1) - self.disc.radius_um
            )
        if len(self.rim_start) == 0:
            return np.full(len(points), np.inf)
        from bemescape.windows.grade import segment_distance

        return segment_distance(points, self.rim_start, self.rim_end, candidates=4)[0]


def find_patches(surface: Surface, windows: Sequence[Window]) -> tuple[tuple[Patch, ...], tuple[str, ...]]:
    """The patch of each window, and remarks; see `place_windows` for what is refused."""
    if not windows:
        raise WindowError("no window is given: without one nothing can leave; name at least one window")
    names = [window.name for window in windows]
    for name in names:
        if names.count(name) > 1:
            raise WindowError(f"{names.count(name)} windows are called {name!r}; give each a name of its own")
    patches, notes = [], []
    for window in windows:
        if isinstance(window.shape, Disc):
            patch, note = _disc_patch(surface, window, window.shape)
            notes += note
        else:
            patch = _label_patch(surface, window, window.shape)
        patches.append(patch)
    return tuple(patches), tuple(notes)


def _place(point: Floats) -> str:
    return f"({point[0]:.4g}, {point[1]:.4g}, {point[2]:.4g}) µm"


def _disc_patch(surface: Surface, window: Window, disc: Disc) -> tuple[Patch, list[str]]:
    centre = np.asarray(disc.centre_um)
    diagonal = float(np.linalg.norm(surface.bounds[1] - surface.bounds[0]))
    if disc.radius_um < SMALLEST * diagonal:
        raise WindowError(
            f"window {window.name!r} has a radius of {format_length(disc.radius_um)}, below {SMALLEST:g} of the "
            f"surface's size ({format_length(SMALLEST * diagonal)}): its panels cannot be resolved; check the units"
        )
    corners = surface.vertices[surface.faces]
    closest = trimesh.triangles.closest_point(corners, np.broadcast_to(centre, (len(corners), 3)))
    gaps = np.linalg.norm(closest - centre, axis=1)
    nearest = int(gaps.argmin())
    gap, touchdown = float(gaps[nearest]), closest[nearest]
    if gap > FARTHEST_OFF * disc.radius_um:
        raise WindowError(
            f"window {window.name!r} lies {format_length(gap)} off the wall (limit "
            f"{format_length(FARTHEST_OFF * disc.radius_um)}, half its radius); move its centre to the nearest point "
            f"of the wall, {_place(touchdown)}, and check that centre and surface are in the same unit"
        )
    # Faces that the ball touches, split into sheets that hang together within it.
    touched = np.flatnonzero(gaps < disc.radius_um)
    sheet = face_parts(surface.faces[touched])
    own = sheet[np.flatnonzero(touched == nearest)[0]]
    part = face_parts(surface.faces)
    of_part = surface.faces[part == part[nearest]]
    farthest = float(np.linalg.norm(surface.vertices[of_part] - centre, axis=2).max())
    if farthest <= disc.radius_um:
        raise WindowError(
            f"window {window.name!r} with radius {format_length(disc.radius_um)} swallows the whole wall, which ends "
            f"{format_length(farthest)} from its centre; choose a radius below that"
        )
    notes = []
    others = sheet != own
    if others.any():
        other_gap = float(gaps[touched[others]].min())
        other = closest[touched[others][gaps[touched[others]].argmin()]]
        if other_gap < max(2.0 * gap, 1e-3 * disc.radius_um):
            raise WindowError(
                f"window {window.name!r} sits on two sheets of the wall: {_place(touchdown)} and {_place(other)} are "
                f"{format_length(gap)} and {format_length(other_gap)} from its centre; move the centre onto the sheet "
                "that is meant"
            )
        notes.append(
            f"the ball of window {window.name!r} also meets another sheet of the wall, {format_length(other_gap)} from "
            "its centre; only the sheet of the centre belongs to the window"
        )
    if gap > 0.1 * disc.radius_um:
        notes.append(
            f"the centre of window {window.name!r} lies {format_length(gap)} off the wall, so that its radius on the "
            f"wall is about {format_length(float(np.sqrt(disc.radius_um**2 - gap**2)))}"
        )
    x, y, z = (float(value) for value in touchdown)
    none = np.zeros((0, 3))
    return Patch(
        window.name, (x, y, z), nearest, disc.radius_um, disc, np.zeros(0, np.int64), none, none
    ), notes


def _label_patch(surface: Surface, window: Window, labels: Labels) -> Patch:
    if labels.array in surface.face_data:
        chosen = np.asarray(surface.face_data[labels.array]) == labels.value
        present = np.unique(surface.face_data[labels.array])
    elif labels.array in surface.vertex_data:
        chosen = (np.asarray(surface.vertex_data[labels.array]) == labels.value)[surface.faces].all(axis=1)
        present = np.unique(surface.vertex_data[labels.array])
    else:
        known = sorted([*surface.face_data, *surface.vertex_data])
        raise WindowError(
            f"window {window.name!r} asks for the array {labels.array!r}, but {surface.name} has "
            + (f"the arrays {', '.join(map(repr, known))}" if known else "no arrays at all")
            + "; name one of them, or give the window as a disc"
        )
    if not chosen.any():
        some = ", ".join(f"{value:g}" for value in present[:12].astype(float)) + (
            " …" if len(present) > 12 else ""
        )
        raise WindowError(
            f"window {window.name!r}: no face has the value {labels.value:g} in {labels.array!r}, which holds {some}"
        )
    faces = np.flatnonzero(chosen)
    edges, of_face = mesh_edges(surface.faces)
    inside = np.bincount(of_face[chosen].ravel(), minlength=len(edges))
    outside = np.bincount(of_face[~chosen].ravel(), minlength=len(edges))
    rim = surface.vertices[edges[(inside > 0) & (outside > 0)]]
    length = float(np.linalg.norm(rim[:, 1] - rim[:, 0], axis=1).sum())
    area = float(surface.areas[chosen].sum())
    rest = surface.area - area
    # A disc of radius r has 2·area/rim = r; the wall side counts too where the window leaves only a strip of it.
    radius = float(np.sqrt(area / np.pi))
    if length > 0.0:
        radius = min(radius, 2.0 * area / length, 2.0 * rest / length)
    middle = surface.vertices[surface.faces[faces]].mean(axis=1)
    innermost = int(np.linalg.norm(middle - middle.mean(axis=0), axis=1).argmin())
    x, y, z = (float(value) for value in middle[innermost])
    return Patch(window.name, (x, y, z), int(faces[innermost]), radius, None, faces, rim[:, 0], rim[:, 1])


def connected_vertices(
    mesh: Mesh, chosen: NDArray[np.bool_], starts: Floats | tuple[float, ...]
) -> NDArray[np.bool_]:
    """The `chosen` vertices (n,) that edges among them join to those nearest to `starts` (3,) or (k, 3)."""
    index = np.flatnonzero(chosen)
    number = np.full(len(mesh.vertices), -1)
    number[index] = np.arange(len(index))
    edges, _ = mesh_edges(mesh.faces)
    inner = number[edges[chosen[edges].all(axis=1)]]
    graph = coo_matrix((np.ones(len(inner)), (inner[:, 0], inner[:, 1])), shape=(len(index), len(index)))
    label = connected_components(graph, directed=False)[1]
    _, nearest = cKDTree(mesh.vertices[index]).query(np.atleast_2d(np.asarray(starts)))
    out = np.zeros(len(mesh.vertices), bool)
    out[index[np.isin(label, np.unique(label[nearest]))]] = True
    return out
