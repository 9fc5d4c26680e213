"""Lids: a surface cut with a plane and closed with a flat lid, which is the window."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from bemescape.errors import WindowError
from bemescape.surface.compartments import face_parts
from bemescape.surface.surface import triangle_areas_normals
from bemescape.surface.winding import winding_numbers
from bemescape.units import format_length
from bemescape.windows.lid_mesh import inside_loops, triangulated_region
from bemescape.windows.mesh_edits import Mesh, cut_along_level, face_pairs, mesh_edges
from bemescape.windows.wall import Wall
from bemescape.windows.window import Lid, Window, shown_place

__all__ = ["with_lid"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]

#: A vertex closer to the plane than this part of an edge is moved onto it instead of cutting a sliver off.
_SNAP = 0.01
#: A vertex closer to the plane than this part of the surface's size lies in it.
_IN_PLANE = 1e-9
#: Openings named in a message, at most.
_SHOWN = 6


@dataclass(frozen=True, eq=False)
class _Opening:
    """One connected piece of the section of the volume with the plane: an outer loop and the holes in it.

    Each loop holds vertex numbers (k,) in order, the outer one counter-clockwise seen against the normal.
    """

    loops: tuple[Ints, ...]
    centre: Floats
    area: float
    beyond: int


def with_lid(wall: Wall, window: Window, lid: Lid, before: Sequence[str]) -> tuple[Wall, list[str]]:
    """The wall without what lies beyond a lid, closed by the lid, and a remark.

    Strategy: cut all faces along the plane; what hangs together beyond the plane is a piece, and the border of the
    pieces in the plane forms loops. The opening that is meant is chosen by a point, its piece is removed together with
    shells inside it, and the loops are filled. Nothing else changes, except that a vertex within 1 % of an edge from
    the plane is moved onto it. Other openings of the plane stay open passages.

    Parameters
    ----------
    wall : Wall
    window : Window
    lid : Lid
    before : sequence of str
        Names of the lids placed before; this one gets the number len(before).

    Raises
    ------
    WindowError
        The plane misses; it is not clear which opening is meant; what lies beyond hangs on by more than one.
    """
    surface = wall.surface
    origin, normal = np.array(lid.point_um), np.array(lid.normal)
    height = (surface.vertices - origin) @ normal
    _refuse_a_miss(window, height, surface.vertices)
    beyond = height > _IN_PLANE * wall.diagonal
    mesh, height = cut_along_level(
        Mesh(surface.vertices, surface.faces, np.arange(len(surface.faces))), height, 0.0, snap=_SNAP
    )
    beyond = np.append(beyond, np.zeros(len(height) - len(beyond), bool))
    piece = _pieces_beyond(mesh, height, beyond, normal)
    if (piece < 0).all():
        _refuse_a_miss(window, np.minimum(height, 0.0), mesh.vertices)
    flat = (mesh.vertices - origin) @ _axes(normal).T
    openings = _openings(window, mesh, piece, flat)
    opening = _chosen(window, lid, flat, openings)
    shared = [other for other in openings if other.beyond == opening.beyond]
    if len(shared) > 1:
        raise WindowError(
            f"what lies beyond window {window.name!r} hangs on by {len(shared)} openings of the plane, around "
            f"{_centres(shared)}: a lid on one of them does not cut it off; tilt or move the plane"
        )
    closed = _closed(wall, mesh, piece == opening.beyond, opening, normal, len(before))
    lost = surface.volume - closed.surface.volume
    return closed, [
        f"the lid {window.name!r} of {opening.area:.4g} µm² at {shown_place(opening.centre)} cuts off "
        f"{lost:.4g} µm³ ({lost / surface.volume:.2%} of the volume)"
        + ("; should its normal point the other way?" if lost > 0.5 * surface.volume else "")
    ]


def _refuse_a_miss(window: Window, height: Floats, vertices: Floats) -> None:
    if (height > 0.0).any() and (height < 0.0).any():
        return
    highest, lowest = float(height.max()), float(height.min())
    if lowest >= 0.0:
        nearest, gap, side = (
            int(height.argmin()),
            lowest,
            "lies wholly on the side that its normal points to",
        )
        remedy = "turn the normal around or move the point"
    else:
        nearest, gap, side = int(height.argmax()), abs(highest), "ends before it"
        remedy = "move the point against the normal"
    raise WindowError(
        f"the lid {window.name!r} misses the surface, which {side}, {format_length(gap)} away at "
        f"{shown_place(vertices[nearest])}; {remedy}, and check that it is in the unit of the surface"
    )


def _pieces_beyond(mesh: Mesh, height: Floats, was_beyond: Mask, normal: Floats) -> Ints:
    """Number of the piece beyond the plane that each face (m,) belongs to; −1 for faces on the kept side.

    `was_beyond` (n,) marks vertices beyond the plane before they were taken to lie on it.
    """
    of_face = height[mesh.faces]
    beyond = of_face.max(axis=1) > 0.0
    # Of a face in the plane itself the volume lies behind its normal; one that was put there is cut off.
    flat = (of_face == 0.0).all(axis=1)
    _, normals = triangle_areas_normals(mesh.vertices, mesh.faces)
    beyond[flat] = ((normals[flat] @ normal) < 0.0) | was_beyond[mesh.faces[flat]].any(axis=1)
    index = np.flatnonzero(beyond)
    piece = np.full(len(mesh.faces), -1)
    if len(index):
        pairs = face_pairs(mesh.faces[index])
        graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(index), len(index)))
        piece[index] = connected_components(graph, directed=False)[1]
    return piece


def _openings(window: Window, mesh: Mesh, piece: Ints, flat: Floats) -> list[_Opening]:
    """The openings of the plane, largest first; `flat` (n, 2) are the vertices' coordinates in it.

    Pieces of one opening get one number in `piece`.
    """
    loops, owner = _loops(window, mesh, piece)
    areas = np.array([_signed_area(flat[loop]) for loop in loops])
    outer = np.flatnonzero(areas > 0.0)
    holes: dict[int, list[int]] = {int(number): [] for number in outer}
    for hole in np.flatnonzero(areas <= 0.0).tolist():
        start = flat[loops[hole][:1]]
        wider = outer[areas[outer] > -areas[hole]].tolist()
        around = [number for number in wider if inside_loops(start, [flat[loops[number]]])[0]]
        if around:
            holes[min(around, key=lambda number: float(areas[number]))].append(hole)
    # Pieces that the same opening touches, such as an obstacle through the plane, go together.
    same = np.arange(int(piece.max()) + 1)
    for number, inner in holes.items():
        for k in inner:
            same[same == same[owner[k]]] = same[owner[number]]
    piece[piece >= 0] = same[piece[piece >= 0]]
    found = [
        _Opening(
            tuple(loops[k] for k in (number, *inner)),
            mesh.vertices[loops[number]].mean(axis=0),
            float(areas[number] + areas[inner].sum()),
            int(same[owner[number]]),
        )
        for number, inner in holes.items()
    ]
    return sorted(found, key=lambda opening: -opening.area)


def _axes(normal: Floats) -> Floats:
    """Two unit vectors (2, 3) of the plane that make a right-handed frame with its normal."""
    aside = np.cross(normal, np.eye(3)[np.abs(normal).argmin()])
    first = aside / np.linalg.norm(aside)
    return np.stack([first, np.cross(normal, first)])


def _loops(window: Window, mesh: Mesh, piece: Ints) -> tuple[list[Ints], list[int]]:
    """Borders of the pieces as loops of vertices, volume on their left seen against the normal, and their pieces."""
    edges, of_face = mesh_edges(mesh.faces)
    half = of_face.ravel()
    tail, head = mesh.faces.ravel(), np.roll(mesh.faces, -1, axis=1).ravel()
    side = np.repeat(piece, 3)
    kept_edge = np.zeros(len(edges), bool)
    kept_edge[half[side < 0]] = True
    border = np.flatnonzero((side >= 0) & kept_edge[half])
    # The lid closes the kept side: its edges run as those of the piece that is cut off.
    following = dict(
        zip(tail[border].tolist(), zip(head[border].tolist(), side[border].tolist(), strict=True), strict=True)
    )
    if len(following) < len(border):
        crowded = int(np.flatnonzero(np.bincount(tail[border]) > 1)[0])
        raise WindowError(
            f"the plane of lid {window.name!r} touches the surface at a single point, "
            f"{shown_place(mesh.vertices[crowded])}, so that its openings run into one another; move its point a "
            "little along the normal"
        )
    loops, owner = [], []
    while following:
        start = at = next(iter(following))
        loop = []
        while at in following:
            loop.append(at)
            at, number = following.pop(at)
        if at == start and len(loop) > 2:
            loops.append(np.array(loop))
            owner.append(number)
    return loops, owner


def _signed_area(points: Floats) -> float:
    x, y = points[:, 0], points[:, 1]
    return 0.5 * float((x * np.roll(y, -1) - np.roll(x, -1) * y).sum())


def _chosen(window: Window, lid: Lid, flat: Floats, openings: list[_Opening]) -> _Opening:
    """The opening that is meant; `flat` (n, 2) are the vertices' coordinates in the plane."""
    if len(openings) == 1:
        return openings[0]
    place = np.array([lid.point_um if lid.near_um is None else lid.near_um]) - np.array(lid.point_um)
    pick = place @ _axes(np.array(lid.normal)).T
    holding = [opening for opening in openings if inside_loops(pick, [flat[loop] for loop in opening.loops])[0]]
    if len(holding) == 1:
        return holding[0]
    if lid.near_um is not None:
        gaps = [min(float(np.linalg.norm(flat[loop] - pick, axis=1).min()) for loop in o.loops) for o in openings]
        order = np.argsort(gaps)
        if gaps[order[0]] < 0.5 * gaps[order[1]]:
            return openings[int(order[0])]
    raise WindowError(
        f"the plane of lid {window.name!r} makes {len(openings)} openings, around {_centres(openings)}, and its point "
        "lies in none of them; move the point into the one that is meant, or name it with 'near'"
    )


def _centres(openings: Sequence[_Opening]) -> str:
    shown = ", ".join(shown_place(opening.centre) for opening in openings[:_SHOWN])
    return shown + (f" and {len(openings) - _SHOWN} more" if len(openings) > _SHOWN else "")


def _closed(wall: Wall, mesh: Mesh, cut_off: Mask, opening: _Opening, normal: Floats, number: int) -> Wall:
    """What the lid leaves, with the lid."""
    vertices = mesh.vertices.copy()
    rim = np.concatenate(opening.loops)
    # Vertices that were taken to lie on the plane are put there; the lid is then flat to rounding.
    level = float(np.median(vertices[rim] @ normal))
    vertices[rim] -= np.outer(vertices[rim] @ normal - level, normal)
    axes = _axes(normal)
    origin = vertices[rim[0]]
    inner, triangles = triangulated_region([(vertices[loop] - origin) @ axes.T for loop in opening.loops])
    lid_faces = np.concatenate([rim, len(vertices) + np.arange(len(inner))])[triangles]
    vertices = np.concatenate([vertices, origin + inner @ axes])

    beyond = np.concatenate([vertices[mesh.faces[cut_off]], vertices[lid_faces[:, ::-1]]])
    keep = ~cut_off & ~_shells_inside(vertices, mesh.faces, cut_off, beyond)
    faces = np.concatenate([mesh.faces[keep], lid_faces])
    parent = np.concatenate([mesh.parent[keep], np.full(len(lid_faces), -1)])
    used, faces = np.unique(faces, return_inverse=True)
    source = np.where(parent >= 0, wall.source_face[parent], -1)
    lid_of = np.where(parent >= 0, wall.lid_of[parent], number)
    surface = replace(wall.surface, vertices=vertices[used], faces=faces.reshape(-1, 3), face_data={}, vertex_data={})
    return Wall(surface, wall.given, source, lid_of)


def _shells_inside(vertices: Floats, faces: Ints, cut_off: Mask, beyond: Floats) -> Mask:
    """Faces (m,) of whole shells that lie within what is cut off."""
    part = face_parts(faces)
    inside = np.zeros(len(faces), bool)
    apart = np.setdiff1d(np.unique(part), np.unique(part[cut_off]))
    if len(apart):
        first = np.array([int(np.flatnonzero(part == number)[0]) for number in apart])
        winding = winding_numbers(vertices[faces[first, 0]], beyond)
        inside = np.isin(part, apart[winding > 0.5])
    return inside
