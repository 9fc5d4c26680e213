"""The last resort: a new closed surface around what a damaged mesh encloses.

Strategy: lay a grid over the box; for each grid point near the mesh tell how far inside it is by winding
numbers, which also work for meshes with holes, doubled faces and overlapping parts; take the exact
distance to the mesh as the size of the field; draw its zero surface by marching cubes. Only bricks of the
grid that the mesh passes are ever made, so that thin branching shapes with a large box stay affordable.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError, SurfaceError
from bemescape.progress import Progress, ProgressEvent
from bemescape.surface.measure import edge_lengths, equal_rows
from bemescape.surface.repairs import Repair
from bemescape.surface.winding import winding_numbers
from bemescape.surface.working import Working
from bemescape.units import format_length

__all__ = ["Distances", "rebuilt", "sampled_distances"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Cells along one side of a brick.
_BRICK = 16
#: Voxels on the surface: aimed at by default, and the most that are accepted.
_SURFACE_VOXELS, _MOST_SURFACE_VOXELS = 100_000, 1_000_000
#: Grid nodes in all bricks.
_MOST_NODES = 60_000_000
#: Solid angles that may be summed up for nodes whose side is in doubt: about half a minute.
_MOST_ANGLES = 3_000_000_000
#: Field values are kept off zero by this part of a voxel: a surface through a node itself makes needles.
_OFF_ZERO = 0.05
#: Points sampled on each surface for the distance between them.
_SAMPLES = 20_000
#: More than this part of the new surface farther than this many voxels from the old one is invention, not
#: repair.
_INVENTED_SHARE, _INVENTED_VOXELS = 0.05, 2.0


def rebuilt(mesh: Working, name: str, voxel_um: float | None, progress: Progress) -> Repair:
    """A closed surface around everything that `mesh` encloses, parts joined where they overlap.

    Parameters
    ----------
    mesh : Working
        Oriented as far as possible; may have holes.
    name : str
        For messages.
    voxel_um : float or None
        Voxel size in µm; by default an eighth of 4 V / A (the diameter, for a branch), at most three
        quarters of the median edge, and not so small that the surface takes more than 100 000 voxels.
    progress : callable
        Receives events.

    Raises
    ------
    SurfaceError
        Nothing is enclosed, or a hole is so large that the new surface would be largely invented.
    SettingsError
        The voxel size does not fit the mesh.
    """
    voxel = _voxel(mesh, voxel_um)
    grid = _Grid.around(mesh, voxel)
    progress(ProgressEvent("rebuilding", 0.0, f"voxels of {format_length(voxel)}"))
    bricks = grid.bricks(mesh)
    progress(ProgressEvent("rebuilding", 0.1, f"{len(bricks)} bricks"))
    crossings = [_Crossings.along(axis, mesh, grid) for axis in range(3)]
    progress(ProgressEvent("rebuilding", 0.3, "inside or outside"))
    vertices, faces = _zero_surface(mesh, grid, bricks, crossings, progress)
    if not len(faces):
        raise SurfaceError(
            f"{name}: no voxel of {format_length(voxel)} lies inside, so there is nothing to rebuild; an "
            f"open sheet has no "
            "inside, and a thin body needs smaller voxels"
        )
    progress(ProgressEvent("rebuilding", 0.9, "distance to the original"))
    draft = replace(
        mesh,
        vertices=vertices,
        faces=faces,
        face_source=np.zeros(len(faces), np.int64),
        vertex_source=np.zeros(len(vertices), np.int64),
    )
    distances = sampled_distances(mesh, draft)
    invented = float((distances.to_original > _INVENTED_VOXELS * voxel).mean())
    if invented > _INVENTED_SHARE:
        raise SurfaceError(
            f"{name}: {invented:.0%} of the rebuilt surface (limit {_INVENTED_SHARE:.0%}) would lie farther "
            f"than "
            f"{_INVENTED_VOXELS:g} voxels of {format_length(voxel)} from any face of the file: its holes "
            f"are too large to "
            "be closed by guessing; close them in a mesh editor"
        )
    face_source = _nearest_faces(mesh, vertices[faces].mean(axis=1))
    result = replace(draft, face_source=mesh.face_source[face_source], vertex_source=_sources(mesh, vertices))
    both = np.concatenate([distances.to_original, distances.to_rebuilt])
    detail = (
        f"new surface of {len(faces)} faces on voxels of {format_length(voxel)}; distance to the original, "
        f"both ways: mean "
        f"{format_length(float(both.mean()))}, 95 % below {format_length(float(np.percentile(both, 95)))}, "
        f"largest "
        f"{format_length(float(both.max()))}"
    )
    return Repair(result, 1, detail, np.zeros(0, np.int64))


@dataclass(frozen=True)
class Distances:
    """Sampled distances in µm from the new surface to the original, and back."""

    to_original: Floats
    to_rebuilt: Floats


def sampled_distances(original: Working, new: Working) -> Distances:
    """Distances of points spread evenly over each surface to the other one; the same points every time."""
    return Distances(_distances(original, _spread_points(new)), _distances(new, _spread_points(original)))


def _spread_points(mesh: Working) -> Floats:
    random = np.random.default_rng(20_000)
    ends = np.cumsum(mesh.areas)
    face = np.searchsorted(ends, random.random(_SAMPLES) * ends[-1]).clip(0, len(ends) - 1)
    u, v = random.random((2, _SAMPLES))
    root = np.sqrt(u)[:, None]
    a, b, c = (mesh.vertices[mesh.faces[face, k]] for k in range(3))
    points: Floats = (1.0 - root) * a + root * (1.0 - v[:, None]) * b + root * v[:, None] * c
    return points


def _as_polydata(mesh: Working) -> Any:
    import pyvista

    packed = np.column_stack([np.full(len(mesh.faces), 3), mesh.faces]).reshape(-1)
    return pyvista.PolyData(mesh.vertices, packed)


def _distances(mesh: Working, points: Floats) -> Floats:
    """Distance (p,) in µm of each point to the mesh."""
    import pyvista

    cloud = pyvista.PolyData(points)
    signed = cloud.compute_implicit_distance(_as_polydata(mesh)).point_data["implicit_distance"]
    # The sign follows face normals, which a damaged mesh cannot be trusted with.
    return np.abs(np.asarray(signed, np.float64))


def _nearest_faces(mesh: Working, points: Floats) -> Ints:
    """Nearest face (p,) of each point."""
    return np.asarray(_as_polydata(mesh).find_closest_cell(points), np.int64)


def _sources(mesh: Working, vertices: Floats) -> Ints:
    from scipy.spatial import cKDTree

    used = np.unique(mesh.faces)
    _, nearest = cKDTree(mesh.vertices[used]).query(vertices)
    sources: Ints = mesh.vertex_source[used[nearest]]
    return sources


def _voxel(mesh: Working, voxel_um: float | None) -> float:
    area = float(mesh.areas.sum())
    diameter = 4.0 * abs(mesh.volume) / area
    fine = min(0.75 * float(np.median(edge_lengths(mesh.vertices, mesh.faces))), diameter / 8.0)
    voxel = voxel_um or max(fine, float(np.sqrt(area / _SURFACE_VOXELS)))
    if not area > 0.0 or area / voxel**2 > _MOST_SURFACE_VOXELS:
        raise SettingsError(
            f"voxels of {format_length(voxel)} would make a surface of {area / voxel**2:.3g} voxels (limit "
            f"{_MOST_SURFACE_VOXELS:.3g}); take at least "
            f"{format_length(float(np.sqrt(area / _MOST_SURFACE_VOXELS)))}"
        )
    if voxel > 0.25 * mesh.diagonal:
        raise SettingsError(
            f"voxels of {format_length(voxel)} are too coarse for a mesh of {format_length(mesh.diagonal)}; "
            f"take at most "
            f"{format_length(0.25 * mesh.diagonal)}"
        )
    return voxel


@dataclass(frozen=True)
class _Grid:
    """Nodes at `origin + index * voxel`; `shape` nodes along each axis, bricks of `_BRICK` cells."""

    origin: Floats
    voxel: float
    shape: Ints

    @classmethod
    def around(cls, mesh: Working, voxel: float) -> _Grid:
        used = mesh.vertices[np.unique(mesh.faces)]
        # An odd offset, so that rays along the axes meet no edge of a mesh that was drawn on a grid.
        low = used.min(axis=0) - voxel * np.array([3.1734, 3.2197, 3.1391])
        cells = np.ceil((used.max(axis=0) + 3.0 * voxel - low) / (voxel * _BRICK)).astype(np.int64)
        return cls(low, voxel, cells * _BRICK + 1)

    def bricks(self, mesh: Working) -> Ints:
        """First nodes (b, 3) of the bricks within a voxel of the mesh."""
        corners = mesh.vertices[mesh.faces]
        side = self.voxel * _BRICK
        count = (self.shape - 1) // _BRICK
        keys = []
        # Triangles larger than a brick are cut up, so that their boxes do not fill the whole grid.
        pieces = _cut_large(corners, side)
        first = np.floor((pieces.min(axis=1) - self.voxel - self.origin) / side).astype(np.int64)
        last = np.floor((pieces.max(axis=1) + self.voxel - self.origin) / side).astype(np.int64)
        for i in range(3):
            for j in range(3):
                for k in range(3):
                    place = first + np.array([i, j, k])
                    place = place[(place <= last).all(axis=1)]
                    keys.append((place[:, 0] * count[1] + place[:, 1]) * count[2] + place[:, 2])
        key = np.unique(np.concatenate(keys))
        if len(key) * (_BRICK + 1) ** 3 > _MOST_NODES:
            raise SettingsError(
                f"voxels of {format_length(self.voxel)} would take {len(key)} bricks of the grid, more than "
                "fit in memory; take larger voxels"
            )
        place = np.stack([key // (count[1] * count[2]), key // count[2] % count[1], key % count[2]], axis=1)
        return place * _BRICK


def _cut_large(corners: Floats, side: float) -> Floats:
    while (large := np.ptp(corners, axis=1).max(axis=1) > side).any():
        a, b, c = (corners[large, k] for k in range(3))
        ab, bc, ca = 0.5 * (a + b), 0.5 * (b + c), 0.5 * (c + a)
        quarters = [np.stack(t, axis=1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))]
        corners = np.concatenate([corners[~large], *quarters])
    return corners


@dataclass(frozen=True)
class _Crossings:
    """Where grid lines along one axis pass through faces, sorted by line and height."""

    axis: int
    keys: Floats
    passed: Ints
    height: float
    width: int

    @classmethod
    def along(cls, axis: int, mesh: Working, grid: _Grid) -> _Crossings:
        u, v = (axis + 1) % 3, (axis + 2) % 3
        corners = (mesh.vertices[mesh.faces] - grid.origin) / grid.voxel
        low = np.ceil(corners.min(axis=1)).astype(np.int64)
        high = np.floor(corners.max(axis=1)).astype(np.int64)
        wide, tall = high[:, u] - low[:, u] + 1, high[:, v] - low[:, v] + 1
        copies = np.maximum(wide, 0) * np.maximum(tall, 0)
        face = np.repeat(np.arange(len(corners)), copies)
        step = np.arange(len(face)) - np.repeat(np.cumsum(copies) - copies, copies)
        line_u = low[face, u] + step % wide[face]
        line_v = low[face, v] + step // wide[face]
        x = corners[face][:, :, u] - line_u[:, None]
        y = corners[face][:, :, v] - line_v[:, None]
        x_one, x_two = np.roll(x, -1, axis=1), np.roll(x, -2, axis=1)
        y_one, y_two = np.roll(y, -1, axis=1), np.roll(y, -2, axis=1)
        turn = x_one * y_two - x_two * y_one
        hit = (turn > 0.0).all(axis=1) | (turn < 0.0).all(axis=1)
        face, turn, line_u, line_v = face[hit], turn[hit], line_u[hit], line_v[hit]
        total = turn.sum(axis=1)
        # `turn` are barycentric weights of the three corners.
        place = np.einsum("ij,ij->i", corners[face][:, :, axis], turn) / total
        height = float(grid.shape[axis] + 2)
        keys = (line_u * grid.shape[v] + line_v) * height + place
        order = np.argsort(keys, kind="stable")
        # A face that looks along the axis is left by a line that goes that way.
        sign = np.where(total > 0.0, 1, -1)[order]
        return cls(axis, keys[order], np.r_[0, np.cumsum(sign)], height, int(grid.shape[v]))

    def winding(self, nodes: Ints) -> tuple[Ints, Ints]:
        """Winding numbers (k,) counted along the axis and against it; a hole makes them differ."""
        u, v = (self.axis + 1) % 3, (self.axis + 2) % 3
        line = (nodes[:, u] * self.width + nodes[:, v]) * self.height
        before = self.passed[np.searchsorted(self.keys, line)]
        here = self.passed[np.searchsorted(self.keys, line + nodes[:, self.axis])]
        after = self.passed[np.searchsorted(self.keys, line + self.height - 1.0)]
        return after - here, before - here


def _zero_surface(
    mesh: Working, grid: _Grid, bricks: Ints, crossings: list[_Crossings], progress: Progress
) -> tuple[Floats, Ints]:
    from skimage.measure import marching_cubes

    side = _BRICK + 1
    local = np.stack(np.meshgrid(*[np.arange(side)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    signs = np.empty((len(bricks), side, side, side), dtype=np.int8)
    doubtful: list[Ints] = []
    places: list[Ints] = []
    for start in range(0, len(bricks), 256):
        nodes = (bricks[start : start + 256, None] + local).reshape(-1, 3)
        seen = np.stack([count for lines in crossings for count in lines.winding(nodes)])
        # Six directions: inside where they see more than half a turn on average. Where they do not agree,
        # that is a first guess.
        inside = seen.sum(axis=0) > 3
        signs[start : start + 256] = np.where(inside, 1, -1).reshape(-1, side, side, side)
        doubtful.append(nodes[(seen != seen[0]).any(axis=0)])
        places.append(start * side**3 + np.flatnonzero((seen != seen[0]).any(axis=0)))
    nodes, place = np.concatenate(doubtful), np.concatenate(places)
    if 0 < len(nodes) * len(mesh.faces) <= _MOST_ANGLES:
        progress(ProgressEvent("rebuilding", 0.4, f"{len(nodes)} doubtful nodes"))
        exact = winding_numbers(grid.origin + nodes * grid.voxel, mesh.vertices[mesh.faces])
        signs.reshape(-1)[place] = np.where(exact > 0.5, 1, -1)
    flat = signs.reshape(len(bricks), -1)
    mixed = flat.max(axis=1) != flat.min(axis=1)
    bricks, signs = bricks[mixed], signs[mixed]
    if not len(bricks):
        return np.zeros((0, 3)), np.zeros((0, 3), dtype=np.int64)
    changes = np.zeros(signs.shape, dtype=bool)
    for axis in range(1, 4):
        first = [slice(None)] * 4
        second = [slice(None)] * 4
        first[axis], second[axis] = slice(0, -1), slice(1, None)
        differs = signs[tuple(first)] != signs[tuple(second)]
        changes[tuple(first)] |= differs
        changes[tuple(second)] |= differs
    progress(ProgressEvent("rebuilding", 0.5, f"{int(changes.sum())} distances"))
    spots = np.argwhere(changes)
    nodes = bricks[spots[:, 0]] + spots[:, 1:]
    # Nodes on the sides of bricks belong to several: they must get one and the same value.
    group = equal_rows(nodes)
    _, first_node = np.unique(group, return_index=True)
    distance = _distances(mesh, grid.origin + nodes[first_node] * grid.voxel)
    size = np.clip(distance / grid.voxel, _OFF_ZERO, 2.0)[group]
    field = signs.astype(np.float32)
    field[changes] *= size.astype(np.float32)
    progress(ProgressEvent("rebuilding", 0.8, "marching cubes"))
    all_vertices, all_faces = [], []
    count = 0
    for brick, values in zip(bricks, field, strict=True):
        vertices, faces, _, _ = marching_cubes(values, level=0.0)
        all_vertices.append(vertices.astype(np.float64) + brick)
        # Marching cubes winds faces to look towards higher values, which are inside here.
        all_faces.append(faces[:, ::-1].astype(np.int64) + count)
        count += len(vertices)
    vertices, faces = np.concatenate(all_vertices), np.concatenate(all_faces)
    # Vertices lie on grid edges, so those that two bricks share agree to rounding in two whole numbers and
    # the third.
    group = equal_rows(np.round(vertices * 4096.0))
    _, keep = np.unique(group, return_index=True)
    return grid.origin + vertices[keep] * grid.voxel, group[faces]
