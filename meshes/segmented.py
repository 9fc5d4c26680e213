"""From a smooth body to a closed triangle mesh that looks segmented. Lengths are nanometres throughout.

A body is a function of points (..., 3) that is negative inside. It is sampled to voxels with an uncertain
border, as a segmentation of an image stack would give it, and the voxels are contoured by surface nets.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import product
from pathlib import Path

import numpy as np
import pyvista as pv
import trimesh
from matplotlib.path import Path as Polygon
from numpy.typing import NDArray
from scipy import ndimage
from scipy.interpolate import PchipInterpolator, make_interp_spline
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay, cKDTree

Floats = NDArray[np.float64]
Body = Callable[[Floats], Floats]


@dataclass(frozen=True)
class Mesh:
    """Vertices (n, 3), faces (m, 3) counter-clockwise from outside, and one label per face (m,)."""

    vertices: Floats
    faces: NDArray[np.int64]
    labels: NDArray[np.uint8]

    @property
    def trimesh(self) -> trimesh.Trimesh:
        """The same mesh for trimesh's measures, vertex numbers unchanged."""
        return trimesh.Trimesh(self.vertices, self.faces, process=False)


# --- smooth bodies --------------------------------------------------------------------------------


def ellipsoid(centre: Sequence[float], radii: Sequence[float]) -> Body:
    """Ellipsoid; the value is a distance to first order near its border."""
    middle, axes = np.asarray(centre, dtype=float), np.asarray(radii, dtype=float)

    def body(points: Floats) -> Floats:
        scaled = (points - middle) / axes
        size = np.linalg.norm(scaled, axis=-1)
        slope = np.linalg.norm(scaled / axes, axis=-1)
        return np.asarray(size * (size - 1.0) / np.maximum(slope, 1e-12))

    return body


def tube(path: Sequence[Sequence[float]], widths: Sequence[float]) -> Body:
    """Bent tube along a spline through `path`, with the diameter `widths` at each of its points."""
    knots = np.asarray(path, dtype=float)
    steps = np.linalg.norm(np.diff(knots, axis=0), axis=1)
    places = np.concatenate([[0.0], np.cumsum(steps)])
    fine = np.linspace(0.0, places[-1], int(places[-1] / 4.0) + 2)
    line = make_interp_spline(places, knots, k=min(3, len(knots) - 1))(fine)
    radii = 0.5 * PchipInterpolator(places, np.asarray(widths, dtype=float))(fine)
    tree = cKDTree(line)

    def body(points: Floats) -> Floats:
        distance, nearest = tree.query(points.reshape(-1, 3))
        return np.asarray(distance - radii[nearest]).reshape(points.shape[:-1])

    return body


def half_space(point: Sequence[float], normal: Sequence[float]) -> Body:
    """Everything on the side that `normal` points away from."""
    direction = np.asarray(normal, dtype=float) / np.linalg.norm(normal)
    return lambda points: (points - np.asarray(point, dtype=float)) @ direction


def joined(first: Body, second: Body, blend: float) -> Body:
    """Union with a fillet of about `blend`."""

    def body(points: Floats) -> Floats:
        a, b = first(points), second(points)
        share = np.clip(0.5 + 0.5 * (b - a) / blend, 0.0, 1.0)
        return b * (1.0 - share) + a * share - blend * share * (1.0 - share)

    return body


def common(first: Body, second: Body, blend: float) -> Body:
    """Intersection with an edge rounded by about `blend`."""
    outside = joined(lambda points: -first(points), lambda points: -second(points), blend)
    return lambda points: -outside(points)


def bumpy(body: Body, height: float, wavelength: float, seed: int) -> Body:
    """`body` with gentle bumps: twelve plane waves of about one wavelength and random directions."""
    rng = np.random.default_rng(seed)
    waves = rng.normal(size=(12, 3))
    waves *= (2.0 * np.pi / (wavelength * rng.uniform(0.8, 1.5, 12)) / np.linalg.norm(waves, axis=1))[:, None]
    phases = rng.uniform(0.0, 2.0 * np.pi, 12)

    def bumps(points: Floats) -> Floats:
        total = sum(np.sin(points @ wave + phase) for wave, phase in zip(waves, phases, strict=True))
        return np.asarray(body(points) + height * total / np.sqrt(6.0))

    return bumps


# --- voxels and surface nets ----------------------------------------------------------------------


def segmented(
    body: Body, lower: Sequence[float], upper: Sequence[float], *, voxel: float, triangles: int, seed: int
) -> Mesh:
    """Closed mesh of the body's largest part inside the box `lower`..`upper`, of about `triangles` faces."""
    axes = [np.arange(low, high, voxel) for low, high in zip(lower, upper, strict=True)]
    values = body(np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1))
    # A segmentation decides each border voxel with some doubt: noise as wide as a voxel, half a voxel strong.
    doubt = ndimage.gaussian_filter(np.random.default_rng(seed).normal(size=values.shape), 1.0)
    mask = values + 0.5 * voxel * doubt / doubt.std() < 0.0
    mask = ndimage.median_filter(mask.astype(np.uint8), size=3) > 0
    parts, count = ndimage.label(mask)
    mask = parts == 1 + np.argmax(np.bincount(parts.ravel(), minlength=count + 1)[1:])
    mask = _thickened(ndimage.binary_fill_holes(mask))

    image = pv.ImageData(dimensions=mask.shape, spacing=(voxel,) * 3, origin=tuple(lower))
    image.point_data["inside"] = mask.ravel(order="F").astype(np.uint8)
    net = image.contour_labels(smoothing_iterations=20, smoothing_distance=voxel, output_mesh_type="triangles")
    # Surface nets leave faint terraces; a pass band filter removes them and keeps the volume.
    net = net.smooth_taubin(n_iter=40, pass_band=0.03)
    net = net.decimate(1.0 - triangles / net.n_cells, volume_preservation=True)
    net = net.smooth_taubin(n_iter=25, pass_band=0.05)
    surface = trimesh.Trimesh(net.points, net.regular_faces, process=False)
    if surface.volume < 0.0:
        surface.invert()
    return Mesh(np.asarray(surface.vertices), np.asarray(surface.faces), np.zeros(len(surface.faces), np.uint8))


def _thickened(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Fill voxels until none touch only along an edge or at a corner, where surface nets would tear."""
    mask = mask.copy()
    changed = True
    while changed:
        changed = False
        for axes in ((0, 1), (0, 2), (1, 2), (0, 1, 2)):
            # Views of the same mask, shifted by one voxel along some of the axes: the corners of each block.
            corners = [
                mask[tuple(slice(shift.get(k, 0), shift.get(k, 1) - 1 or None) for k in range(3))]
                for shift in (dict(zip(axes, bits, strict=True)) for bits in product((0, 1), repeat=len(axes)))
            ]
            filled = sum(corner.astype(np.int8) for corner in corners)
            pairs = list(zip(corners, reversed(corners), strict=True))[: len(corners) // 2]
            torn = np.zeros(corners[0].shape, dtype=bool)
            for one, opposite in pairs:
                torn |= one & opposite & (filled == 2)
                torn |= ~one & ~opposite & (filled == len(corners) - 2)
            changed |= bool(torn.any())
            for corner in corners:
                corner |= torn
    return mask


# --- cutting, capping and labelling ---------------------------------------------------------------


def split_along(mesh: Mesh, level: Body) -> tuple[Mesh, NDArray[np.int8]]:
    """Mesh whose edges follow `level` = 0, and the side (-1, 0 or 1) of each of its vertices.

    Vertices next to the line slide on to it along an edge, so that the cut leaves no slivers.
    """
    vertices, value = mesh.vertices.copy(), level(mesh.vertices)
    edges = mesh.trimesh.edges_unique
    both = np.concatenate([edges, edges[:, ::-1]])
    start, end = both[value[both[:, 0]] * value[both[:, 1]] < 0.0].T
    way = value[start] / (value[start] - value[end])
    order = np.argsort(-way, kind="stable")
    order = order[way[order] < 0.35]  # ascending nearness: the nearest crossing is written last and wins
    start, end, way = start[order], end[order], way[order]
    vertices[start] = mesh.vertices[start] + way[:, None] * (mesh.vertices[end] - mesh.vertices[start])
    side = np.sign(value).astype(np.int8)
    side[start] = 0

    made: dict[tuple[int, int], int] = {}
    added: list[Floats] = []

    def crossing(a: int, b: int) -> int:
        key = (min(a, b), max(a, b))
        if key not in made:
            made[key] = len(vertices) + len(added)
            share = value[key[0]] / (value[key[0]] - value[key[1]])
            added.append(vertices[key[0]] + share * (vertices[key[1]] - vertices[key[0]]))
        return made[key]

    faces: list[tuple[int, int, int]] = []
    labels: list[int] = []
    for corners, label in zip(mesh.faces, mesh.labels, strict=True):
        a, b, c = (int(corner) for corner in corners)
        signs = side[[a, b, c]]
        if signs.min() * signs.max() >= 0:
            pieces = [(a, b, c)]
        else:
            # Turn the face until its first corner is alone on its side, or opposite a corner on the line.
            while not (side[b] * side[c] > 0 or (side[b] * side[a] < 0 and side[c] == 0)):
                a, b, c = b, c, a
            near = crossing(a, b)
            if side[c] == 0:
                pieces = [(a, near, c), (near, b, c)]
            else:
                far = crossing(a, c)
                pieces = [(a, near, far), (near, b, far), (b, c, far)]
        faces += pieces
        labels += [int(label)] * len(pieces)
    side = np.concatenate([side, np.zeros(len(added), np.int8)])
    everything = np.concatenate([vertices, np.reshape(added, (-1, 3))])
    return _without_short_line_edges(Mesh(everything, np.array(faces), np.array(labels, np.uint8)), side)


def _without_short_line_edges(mesh: Mesh, side: NDArray[np.int8]) -> tuple[Mesh, NDArray[np.int8]]:
    """Collapse edges along the line that are much shorter than the rest; the line keeps its course."""
    surface = mesh.trimesh
    lengths, neighbours = surface.edges_unique_length, [set(near) for near in surface.vertex_neighbors]
    limit = 0.4 * np.median(lengths)
    target, touched = np.arange(len(mesh.vertices)), set[int]()
    for number in np.argsort(lengths, kind="stable"):
        a, b = (int(vertex) for vertex in surface.edges_unique[number])
        if lengths[number] > limit:
            break
        # Two common neighbours and no other collapse nearby: the mesh stays manifold.
        around = neighbours[a] | neighbours[b]
        if side[a] == side[b] == 0 and len(neighbours[a] & neighbours[b]) == 2 and not around & touched:
            target[b] = a
            touched |= {a, b}
    faces = target[mesh.faces]
    kept = (faces != np.roll(faces, 1, axis=1)).all(axis=1)
    used = np.unique(faces[kept])
    return _compact(mesh.vertices, faces[kept], mesh.labels[kept]), side[used]


def cut_mouth(mesh: Mesh, axis: int, place: float, *, beyond: int, label: int) -> Mesh:
    """Cut off what lies beyond `place` on an axis (towards `beyond` = 1 or -1) and close it with a flat lid.

    The plane is normal to an axis so that the lid stays exactly flat in single precision.
    """
    split, side = split_along(mesh, lambda points: beyond * (points[..., axis] - place))
    keep = ~(side[split.faces] > 0).any(axis=1)
    faces, labels, vertices = split.faces[keep], split.labels[keep], split.vertices.copy()
    vertices[side == 0, axis] = place
    rim = _boundary_loop(faces)
    across = [other for other in range(3) if other != axis]
    filling, lid = _filled_outline(vertices[rim][:, across])
    added = np.full((len(filling), 3), place)
    added[:, across] = filling
    lid = np.append(rim, len(vertices) + np.arange(len(added)))[lid]
    vertices = np.concatenate([vertices, added])
    corners = vertices[lid]
    inward = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])[:, axis] * beyond < 0.0
    lid[inward] = lid[inward][:, ::-1]
    labels = np.append(labels, np.full(len(lid), label, np.uint8))
    return _compact(vertices, np.concatenate([faces, lid]), labels)


def _filled_outline(outline: Floats) -> tuple[Floats, NDArray[np.int64]]:
    """Even triangles in a nearly convex outline (n, 2): added inner points, and triangles over both."""
    step = 1.3 * np.linalg.norm(outline - np.roll(outline, 1, axis=0), axis=1).mean()
    low, high = outline.min(axis=0), outline.max(axis=0)
    rows = np.arange(low[1], high[1], step * np.sqrt(0.75))
    columns = np.arange(low[0], high[0], step)
    grid = np.array([(x + 0.5 * step * (k % 2), y) for k, y in enumerate(rows) for x in columns])
    border = Polygon(outline)
    inner = grid[border.contains_points(grid) & (cKDTree(outline).query(grid)[0] > 0.7 * step)]
    points = np.concatenate([outline, inner])
    triangles = Delaunay(points).simplices.astype(np.int64)
    return inner, triangles[border.contains_points(points[triangles].mean(axis=1))]


def paint_patch(mesh: Mesh, centre: Sequence[float], radius: float, *, label: int, seed: int) -> Mesh:
    """Label the wall within about `radius` of `centre`, on a side that faces along z.

    The mesh is cut along the patch's rim, which is smooth and slightly wavy.
    """
    middle = np.asarray(centre, dtype=float)
    phases = np.random.default_rng(seed).uniform(0.0, 2.0 * np.pi, 3)

    def level(points: Floats) -> Floats:
        offset = points - middle
        angle = np.arctan2(offset[..., 1], offset[..., 0])
        wave = sum(np.sin((k + 2) * angle + phase) for k, phase in enumerate(phases))
        return np.asarray(np.linalg.norm(offset, axis=-1) - radius * (1.0 + 0.05 * wave))

    split, side = split_along(mesh, level)
    labels = split.labels.copy()
    labels[(side[split.faces] <= 0).all(axis=1) & (side[split.faces] < 0).any(axis=1)] = label
    return Mesh(split.vertices, split.faces, labels)


def _boundary_loop(faces: NDArray[np.int64]) -> NDArray[np.int64]:
    """The one border of an open mesh as a loop of vertex numbers, in the direction of its faces."""
    half = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]])
    known = {(int(a), int(b)) for a, b in half}
    following = {a: b for a, b in known if (b, a) not in known}
    loop = [min(following)]
    while (nxt := following[loop[-1]]) != loop[0]:
        loop.append(nxt)
    if len(loop) != len(following):
        raise RuntimeError(f"the cut has {len(following)} border edges, its loop {len(loop)}; move the plane")
    return np.array(loop)


def _compact(vertices: Floats, faces: NDArray[np.int64], labels: NDArray[np.uint8]) -> Mesh:
    used, faces = np.unique(faces, return_inverse=True)
    return Mesh(vertices[used], faces.reshape(-1, 3), labels)


# --- checks and the file --------------------------------------------------------------------------


def single_precision(mesh: Mesh) -> Mesh:
    """The mesh as a file holds it."""
    return Mesh(mesh.vertices.astype(np.float32).astype(float), mesh.faces, mesh.labels)


def faults(mesh: Mesh) -> list[str]:
    """What keeps a mesh from being one closed, manifold, outward shell with one connected patch per label."""
    surface, found = mesh.trimesh, []
    if not (surface.is_watertight and surface.is_winding_consistent):
        found.append("not closed")
    if surface.volume <= 0.0:
        found.append("inside out")
    if surface.body_count != 1:
        found.append(f"{surface.body_count} parts")
    if surface.area_faces.min() < 1e-3:
        found.append(f"smallest face {surface.area_faces.min():.2g} nm²")
    # A vertex is manifold if its corners, linked through shared edges, form one fan.
    pairs, shared = surface.face_adjacency, surface.face_adjacency_edges
    links = [
        [3 * face + np.argmax(mesh.faces[face] == vertex[:, None], axis=1) for face in pairs.T] for vertex in shared.T
    ]
    rows, columns = np.concatenate(links, axis=1)
    graph = coo_matrix((np.ones(len(rows)), (rows, columns)), shape=(mesh.faces.size,) * 2)
    fans = connected_components(graph, directed=False)[0]
    if fans != len(mesh.vertices):
        found.append(f"{fans} fans at {len(mesh.vertices)} vertices")
    if surface.face_adjacency_angles.max() > np.radians(135.0):
        found.append(f"folded by {np.degrees(surface.face_adjacency_angles.max()):.0f}°")
    for label in np.unique(mesh.labels[mesh.labels > 0]):
        patch = surface.submesh([np.flatnonzero(mesh.labels == label)], append=True)
        if patch.body_count != 1 or patch.euler_number != 1:
            found.append(f"label {label} is not one disc-like patch")
    return found


def snapped(mesh: Mesh, points: Sequence[Sequence[float]]) -> Floats:
    """Points (n, 3) moved to the nearest point of the wall."""
    return np.asarray(trimesh.proximity.closest_point(mesh.trimesh, np.asarray(points, dtype=float))[0])


def depth(mesh: Mesh, point: Sequence[float]) -> float:
    """Distance from a point to the wall, negative outside (by the winding number)."""
    corners = mesh.vertices[mesh.faces] - np.asarray(point, dtype=float)
    a, b, c = (corners[:, k] for k in range(3))
    la, lb, lc = (np.linalg.norm(x, axis=1) for x in (a, b, c))
    below = la * lb * lc + (a * b).sum(1) * lc + (b * c).sum(1) * la + (c * a).sum(1) * lb
    turns = 2.0 * np.arctan2(np.einsum("ij,ij->i", a, np.cross(b, c)), below).sum() / (4.0 * np.pi)
    distance = float(np.linalg.norm(snapped(mesh, [point])[0] - point))
    return distance if turns > 0.5 else -distance


def write_ply(mesh: Mesh, path: Path, comments: Sequence[str]) -> None:
    """Binary little-endian PLY with float32 positions and the face property `label`."""
    lines = ["ply", "format binary_little_endian 1.0", *(f"comment {text}" for text in comments)]
    lines += [f"element vertex {len(mesh.vertices)}", *(f"property float {axis}" for axis in "xyz")]
    lines += [f"element face {len(mesh.faces)}", "property list uchar int vertex_indices"]
    lines += ["property uchar label"]
    table = np.zeros(len(mesh.faces), dtype=[("count", "u1"), ("corners", "<i4", 3), ("label", "u1")])
    table["count"], table["corners"], table["label"] = 3, mesh.faces, mesh.labels
    header = "\n".join([*lines, "end_header", ""]).encode("ascii")
    path.write_bytes(header + mesh.vertices.astype("<f4").tobytes() + table.tobytes())
