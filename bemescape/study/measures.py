"""What one row of the table says about a solved shape, beside what its summary says."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components, dijkstra

from bemescape.results.measures import path_graph
from bemescape.windows.mesh_edits import mesh_edges

if TYPE_CHECKING:
    from collections.abc import Mapping

    from bemescape.results.result import EscapeResult

__all__ = ["longest_geodesic_um", "measured", "narrowest_neck_radius_um", "shape_lengths", "sphericity"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Levels of time at which the neck is looked for, equally far apart in area and in time, and then beside the best one.
_NECK_LEVELS, _NECK_LEVELS_AGAIN = 16, 28
#: A slow place of the wall is one whose time is above the mean by this factor.
SLOW_FACTOR = 1.1


def shape_lengths(result: EscapeResult) -> Mapping[str, float]:
    """Lengths in µm that take a while to find and that the diffusion coefficient does not change."""
    return {
        "longest_geodesic_um": longest_geodesic_um(result.vertices, result.faces),
        "narrowest_neck_radius_um": narrowest_neck_radius_um(result),
    }


def measured(result: EscapeResult, lengths: Mapping[str, float] | None = None) -> Mapping[str, Any]:
    """One row of the table: numbers in µm and s, without the labels that the study file gives the shape.

    Parameters
    ----------
    result : EscapeResult
    lengths : mapping, optional
        Its `shape_lengths`, where they are known from the same shape at another diffusion coefficient.
    """
    summary = result.summary
    wall = result.panel_window < 0
    wall_area = float(result.panel_areas_um2[wall].sum())
    slow = wall & (result.panel_time_s > SLOW_FACTOR * result.mean_time_s)
    rule = summary.rule_of_thumb.mean_time_s
    return {
        "mean_time_s": summary.mean_time_s,
        "relative_error": summary.relative_error,
        "mean_time_error_s": summary.mean_time_s * summary.relative_error,
        "target_met": summary.target_met,
        "escape_time_sd_s": summary.escape_time_sd_s,
        "cv": None if summary.spread is None else summary.spread.cv,
        "slowest_time_s": summary.slowest_time_s,
        "slow_fraction": float(result.panel_areas_um2[slow].sum()) / wall_area if wall_area > 0.0 else 0.0,
        "slow_regions": len(summary.slow_regions),
        "volume_um3": summary.volume_um3,
        "area_um2": summary.area_um2,
        "sphericity": sphericity(summary.volume_um3, summary.area_um2),
        **(shape_lengths(result) if lengths is None else lengths),
        "window_count": len(summary.windows),
        "window_area_um2": sum(window.area_um2 for window in summary.windows),
        "rule_of_thumb_s": rule,
        "rule_of_thumb_ratio": summary.mean_time_s / rule,
        "balance": summary.checks.balance,
        "panels": summary.panels,
        "iterations": summary.iterations,
        "shares": {window.name: window.share for window in summary.windows},
        "notes": " | ".join(summary.notes),
        "mesh_sha256": summary.made_with.mesh_sha256,
        "solve_wall_s": summary.wall_s,
    }


def sphericity(volume_um3: float, area_um2: float) -> float:
    """Area of the ball of the same volume over the area: 1 for a ball, less for any other body.

    Source: Wadell (1935), J. Geol. 43:250, doi:10.1086/624298.

    >>> round(sphericity(1.0, 6.0), 4)  # a cube: (π/6)^(1/3)
    0.806
    """
    return float(np.cbrt(math.pi * (6.0 * volume_um3) ** 2)) / area_um2


def longest_geodesic_um(vertices: Floats, faces: Ints) -> float:
    """Longest of the shortest paths along the wall, in µm: from one of the two places farthest apart to the other.

    Found by going to the farthest place again and again, which gives a lower bound that is exact on long bodies;
    paths along edges and across pairs of faces are a few per cent too long.
    """
    graph = path_graph(vertices, faces)
    place, longest = int(faces[0, 0]), 0.0
    for _ in range(4):
        distance = dijkstra(graph, directed=False, indices=place)
        distance[~np.isfinite(distance)] = 0.0
        farthest = int(distance.argmax())
        if distance[farthest] <= longest * (1.0 + 1e-12):
            break
        place, longest = farthest, float(distance[farthest])
    return longest


def narrowest_neck_radius_um(result: EscapeResult) -> float:
    """Radius in µm of the disc whose area is that of the narrowest way from the bulk of the volume to the windows.

    Lines of equal time on the wall run around a neck. For levels of time whose far side holds at least half of the
    volume, the wall between such a line and its window is closed by a cross-section whose area is the length of the
    vector area of that piece of wall with its window, ∫n dS; the cross-sections of several ways add up, and the
    smallest sum counts. Where nothing is narrower than the windows themselves, their own size is returned. An
    estimate: a line around a bent neck is taken for a plane one.
    """
    areas, normals = result.panel_areas_um2, result.panel_normals
    vectors = areas[:, None] * normals
    window = result.panel_window >= 0
    flat = sum(
        float(np.linalg.norm(vectors[result.panel_window == number].sum(axis=0)))
        for number in range(len(result.windows))
    )
    if result.pores is not None:
        flat += math.pi * float((result.pores.radius_um**2).sum())
    wall_times = result.panel_time_s[~window]
    if not len(wall_times):
        return math.sqrt(float(areas.sum()) / math.pi)
    narrowest = flat if flat > 0.0 else float(areas[window].sum())
    pairs = _touching(result.faces)
    by_area = np.quantile(wall_times, np.linspace(0.0, 1.0, _NECK_LEVELS + 2)[1:-1])
    by_time = np.linspace(float(wall_times.min()), float(wall_times.max()), _NECK_LEVELS + 2)[1:-1]
    levels = np.unique(np.concatenate([[float(wall_times.min())], by_area, by_time]))
    centroids = result.panel_centroids
    sections = _sections(result, vectors, centroids, pairs, levels)
    best = int(np.argmin(sections))
    # Two places on: the neighbour may be all but the same level, of the other series.
    low, high = levels[max(best - 2, 0)], levels[min(best + 2, len(levels) - 1)]
    again = np.linspace(low, high, _NECK_LEVELS_AGAIN + 2)[1:-1]
    narrowest = min(narrowest, float(sections[best]), float(_sections(result, vectors, centroids, pairs, again).min()))
    return math.sqrt(narrowest / math.pi)


def _sections(result: EscapeResult, vectors: Floats, centroids: Floats, pairs: Ints, levels: Floats) -> Floats:
    """Cross-section (k,) at each level; infinite where less than half of the volume lies beyond it."""
    sections = np.full(len(levels), np.inf)
    for number, level in enumerate(levels):
        near = (result.panel_window >= 0) | (result.panel_time_s <= level)
        section, volume = _cross_section(vectors, centroids, near, pairs)
        if volume > 0.5 * result.volume_um3:
            break
        sections[number] = section
    return sections


def _touching(faces: Ints) -> Ints:
    """Pairs (k, 2) of panels with a common edge."""
    _, of_face = mesh_edges(faces)
    order = np.argsort(of_face.ravel(), kind="stable")
    edge, panel = of_face.ravel()[order], order // 3
    same = edge[1:] == edge[:-1]
    return np.column_stack([panel[:-1][same], panel[1:][same]])


def _cross_section(vectors: Floats, centroids: Floats, near: NDArray[np.bool_], pairs: Ints) -> tuple[float, float]:
    """Area of the cross-sections between near and far panels, and the volume on the near side.

    Both sides fall into connected pieces. A piece with one border is closed by the cross-section −∫n dS; a piece with
    several would let them cancel, so that the side which gives more is believed.
    """
    inside = near[pairs]
    same = inside[:, 0] == inside[:, 1]
    count = len(near)
    joined = coo_matrix((np.ones(int(same.sum())), (pairs[same, 0], pairs[same, 1])), shape=(count, count))
    pieces, piece = connected_components(joined, directed=False)
    total = np.column_stack([np.bincount(piece, weights=vectors[:, axis], minlength=pieces) for axis in range(3)])
    is_near = np.zeros(pieces, dtype=bool)
    is_near[piece[near]] = True
    size = np.linalg.norm(total, axis=1)
    section = max(float(size[is_near].sum()), float(size[~is_near].sum()))

    # Volume of near pieces by the divergence theorem, each seen from the middle of its border, so that the flat
    # cross-section adds nothing.
    border = pairs[~same]
    members = np.where(near[border[:, 0]], border[:, 0], border[:, 1])
    weight = np.bincount(piece[members], minlength=pieces)
    sums = [np.bincount(piece[members], weights=centroids[members, axis], minlength=pieces) for axis in range(3)]
    middle = np.column_stack(sums) / np.maximum(weight, 1)[:, None]
    height = np.einsum("ij,ij->i", centroids - middle[piece], vectors) / 3.0
    volume = float(height[is_near[piece]].sum())
    return section, volume
