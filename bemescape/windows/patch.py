"""Where on the wall a window lies: found or refused, before any mesh is cut."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import trimesh
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.surface.compartments import face_parts
from bemescape.units import format_length
from bemescape.windows.mesh_edits import Mesh, mesh_edges
from bemescape.windows.rims import rim_edges, segment_distance
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Labels, Window, shown_place

__all__ = ["Patch", "connected_vertices", "disc_patch", "label_patch", "patch_of_faces", "rim_radius"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]

#: A disc's centre may lie this part of its radius off the wall; further off, the circle cut out is much smaller.
FARTHEST_OFF = 0.5
#: Smallest radius, in lengths of the bounding box's diagonal: single-precision offsets still resolve its panels.
SMALLEST = 1e-5


@dataclass(frozen=True, eq=False)
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
    faces : (k,) int64
        Faces of the surface that belong to the window; where there is a level, faces that it reaches into.
    level : callable or None
        (k, 3) points -> (k,) distance in µm to the line along which the rim is to be cut, negative inside. None where
        the window consists of whole faces.
    starts : (s, 3) float64
        Points inside each piece of the window: where the level is negative elsewhere, there is wall.
    rim_start, rim_end : (s, 3) float64
        Its rim as it was found; empty for a disc, and for a window without a rim.
    disc : Disc or None
        Centre and radius of a round window.
    """

    name: str
    touchdown_um: tuple[float, float, float]
    touchdown_face: int
    radius_um: float
    faces: Ints
    level: Callable[[Floats], Floats] | None
    starts: Floats
    rim_start: Floats
    rim_end: Floats
    disc: Disc | None = None

    def distance_to_rim(self, points: Floats) -> Floats:
        """Straight-line distance (k,) from points (k, 3) to the rim; infinite if there is none."""
        if self.disc is not None and self.level is not None:
            return np.abs(self.level(points))
        if len(self.rim_start) == 0:
            return np.full(len(points), np.inf)
        return segment_distance(points, self.rim_start, self.rim_end, candidates=4)[0]


@dataclass(frozen=True)
class _BeyondSphere:
    """Distance beyond the sphere of a disc, negative inside."""

    disc: Disc

    def __call__(self, points: Floats) -> Floats:
        return np.asarray(np.linalg.norm(points - np.asarray(self.disc.centre_um), axis=1) - self.disc.radius_um)


def disc_patch(wall: Wall, window: Window, disc: Disc) -> tuple[Patch, list[str]]:
    """The patch of a disc, and remarks.

    Raises
    ------
    WindowError
        It misses the wall, is too small, swallows all of a shell, or sits on two sheets.
    """
    surface = wall.surface
    centre = np.asarray(disc.centre_um)
    if disc.radius_um < SMALLEST * wall.diagonal:
        raise WindowError(
            f"window {window.name!r} has a radius of {format_length(disc.radius_um)}, below {SMALLEST:g} of the "
            f"surface's size ({format_length(SMALLEST * wall.diagonal)}): its panels cannot be resolved; check the "
            "units"
        )
    # The wall is no further off than the nearest middle of a face.
    to_middles = np.linalg.norm(wall.middles - centre, axis=1)
    candidates = np.flatnonzero(to_middles - wall.reaches <= max(disc.radius_um, float(to_middles.min())))
    closest = trimesh.triangles.closest_point(wall.corners[candidates], np.broadcast_to(centre, (len(candidates), 3)))
    gaps = np.linalg.norm(closest - centre, axis=1)
    first = int(gaps.argmin())
    nearest, gap, touchdown = int(candidates[first]), float(gaps[first]), closest[first]
    if gap > FARTHEST_OFF * disc.radius_um:
        raise WindowError(
            f"window {window.name!r} lies {format_length(gap)} off the wall (limit "
            f"{format_length(FARTHEST_OFF * disc.radius_um)}, half its radius); move its centre to the nearest point "
            f"of the wall, {shown_place(touchdown)}, and check that centre and surface are in the same unit"
        )
    # Faces that the ball touches, split into sheets that hang together within it.
    within = gaps < disc.radius_um
    touched, gaps, closest = candidates[within], gaps[within], closest[within]
    sheet = face_parts(surface.faces[touched])
    own = sheet[np.flatnonzero(touched == nearest)[0]]
    of_part = surface.faces[wall.parts == wall.parts[nearest]]
    farthest = float(np.linalg.norm(surface.vertices[of_part] - centre, axis=2).max())
    if farthest <= disc.radius_um:
        raise WindowError(
            f"window {window.name!r} with radius {format_length(disc.radius_um)} swallows the whole wall, which ends "
            f"{format_length(farthest)} from its centre; choose a radius below that"
        )
    notes = []
    others = sheet != own
    if others.any():
        other_gap = float(gaps[others].min())
        other = closest[others][gaps[others].argmin()]
        if other_gap < max(2.0 * gap, 1e-3 * disc.radius_um):
            raise WindowError(
                f"window {window.name!r} sits on two sheets of the wall: {shown_place(touchdown)} and "
                f"{shown_place(other)} are {format_length(gap)} and {format_length(other_gap)} from its centre; move "
                "the centre onto the sheet that is meant"
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
    patch = Patch(
        window.name, (x, y, z), nearest, disc.radius_um, touched[sheet == own], _BeyondSphere(disc),
        touchdown[None], none, none, disc,
    )  # fmt: skip
    return patch, notes


def label_patch(wall: Wall, window: Window, labels: Labels) -> Patch:
    """The faces of a label.

    Raises
    ------
    WindowError
        The surface has no such array or value, or lids have cut off all faces that carry it.
    """
    surface = wall.given
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
        some = ", ".join(f"{value:g}" for value in present[:12].astype(float)) + (" …" if len(present) > 12 else "")
        raise WindowError(
            f"window {window.name!r}: no face has the value {labels.value:g} in {labels.array!r}, which holds {some}"
        )
    members = chosen[wall.source_face] & (wall.source_face >= 0)
    if not members.any():
        raise WindowError(
            f"window {window.name!r}: every face with the value {labels.value:g} in {labels.array!r} lies beyond a lid "
            "and is cut off; move the lid or leave out this window"
        )
    return patch_of_faces(wall, window.name, members)


def patch_of_faces(wall: Wall, name: str, members: Mask) -> Patch:
    """The patch that consists of the marked faces (m,) of the wall; at least one."""
    surface = wall.surface
    faces = np.flatnonzero(members)
    rim, radius = rim_radius(surface.vertices, surface.faces, surface.areas, members)
    # The wall side counts too where the window leaves only a strip of it.
    _, rest = rim_radius(surface.vertices, surface.faces, surface.areas, ~members)
    middle = wall.middles[faces]
    innermost = int(np.linalg.norm(middle - middle.mean(axis=0), axis=1).argmin())
    x, y, z = (float(value) for value in middle[innermost])
    if len(rim):
        radius = min(radius, rest)
    return Patch(name, (x, y, z), int(faces[innermost]), radius, faces, None, middle[:0], rim[:, 0], rim[:, 1])


def rim_radius(vertices: Floats, faces: Ints, areas: Floats, members: Mask) -> tuple[Floats, float]:
    """Rim (s, 2, 3) of the marked faces (m,), and the radius of the disc with their ratio of area to rim length."""
    edges, _ = rim_edges(faces, members.astype(np.int64))
    rim = vertices[edges]
    length = float(np.linalg.norm(rim[:, 1] - rim[:, 0], axis=1).sum())
    area = float(areas[members].sum())
    radius = float(np.sqrt(area / np.pi))
    return rim, min(radius, 2.0 * area / length) if length > 0.0 else radius


def connected_vertices(mesh: Mesh, chosen: Mask, starts: Floats | tuple[float, ...]) -> Mask:
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
