"""From a surface and its windows to panels: rims cut into the mesh, panels graded towards them.

Strategy: (1) bisect long edges until the panel size follows the distance to the nearest rim; (2) cut the mesh
along the rim of each window that is not made of whole faces; (3) cut it along lines of equal distance on both sides
of every rim, at (k/n)³ of a band of about one panel. The flux grows as distance^(−1/2) towards a rim: panels that
thin out with the cube of their number keep its error even, where uniform panels would converge as slowly as the
square root of their size.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.surface.surface import Surface
from bemescape.windows.imprint import rims_cut
from bemescape.windows.mesh_edits import Mesh, bisected_to_size, cut_along_level, mesh_edges, split_edges
from bemescape.windows.patch import Patch, connected_vertices
from bemescape.windows.placement import Placement, place_windows
from bemescape.windows.rims import rim_edges, segment_distance

__all__ = ["Fineness", "GradedMesh", "Placement", "SizeLimit", "graded", "place_windows", "rim_edges"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


#: A crossing closer to a vertex than this part of the edge uses the vertex: unlike rims, lines beside them may give way
#: to avoid needless slivers (but the innermost crosses its edges at 1/8).
_LAYER_SNAP = 0.06


@dataclass(frozen=True)
class Fineness:
    """How fine the panels are.

    Attributes
    ----------
    rim_segments : float
        Panels along the rim of a round window.
    layers : int
        Lines of equal distance on either side of a rim.
    wall_panels : float
        Panels that would cover the whole surface at the largest size allowed.
    growth : float
        Panel size gained per distance from the rim.
    """

    rim_segments: float
    layers: int
    wall_panels: float
    growth: float = 0.5


@dataclass(frozen=True)
class GradedMesh:
    """Panels with windows.

    Attributes
    ----------
    vertices : (n, 3) float64, faces : (m, 3) int64
        Every face lies in the plane of the face of the surface it came from.
    parent : (m,) int64
        That face.
    window_of : (m,) int64
        Number of the window, −1 on the wall.
    """

    vertices: Floats
    faces: Ints
    parent: Ints
    window_of: Ints


@dataclass(frozen=True)
class SizeLimit:
    """Panel sizes that a coarser solution asked for: near each of its panels (p, 3), edges up to `edge` (p,) µm."""

    places: Floats
    edge: Floats

    def __call__(self, points: Floats) -> Floats:
        """Limit (k,) at points (k, 3): that of the nearest panel."""
        return np.asarray(self.edge[cKDTree(self.places).query(points)[1]])


def graded(
    placement: Placement,
    fineness: Fineness,
    *,
    limits: Sequence[SizeLimit] = (),
    most_faces: int = 2_000_000,
) -> GradedMesh:
    """Panels for a placement, watertight, with every rim on edges.

    `limits` ask for smaller panels than `fineness` does; above `most_faces` bisection stops.

    Raises
    ------
    WindowError
        Two windows overlap, or a rim cannot be resolved.
    """
    surface, patches = placement.surface, placement.patches
    mesh = Mesh(surface.vertices, surface.faces, np.arange(len(surface.faces)))
    size_at = _panel_size(surface, patches, fineness, limits)
    mesh = bisected_to_size(mesh, size_at, most_faces=most_faces)
    mesh, members = rims_cut(mesh, patches)
    window_of = np.full(len(mesh.faces), -1)
    for number, patch in enumerate(patches):
        _refuse_overlap(mesh, window_of, members[number], patch, patches)
        window_of[members[number]] = number
    layered = _layered(Mesh(mesh.vertices, mesh.faces, np.arange(len(mesh.faces))), window_of, patches, fineness)
    numbers = placement.numbered(window_of[layered.parent])
    return GradedMesh(layered.vertices, layered.faces, mesh.parent[layered.parent], numbers)


def _rim_size(patch: Patch, fineness: Fineness) -> float:
    return 2.0 * np.pi * patch.radius_um / fineness.rim_segments


def _panel_size(
    surface: Surface, patches: Sequence[Patch], fineness: Fineness, limits: Sequence[SizeLimit]
) -> Callable[[Floats], Floats]:
    """Largest edge allowed at given points (k, 3)."""
    # An equilateral panel with edge l has the area 0.433 l².
    largest = float(np.sqrt(surface.area / fineness.wall_panels / 0.433))

    # Discs of one radius share a tree: the nearest centre has the nearest rim.
    radii = sorted({patch.radius_um for patch in patches if patch.disc is not None})
    groups = [[patch for patch in patches if patch.disc is not None and patch.radius_um == r] for r in radii]
    trees = [cKDTree([patch.disc.centre_um for patch in group if patch.disc is not None]) for group in groups]
    others = [patch for patch in patches if patch.disc is None]

    def size_at(points: Floats) -> Floats:
        size = np.full(len(points), largest)
        for radius, group, tree in zip(radii, groups, trees, strict=True):
            to_rim = np.abs(tree.query(points)[0] - radius)
            size = np.minimum(size, _rim_size(group[0], fineness) + fineness.growth * to_rim)
        for patch in others:
            size = np.minimum(size, _rim_size(patch, fineness) + fineness.growth * patch.distance_to_rim(points))
        for limit in limits:
            size = np.minimum(size, limit(points))
        return size

    return size_at


def _refuse_overlap(mesh: Mesh, window_of: Ints, members: Ints, patch: Patch, patches: Sequence[Patch]) -> None:
    taken = members[window_of[members] >= 0]
    if len(taken):
        other = patches[int(window_of[taken[0]])]
        place = mesh.vertices[mesh.faces[taken]].mean(axis=(0, 1))
        gap = float(np.linalg.norm(np.asarray(patch.touchdown_um) - np.asarray(other.touchdown_um)))
        raise WindowError(
            f"windows {other.name!r} and {patch.name!r} overlap near ({place[0]:.4g}, {place[1]:.4g}, "
            f"{place[2]:.4g}) µm: their middles are {gap:.4g} µm apart; move one, shrink one, or join them"
        )
    if not len(members):
        raise WindowError(
            f"window {patch.name!r} has no panel of its own; it is smaller than the panels can be made here"
        )


def _layered(mesh: Mesh, window_of: Ints, patches: Sequence[Patch], fineness: Fineness) -> Mesh:
    """Cut along lines of equal distance on both sides of every rim."""
    mesh = _without_ears(mesh, window_of)
    rim, rim_window = rim_edges(mesh.faces, window_of[mesh.parent])
    if len(rim) == 0:
        return mesh
    band = np.array([1.5 * _rim_size(patch, fineness) for patch in patches])[rim_window]
    start, end = mesh.vertices[rim[:, 0]], mesh.vertices[rim[:, 1]]

    def scaled_distance(points: Floats) -> Floats:
        distance, segment = segment_distance(points, start, end)
        return np.asarray(distance / band[segment])

    value = np.full(len(mesh.vertices), np.inf)
    tree = cKDTree(np.concatenate([start, end]))
    reach = band.max() + np.linalg.norm(end - start, axis=1).max()
    close = np.flatnonzero(tree.query(mesh.vertices, distance_upper_bound=2.0 * reach)[0] < np.inf)
    value[close] = scaled_distance(mesh.vertices[close])
    value[rim.ravel()] = 0.0
    reached = connected_vertices(mesh, value < 1.0, mesh.vertices[rim.ravel()])
    value[(value < 1.0) & ~reached] = np.inf
    for k in range(fineness.layers, 0, -1):
        mesh, value = cut_along_level(mesh, value, (k / fineness.layers) ** 3, snap=_LAYER_SNAP)
    return mesh


def _without_ears(mesh: Mesh, window_of: Ints) -> Mesh:
    """Split inner edges that join two rim vertices: no line of equal distance could cross their faces."""
    tags = window_of[mesh.parent]
    rim, _ = rim_edges(mesh.faces, tags)
    on_rim = np.zeros(len(mesh.vertices), bool)
    on_rim[rim.ravel()] = True
    edges, of_face = mesh_edges(mesh.faces)
    is_rim = np.isin(edges[:, 0] * len(mesh.vertices) + edges[:, 1], rim[:, 0] * len(mesh.vertices) + rim[:, 1])
    chosen = on_rim[edges].all(axis=1) & ~is_rim
    return split_edges(mesh, edges, of_face, chosen, mesh.vertices[edges[chosen]].mean(axis=1))
