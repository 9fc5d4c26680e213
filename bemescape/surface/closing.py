"""Dropping debris, closing small holes, and turning closed parts the right way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.surface.measure import face_volumes, sums
from bemescape.surface.nesting import nesting_depths
from bemescape.surface.repairs import Repair
from bemescape.surface.surface import triangle_areas_normals
from bemescape.surface.topology import border_loops
from bemescape.surface.working import Working
from bemescape.units import format_length

__all__ = [
    "DEBRIS_SHARE",
    "HOLE_SHARE",
    "close_holes",
    "drop_closed_debris",
    "drop_open_scraps",
    "turn_outward",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A separate closed body below this share of the whole volume is debris of the segmentation...
DEBRIS_SHARE = 1e-3
#: ...but a closed part inside another is an obstacle, and a small vesicle is no debris: only specks are
#: dropped.
SPECK_SHARE = 1e-7
#: An open part below this share of the whole area is a scrap; together they may not exceed the second number.
SCRAP_SHARE, SCRAPS_SHARE = 0.01, 0.05
#: A hole is closed if its lid is at most this share of its part's area and lies this flat (spread over
#: radius).
HOLE_SHARE, HOLE_FLATNESS = 0.05, 0.35
#: A hole of three or four edges lacks one face or two: there the lid may be larger, and any lid is as good
#: as another where it is below the second number.
FACE_HOLE_SHARE, TINY_HOLE_SHARE = 0.15, 1e-3


def drop_open_scraps(mesh: Working) -> list[Repair]:
    """Drop small open parts, one repair for each, unless they are a considerable share of the whole."""
    edges = mesh.edges
    count, part = edges.parts()
    is_open = np.zeros(count, dtype=bool)
    is_open[part[edges.order[edges.starts[edges.counts == 1]] // 3]] = True
    area = sums(part, mesh.areas, count)
    total = float(area.sum())
    scrap = is_open & (area < SCRAP_SHARE * total)
    scrap[int(area.argmax())] = False
    if not scrap.any() or area[scrap].sum() > SCRAPS_SHARE * total:
        return []
    # An open scrap has no inside, so nothing is taken from the volume.
    return _dropped(mesh, part, scrap, area, np.zeros(count), "open scrap")


def drop_closed_debris(mesh: Working) -> list[Repair]:
    """Drop closed parts that are a tiny share of the volume, one repair for each."""
    edges = mesh.edges
    count, part = edges.parts()
    if count < 2:
        return []
    signed = _part_volumes(mesh, part, count)
    volume = np.abs(signed)
    area = sums(part, mesh.areas, count)
    whole = np.ones(count, dtype=bool)
    whole[part[edges.order[edges.starts[edges.counts != 2]] // 3]] = False
    share = volume / max(float(volume.max()), np.finfo(float).tiny)
    specks = whole & (share < SPECK_SHARE)
    depth = np.zeros(count, dtype=np.int64)
    small = whole & (share < DEBRIS_SHARE)
    if small.any():
        depth = nesting_depths(mesh.vertices, mesh.faces, np.where(whole[part], part, -1), count)
    debris = specks | (small & ((depth % 2 == 0) | (depth < 0)))
    return _dropped(mesh, part, debris, area, signed, "closed part")


def _dropped(
    mesh: Working, part: Ints, drop: NDArray[np.bool_], area: Floats, volume: Floats, what: str
) -> list[Repair]:
    all_area, all_volume = float(area.sum()), float(np.abs(volume).sum())
    middle = mesh.vertices[mesh.faces].mean(axis=1)
    left = mesh.keeping(~drop[part])
    order = np.argsort(part, kind="stable")
    bounds = np.searchsorted(part[order], np.arange(len(drop) + 1))
    repairs = []
    for k in np.flatnonzero(drop):
        members = order[bounds[k] : bounds[k + 1]]
        where = ", ".join(f"{value:.4g}" for value in middle[members].mean(axis=0))
        share = f"{abs(volume[k]) / all_volume:.2g} of the volume, " if all_volume > 0.0 else ""
        detail = f"{what} of {len(members)} faces around ({where}) µm: {share}{area[k] / all_area:.2g} of the area"
        repairs.append(Repair(left, 1, detail, mesh.face_source[members], -float(volume[k]), -float(area[k])))
    return repairs


def _part_volumes(mesh: Working, part: Ints, count: int) -> Floats:
    return sums(part, face_volumes(mesh.vertices, mesh.faces, mesh.origin), count)


def close_holes(mesh: Working) -> list[Repair]:
    """Close holes that are small and nearly flat, one repair for each; larger ones are left open.

    Three or four edges take one or two triangles; longer rims take a fan around their middle, or are cut
    into triangles by ear clipping where a fan would fold over.
    """
    edges = mesh.edges
    rim = edges.open_half_edges
    if not len(rim):
        return []
    count, part = edges.parts()
    area = sums(part, mesh.areas, count)
    # A lid's edges run against those of the faces around the hole.
    loops = border_loops(edges.head[rim], edges.tail[rim])
    face_at = {(int(edges.head[h]), int(edges.tail[h])): int(h) // 3 for h in rim}
    lids: list[_Lid] = []
    notes: list[tuple[str, Ints]] = []
    for ring in loops:
        sides = list(zip(ring.tolist(), np.roll(ring, -1).tolist(), strict=True))
        if len(ring) < 3 or any(side not in face_at for side in sides):
            continue
        hole = _measured(mesh, ring)
        neighbours = np.array([face_at[side] for side in sides])
        whole = float(area[part[neighbours[0]]])
        if not whole > 0.0:
            continue
        share = hole.area / whole
        limit = FACE_HOLE_SHARE if len(ring) <= 4 else HOLE_SHARE
        flat = len(ring) == 3 or hole.spread <= HOLE_FLATNESS * hole.radius
        tiny = len(ring) == 4 and share < TINY_HOLE_SHARE
        if share > limit or not (flat or tiny):
            continue
        lid = _lid(mesh, hole, neighbours, len(mesh.vertices) + sum(len(made.middle) for made in lids))
        if lid is None:
            continue
        lids.append(lid)
        where = ", ".join(f"{value:.4g}" for value in hole.centre)
        detail = (
            f"hole of {len(ring)} edges around ({where}) µm, {format_length(2.0 * hole.radius)} across, "
            f"{share:.2g} of its part's area"
        )
        notes.append((detail, mesh.face_source[neighbours]))
    if not lids:
        return []
    closed = mesh.adding(
        np.concatenate([lid.middle for lid in lids]), np.concatenate([lid.middle_source for lid in lids])
    )
    closed = closed.with_faces(
        np.concatenate([mesh.faces, *(lid.faces for lid in lids)]),
        np.concatenate([mesh.face_source, *(lid.source for lid in lids)]),
    )
    repairs = []
    for lid, (detail, faces) in zip(lids, notes, strict=True):
        # The volume of a mesh with a hole is that with a fan in the hole, so only what departs from the
        # fan counts.
        added = float(triangle_areas_normals(closed.vertices, lid.faces)[0].sum())
        beyond = float(face_volumes(closed.vertices, lid.faces, lid.hole.centre).sum())
        repairs.append(Repair(closed, 1, detail, faces, beyond, added))
    return repairs


@dataclass(frozen=True)
class _Hole:
    ring: Ints
    centre: Floats
    area: float
    radius: float
    spread: float


@dataclass(frozen=True)
class _Lid:
    hole: _Hole
    faces: Ints
    source: Ints
    middle: Floats
    middle_source: Ints


def _measured(mesh: Working, ring: Ints) -> _Hole:
    points = mesh.vertices[ring]
    centre = points.mean(axis=0)
    spokes = points - centre
    normal = 0.5 * np.cross(spokes, np.roll(spokes, -1, axis=0)).sum(axis=0)
    area = float(np.linalg.norm(normal))
    lids = 0.5 * np.linalg.norm(np.cross(spokes, np.roll(spokes, -1, axis=0)), axis=1).sum()
    heights = spokes @ normal / area if area > 0.0 else np.linalg.norm(spokes, axis=1)
    radius = float(np.linalg.norm(spokes, axis=1).mean())
    return _Hole(ring, centre, max(area, float(lids)), radius, float(np.abs(heights).max()))


def _lid(mesh: Working, hole: _Hole, neighbours: Ints, next_vertex: int) -> _Lid | None:
    """Triangles that close the hole, with the data of the faces beside it; None if they fold over."""
    ring, size = hole.ring, len(hole.ring)
    points = mesh.vertices[ring]
    source = mesh.face_source[neighbours]
    nothing = np.zeros((0, 3)), np.zeros(0, np.int64)
    if size == 3:
        return _Lid(hole, ring[None], source[:1], *nothing)
    if size == 4:
        # The diagonal that folds less.
        ways = (np.array([[0, 1, 2], [0, 2, 3]]), np.array([[1, 2, 3], [1, 3, 0]]))
        best = max(ways, key=lambda way: _least_agreement(points, way))
        return _Lid(hole, ring[best], source[[0, 2]], *nothing)
    around = np.arange(size)
    fan = np.stack([around, np.roll(around, -1), np.full(size, size)], axis=1)
    if _least_agreement(np.vstack([points, hole.centre]), fan) > 0.0:
        return _Lid(hole, np.r_[ring, next_vertex][fan], source, hole.centre[None], mesh.vertex_source[ring[:1]])
    ears = _ears(points)
    if len(ears) != size - 2 or _least_agreement(points, ears) <= 0.0:
        return None
    return _Lid(hole, ring[ears], source[ears[:, 0]], *nothing)


def _least_agreement(points: Floats, triangles: Ints) -> float:
    """Lowest cosine between a triangle's normal and the common one; -1 where a triangle is flat."""
    areas, normals = triangle_areas_normals(points, triangles)
    common = (areas[:, None] * normals).sum(axis=0)
    length = float(np.linalg.norm(common))
    if length == 0.0 or not (areas > 0.0).all():
        return -1.0
    return float((normals @ (common / length)).min())


def _ears(points: Floats) -> Ints:
    import pyvista

    cut = pyvista.PolyData(points, np.r_[len(points), np.arange(len(points))]).triangulate()
    return np.asarray(cut.faces, dtype=np.int64).reshape(-1, 4)[:, 1:]


def turn_outward(mesh: Working) -> Repair | None:
    """Turn closed parts so that normals leave the diffusing volume: outwards, or into an obstacle."""
    edges = mesh.edges
    count, part = edges.parts()
    depth = nesting_depths(mesh.vertices, mesh.faces, part, count)
    volume = _part_volumes(mesh, part, count)
    wrong = (depth >= 0) & (volume * np.where(depth % 2 == 0, 1.0, -1.0) < 0.0)
    turn = wrong[part]
    if not turn.any():
        return None
    inner = int((wrong & (depth % 2 == 1)).sum())
    outer = int(wrong.sum()) - inner
    detail = f"{outer} parts were turned to look outwards and {inner} inner parts to look into the obstacle"
    return Repair(mesh.turned(turn), int(wrong.sum()), detail, mesh.face_source[turn])
