"""Contact patches: the wall closer than a distance to another mesh."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import WindowError
from bemescape.surface.compartments import face_parts
from bemescape.surface.surface import triangle_areas_normals
from bemescape.units import format_length
from bemescape.windows.mesh_edits import Mesh, bisected_to_size, cut_along_level
from bemescape.windows.nearest import NearestTriangle
from bemescape.windows.patch import SMALLEST, Patch, rim_radius
from bemescape.windows.wall import Wall
from bemescape.windows.window import Near, Window, shown_place

__all__ = ["contact_patch"]

Floats = NDArray[np.float64]

#: With no contact within this many distances the two meshes are taken to be in different units or frames.
FAR_APART = 10.0
#: Faces that the contact is first looked for with, at most about.
_SEARCH_FACES = 60_000
#: A piece is left out where its area is below this part of the largest piece's: a speck that no panel resolves.
_SPECK = 0.01
#: Places inside each piece that are remembered, to find it again on another mesh.
_STARTS = 300


@dataclass(frozen=True, eq=False)
class _BeyondDistance:
    """Distance to the other mesh less the contact distance, negative in contact."""

    other: NearestTriangle
    distance_um: float

    def __call__(self, points: Floats) -> Floats:
        return np.asarray(self.other.distance(points) - self.distance_um)


def contact_patch(wall: Wall, window: Window, near: Near) -> tuple[Patch, list[str]]:
    """The part of the wall that is closer than a distance to another mesh, and remarks with its pieces.

    Strategy: bisect the wall where a piece of contact could hide between its vertices, then cut it along the distance;
    the pieces found give the rim that panels are graded to, and each graded mesh is cut again by the exact distance.

    Raises
    ------
    WindowError
        There is no contact, all of the wall is in contact, or the contact is too small.
    """
    if near.distance_um < SMALLEST * wall.diagonal:
        raise WindowError(
            f"window {window.name!r}: the distance {format_length(near.distance_um)} is below {SMALLEST:g} of the "
            f"surface's size ({format_length(SMALLEST * wall.diagonal)}); check the units"
        )
    level = _BeyondDistance(NearestTriangle(near.other.vertices[near.other.faces]), near.distance_um)
    mesh = _searched(wall, level)
    value = level(mesh.vertices)
    if not (value < 0.0).any():
        _refuse_no_contact(window, near, float(value.min()) + near.distance_um, mesh.vertices[value.argmin()])
    mesh, value = cut_along_level(mesh, value, 0.0, snap=0.02, refine=level)
    members = (value[mesh.faces] <= 0.0).all(axis=1) & (level(mesh.vertices[mesh.faces].mean(axis=1)) < 0.0)
    if members.all():
        raise WindowError(
            f"window {window.name!r}: all of the wall is closer than {format_length(near.distance_um)} to "
            f"{near.other.name!r}, so that no wall is left; is it the same mesh? Choose a smaller distance"
        )
    if not members.any():
        _refuse_no_contact(window, near, float(value.min()) + near.distance_um, mesh.vertices[value.argmin()])
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    index = np.flatnonzero(members)
    piece = face_parts(mesh.faces[index])
    size: Floats = np.bincount(piece, weights=areas[index]).astype(np.float64)
    kept = np.flatnonzero(size >= _SPECK * size.max())
    kept = kept[np.argsort(-size[kept], kind="stable")]
    radii, starts = [], []
    for number in kept:
        own = np.zeros(len(mesh.faces), bool)
        own[index[piece == number]] = True
        radii.append(rim_radius(mesh.vertices, mesh.faces, areas, own)[1])
        middles = mesh.vertices[mesh.faces[own]].mean(axis=1)
        # Deepest first, so that the nearest vertex of any other mesh lies inside as well.
        deepest = np.argsort(level(middles), kind="stable")[: max(1, len(middles) // 2)]
        starts.append(middles[deepest[:: max(1, len(deepest) // _STARTS)]])
    radius = min(radii)
    if radius < SMALLEST * wall.diagonal:
        raise WindowError(
            f"window {window.name!r}: the contact near {shown_place(starts[0][0])} is only {format_length(radius)} in "
            "size and cannot be resolved; enlarge the distance"
        )
    members[index[~np.isin(piece, kept)]] = False
    rim, _ = rim_radius(mesh.vertices, mesh.faces, areas, members)
    x, y, z = (float(part) for part in starts[0][0])
    patch = Patch(
        window.name, (x, y, z), int(wall.nearest.closest(starts[0][:1])[2][0]), radius,
        np.unique(mesh.parent[members]), level, np.concatenate(starts), rim[:, 0], rim[:, 1],
    )  # fmt: skip
    return patch, [_remark(window, near, size, len(kept))]


def _searched(wall: Wall, level: _BeyondDistance) -> Mesh:
    """The wall with edges so short that no contact larger than the smallest edge hides between them."""
    off = level(wall.middles) - wall.reaches
    area = float(wall.surface.areas[off < 0.0].sum())
    smallest = max(0.25 * level.distance_um, float(np.sqrt(area / (0.433 * _SEARCH_FACES))))
    mesh = Mesh(wall.surface.vertices, wall.surface.faces, np.arange(len(wall.surface.faces)))
    # What is further off than an edge is long cannot be in contact along it.
    return bisected_to_size(
        mesh,
        lambda points: np.maximum(smallest, level(points)),
        most_faces=len(mesh.faces) + 4 * _SEARCH_FACES,
    )


def _refuse_no_contact(window: Window, near: Near, closest: float, place: Floats) -> None:
    other, limit = near.other.name, format_length(near.distance_um)
    if closest > FAR_APART * near.distance_um:
        low, high = near.other.bounds
        raise WindowError(
            f"window {window.name!r}: the wall comes no closer than {format_length(closest, 4)} to {other!r} (near "
            f"{shown_place(place)}), more than {FAR_APART:g} times the distance of {limit}; the two meshes may be in "
            f"different units or frames: {other!r} extends from {shown_place(low)} to {shown_place(high)}"
        )
    raise WindowError(
        f"window {window.name!r}: the wall comes no closer than {format_length(closest, 4)} to {other!r} (near "
        f"{shown_place(place)}), and the distance is {limit}; enlarge the distance"
    )


def _remark(window: Window, near: Near, size: Floats, kept: int) -> str:
    areas = np.sort(size)[::-1]
    total = areas[:kept].sum()
    shown = ", ".join(f"{area:.3g}" for area in areas[: min(kept, 8)]) + (" …" if kept > 8 else "")
    text = (
        f"window {window.name!r} touches {near.other.name!r} in {kept} piece{'s' * (kept > 1)} of together "
        f"{total:.4g} µm²" + (f" ({shown} µm²)" if kept > 1 else "")
    )
    if kept < len(areas):
        specks = len(areas) - kept
        text += f"; {specks} speck{'s' * (specks > 1)} of together {areas[kept:].sum() / total:.1%} left out"
    return text
