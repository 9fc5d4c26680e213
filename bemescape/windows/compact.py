"""Pores solved without panels of their own: which windows may be, where they lie, and how the wall bends there.

A compact pore is a point on a smooth wall with a known resistance (`bemescape.bem.compact`). That holds where its
radius is small against everything around it: the bend of the wall, sharp edges, other windows. What it leaves out is
estimated here for each pore and enters the error of the result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.surface.surface import Surface
from bemescape.units import format_length
from bemescape.windows.mesh_edits import mesh_edges
from bemescape.windows.nearest import NearestTriangle
from bemescape.windows.patch import FARTHEST_OFF, SMALLEST, Patch
from bemescape.windows.rims import segment_distance
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Window, shown_place

__all__ = ["PlacedPores", "fits_compact", "placed_pores", "pores_on_panels"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]

#: A reach of this many edges of the faces around, and of this many radii: within it a wall of flat faces is taken for a
#: smooth one.
_REACH_EDGES, _REACH_RADII = 3.0, 4.0
#: But no further than this part of the wall's radius of curvature.
_REACH_BEND = 0.9
#: Faces whose normals differ more than this (cosine) meet at an edge that the body has, not at one of its mesh.
_SHARP = 0.7
#: Faces whose normals differ more than this (cosine) from that of the pore belong to another sheet.
_SAME_SHEET = 0.5
#: Radius times mean curvature above which no compact pore is solved, and above which none is chosen unasked.
_MOST_BENT, _BENT = 0.5, 0.2
#: Distances, in radii, below which none is chosen unasked: to sharp edges and other windows, and from middle to middle.
_CLEAR, _SPACED = 3.0, 2.5
#: What the expansion leaves out, relative to the resistance 1/4a. Measured on caps of a ball (tests/test_compact.py):
#: 0.085 (aH)², and less than (a/d)⁴ for a neighbour at d. Close to a sharp edge or a rim at c the field of its mirror
#: image varies over the pore: 0.1 (a/c)³.
_BEND_ERROR, _NEIGHBOUR_ERROR, _EDGE_ERROR = 0.1, 1.0, 0.1
#: Neighbours further than this many radii are left out of that sum.
_NEIGHBOURS = 8.0


@dataclass(frozen=True, eq=False)
class PlacedPores:
    """p compact pores on a surface.

    Attributes
    ----------
    number : (p,) int64
        Their numbers among the windows.
    places : (p, 3) float64
        Middles on the wall.
    face : (p,) int64
        The face of the surface under each.
    radius : (p,) float64
    curvature : (p,) float64
        Mean curvature of the wall around, positive where convex, per µm.
    reach : (p,) float64
        How far around faces stand for a smooth wall.
    resistance_error : (p,) float64
        What may be wrong with the resistance, for D = 1, per µm.
    """

    number: Ints
    places: Floats
    face: Ints
    radius: Floats
    curvature: Floats
    reach: Floats
    resistance_error: Floats

    def __len__(self) -> int:
        return len(self.radius)


@dataclass(frozen=True, eq=False)
class _Bend:
    """How the wall runs around p places: mean curvature, reach, edge length of the faces, distance to what is sharp."""

    curvature: Floats
    change: Floats
    reach: Floats
    edge: Floats
    clear: Floats


class _WallEdges:
    """The edges of a surface: what they bend, and which are sharp."""

    def __init__(self, surface: Surface) -> None:
        vertices, faces = surface.vertices, surface.faces
        edges, of_face = mesh_edges(faces)
        order = np.argsort(of_face.ravel(), kind="stable")
        edge = of_face.ravel()[order]
        twin = np.flatnonzero(edge[1:] == edge[:-1])
        edges, one, other = edges[edge[twin]], order[twin] // 3, order[twin + 1] // 3
        normals = surface.normals
        start, along = vertices[edges[:, 0]], vertices[edges[:, 1]] - vertices[edges[:, 0]]
        middles = vertices[faces].mean(axis=1)
        cosine = np.einsum("ix,ix->i", normals[one], normals[other])
        sine = np.linalg.norm(np.cross(normals[one], normals[other]), axis=1)
        convex = np.einsum("ix,ix->i", middles[other] - middles[one], normals[one]) < 0.0
        angle = np.arctan2(sine, cosine) * np.where(convex, 1.0, -1.0)
        sharp = cosine < _SHARP
        self._sharp_start, self._sharp_end = start[sharp], (start + along)[sharp]
        bent = (np.abs(angle) > 1e-9) & ~sharp
        # Three Gauss points on each edge stand for it.
        nodes, weights = np.polynomial.legendre.leggauss(3)
        points = start[bent, None] + 0.5 * (nodes[:, None] + 1.0) * along[bent, None]
        length = np.linalg.norm(along[bent], axis=1)
        self._points = points.reshape(-1, 3)
        self._bend = (0.5 * (angle[bent] * length)[:, None] * 0.5 * weights).ravel()
        self._normals = np.repeat(normals[one[bent]] + normals[other[bent]], 3, axis=0)
        self._tree = cKDTree(self._points) if len(self._points) else None

    def mean_curvature(self, places: Floats, normals: Floats, reach: Floats) -> Floats:
        """Mean curvature (p,) around places (p, 3) with normals (p, 3), smoothed over a reach (p,).

        ½ Σ (angle × length) of the edges within, weighted by (1 − r²/L²)², over the weighted area πL²/3. ½ Σ is the
        integral of the mean curvature of a polyhedron (Cohen-Steiner & Morvan 2003, doi:10.1145/777792.777839).
        """
        if self._tree is None:
            return np.zeros(len(places))
        lists = self._tree.query_ball_point(places, reach)
        count = np.array([len(near) for near in lists])
        near = np.concatenate([np.asarray(part, np.int64) for part in lists]) if count.sum() else np.zeros(0, np.int64)
        row = np.repeat(np.arange(len(places)), count)
        square = ((self._points[near] - places[row]) ** 2).sum(axis=1) / reach[row] ** 2
        weight = (1.0 - square) ** 2
        # Both normals of an edge are summed: twice the cosine.
        weight *= np.einsum("ix,ix->i", self._normals[near], normals[row]) > 2.0 * _SAME_SHEET
        total = np.bincount(row, weights=weight * self._bend[near], minlength=len(places))
        return np.asarray(total / (np.pi * reach**2 / 3.0))

    def distance_to_sharp(self, places: Floats) -> Floats:
        """Distance (p,) to the nearest sharp edge; infinite where there is none."""
        if not len(self._sharp_start):
            return np.full(len(places), np.inf)
        return segment_distance(places, self._sharp_start, self._sharp_end)[0]


def _bend_of(wall: Wall, places: Floats, face: Ints, radius: Floats) -> _Bend:
    surface = wall.surface
    edges, normals = _WallEdges(surface), surface.normals[face]
    _, around = cKDTree(wall.middles).query(places, k=min(7, len(surface.faces)))
    # An equilateral face with edge l has the area 0.433 l².
    edge = np.sqrt(surface.areas[around].reshape(len(places), -1).mean(axis=1) / 0.433)
    clear = edges.distance_to_sharp(places)
    least = 1e-3 * radius  # on a sharp edge itself
    close = np.maximum(np.minimum(_REACH_EDGES * edge, clear), least)
    bend = np.abs(edges.mean_curvature(places, normals, close))
    reach = np.minimum(np.maximum(_REACH_EDGES * edge, _REACH_RADII * radius), clear)
    reach = np.maximum(np.minimum(reach, _REACH_BEND / np.maximum(bend, 1e-300)), least)
    curvature = edges.mean_curvature(places, normals, reach)
    wider = np.minimum(1.5 * reach, np.maximum(clear, reach))
    change = np.abs(edges.mean_curvature(places, normals, wider) - curvature)
    return _Bend(curvature, change, reach, edge, clear)


def _on_wall(wall: Wall, windows: Sequence[Window], discs: Sequence[Disc]) -> tuple[Floats, Ints]:
    centres = np.array([disc.centre_um for disc in discs])
    gap, places, face = wall.nearest.closest(centres)
    for window, disc, off, place in zip(windows, discs, gap, places, strict=True):
        if disc.radius_um < SMALLEST * wall.diagonal:
            raise WindowError(
                f"window {window.name!r} has a radius of {format_length(disc.radius_um)}, below {SMALLEST:g} of the "
                f"surface's size ({format_length(SMALLEST * wall.diagonal)}): check the units"
            )
        if off > FARTHEST_OFF * disc.radius_um:
            raise WindowError(
                f"window {window.name!r} lies {format_length(float(off))} off the wall (limit "
                f"{format_length(FARTHEST_OFF * disc.radius_um)}, half its radius); move its centre to the nearest "
                f"point of the wall, {shown_place(place)}, and check that centre and surface are in the same unit"
            )
    return places, face


def fits_compact(wall: Wall, windows: Sequence[Window], discs: Sequence[Disc]) -> Mask:
    """Which of some round windows (p,) may be solved as compact pores unasked.

    Those smaller than the faces around, far from sharp edges and from one another, where the wall hardly bends.
    """
    places, face = _on_wall(wall, windows, discs)
    radius = np.array([disc.radius_um for disc in discs])
    bend = _bend_of(wall, places, face, radius)
    fits = (radius <= bend.edge) & (radius * np.abs(bend.curvature) <= _BENT) & (bend.clear >= _CLEAR * radius)
    normals = wall.surface.normals[face]
    one, other, gap = _neighbours(places, normals, _SPACED * 2.0 * float(radius.max()))
    close = gap < _SPACED * np.maximum(radius[one], radius[other])
    fits[one[close]] = False
    return np.asarray(fits)


def _neighbours(places: Floats, normals: Floats, distance: float) -> tuple[Ints, Ints, Floats]:
    """Ordered pairs of places on one side of the wall closer than a distance, and how far apart they are."""
    pairs = cKDTree(places).query_pairs(distance, output_type="ndarray").astype(np.int64)
    pairs = pairs[np.einsum("ix,ix->i", normals[pairs[:, 0]], normals[pairs[:, 1]]) > 0.0]
    one, other = np.concatenate([pairs, pairs[:, ::-1]]).T
    return one, other, np.linalg.norm(places[one] - places[other], axis=1)


def placed_pores(
    wall: Wall, numbers: Sequence[int], windows: Sequence[Window], patches: Sequence[Patch]
) -> PlacedPores | None:
    """Compact pores for round windows with these numbers, clear of the patches of meshed windows; None for none.

    Raises
    ------
    WindowError
        A pore is off the wall; two overlap, or one overlaps a meshed window; the wall bends too much over one, or has
        a sharp edge within it.
    """
    if not windows:
        return None
    discs = [window.shape for window in windows if isinstance(window.shape, Disc)]
    places, face = _on_wall(wall, windows, discs)
    radius = np.array([disc.radius_um for disc in discs])
    normals = wall.surface.normals[face]
    one, other, gap = _neighbours(places, normals, _NEIGHBOURS * float(radius.max()))
    _refuse_overlaps(windows, places, radius, one, other, gap)
    to_rims = _clear_of_patches(windows, places, face, radius, patches)
    bend = _bend_of(wall, places, face, radius)
    for window, a, curvature, clear in zip(windows, radius, bend.curvature, bend.clear, strict=True):
        if a * abs(curvature) > _MOST_BENT:
            raise WindowError(
                f"window {window.name!r} has a radius of {format_length(float(a))} where the wall bends with a radius "
                f"of {format_length(1.0 / abs(float(curvature)))} (limit for a compact pore: {1.0 / _MOST_BENT:g} "
                "times its own); give it panels with compact = false"
            )
        if clear < a:
            raise WindowError(
                f"window {window.name!r} has a radius of {format_length(float(a))} and a sharp edge of the wall "
                f"{format_length(float(clear))} from its middle, which a compact pore cannot have; give it panels with "
                "compact = false"
            )
    crowding = 0.5 * (radius[one] ** 2 + radius[other] ** 2) / gap**2
    left_out = _BEND_ERROR * (radius * bend.curvature) ** 2
    left_out += _NEIGHBOUR_ERROR * np.bincount(one, weights=crowding**2, minlength=len(radius))
    left_out += _EDGE_ERROR * (radius / np.minimum(bend.clear, to_rims)) ** 3
    # How the curvature was estimated, and what faces of a wall that bends by `facets` from one to the next do to it.
    facets = np.minimum(1.0, _REACH_EDGES * bend.edge * np.abs(bend.curvature))
    unsure = np.abs(bend.curvature) * facets + bend.change * np.log(4.0 * np.maximum(bend.reach / radius, 1.0))
    return PlacedPores(
        number=np.asarray(numbers, np.int64),
        places=places,
        face=face,
        radius=radius,
        curvature=bend.curvature,
        reach=bend.reach,
        resistance_error=left_out / (4.0 * radius) + unsure / (4.0 * np.pi),
    )


def _refuse_overlaps(
    windows: Sequence[Window], places: Floats, radius: Floats, one: Ints, other: Ints, gap: Floats
) -> None:
    overlap = np.flatnonzero(gap < (radius[one] + radius[other]) * (1.0 - 1e-9))
    if len(overlap):
        worst = overlap[gap[overlap].argmin()]
        first, second = sorted((int(one[worst]), int(other[worst])))
        raise WindowError(
            f"windows {windows[first].name!r} and {windows[second].name!r} overlap near {shown_place(places[first])}: "
            f"their middles are {format_length(float(gap[worst]))} apart; move one, shrink one, or join them"
        )


def _clear_of_patches(
    windows: Sequence[Window], places: Floats, face: Ints, radius: Floats, patches: Sequence[Patch]
) -> Floats:
    """Distance (p,) to the nearest rim of a meshed window."""
    nearest = np.full(len(places), np.inf)
    for patch in patches:
        to_rim = patch.distance_to_rim(places)
        inside = np.isin(face, patch.faces)
        if patch.level is not None:
            inside &= patch.level(places) < 0.0
        # A rim on another sheet may be close without an overlap.
        overlaps = inside | ((to_rim < radius) & np.isin(face, patch.faces))
        if overlaps.any():
            pore = int(np.flatnonzero(overlaps)[0])
            raise WindowError(
                f"windows {patch.name!r} and {windows[pore].name!r} overlap near {shown_place(places[pore])}; move "
                "one, shrink one, or join them"
            )
        nearest = np.minimum(nearest, to_rim)
    return np.asarray(np.maximum(nearest, radius))


def pores_on_panels(pores: PlacedPores, vertices: Floats, faces: Ints) -> tuple[Ints, Floats]:
    """The panel (p,) of each pore, and its place (p, 3) inside it, clear of the edges.

    On an edge the wall has no normal: a place there moves by a hundredth of the panel's size.
    """
    corners = vertices[faces]
    _, places, panel = NearestTriangle(corners).closest(pores.places)
    a, b, c = (corners[panel, k] for k in range(3))
    normal = np.cross(b - a, c - a)
    square = np.einsum("ix,ix->i", normal, normal)
    parts = np.stack(
        [np.einsum("ix,ix->i", np.cross(q - p, places - p), normal) / square for p, q in ((b, c), (c, a), (a, b))]
    )
    parts = np.maximum(parts, 0.01)
    parts /= parts.sum(axis=0)
    return panel, parts[0][:, None] * a + parts[1][:, None] * b + parts[2][:, None] * c
