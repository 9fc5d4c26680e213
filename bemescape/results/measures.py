"""What is read off a solution: slow regions, the rule of thumb, the summary."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csr_matrix
from scipy.sparse.csgraph import connected_components, dijkstra

from bemescape.errors import SettingsError
from bemescape.results.spread import exponential_statement
from bemescape.results.summary import (
    Checks,
    CrossCheckSummary,
    MadeWith,
    RuleOfThumb,
    SlowRegion,
    SpreadSummary,
    StartSummary,
    Summary,
    WalkersSummary,
    WindowSummary,
)
from bemescape.version import __version__
from bemescape.windows.mesh_edits import mesh_edges

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.results.second_opinion import CrossCheck, WalkerEstimate
    from bemescape.results.ways_out import WaysOut

__all__ = ["Region", "SlowRegions", "find_slow_regions", "path_graph", "rule_of_thumb", "summarise"]

_Opinion = TypeVar("_Opinion", CrossCheckSummary, WalkersSummary)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Region:
    """One connected slow part of the wall; `path_um` (k, 3) leads along the wall from its centre to a window."""

    area_um2: float
    mean_time_s: float
    centre_um: tuple[float, float, float]
    distance_to_window_um: float
    nearest_window: str
    path_um: Floats


@dataclass(frozen=True, eq=False)
class SlowRegions:
    """The slowest part of the wall, in connected regions, largest first.

    Attributes
    ----------
    wall_fraction : float
        Part of the wall's area above the level.
    level_s : float
        The level of time.
    panel_region : (m,) int64
        Number of the region of each panel; −1 for none.
    regions : tuple of Region
    """

    wall_fraction: float
    level_s: float
    panel_region: Ints
    regions: tuple[Region, ...]

    def __iter__(self) -> Iterator[Region]:
        return iter(self.regions)

    def __len__(self) -> int:
        return len(self.regions)


def find_slow_regions(result: EscapeResult, wall_fraction: float) -> SlowRegions:
    """See `EscapeResult.slow_regions`."""
    if not 0.0 < wall_fraction <= 1.0:
        raise SettingsError(f"wall_fraction is {wall_fraction:g}; it must be above 0 and at most 1")
    areas, time = result.panel_areas_um2, result.panel_time_s
    region = np.full(len(areas), -1)
    wall = np.flatnonzero(result.panel_window < 0)
    if len(wall) == 0:
        return SlowRegions(wall_fraction, float(time.max()), region, ())
    slowest_first = wall[np.argsort(-time[wall], kind="stable")]
    covered = np.cumsum(areas[slowest_first])
    count = int(np.searchsorted(covered, wall_fraction * covered[-1] * (1.0 - 1e-12))) + 1
    chosen = np.sort(slowest_first[:count])
    label = _face_components(result.faces[chosen])
    size = np.bincount(label, weights=areas[chosen])
    rank = np.empty(len(size), np.int64)
    rank[np.argsort(-size, kind="stable")] = np.arange(len(size))
    region[chosen] = rank[label]
    paths = _PathsAlongWall(result)
    regions = tuple(_region(result, paths, np.flatnonzero(region == number)) for number in range(len(size)))
    return SlowRegions(wall_fraction, float(time[slowest_first[count - 1]]), region, regions)


def _region(result: EscapeResult, paths: _PathsAlongWall, members: Ints) -> Region:
    weight = result.panel_areas_um2[members]
    centroids = result.panel_centroids[members]
    middle = np.average(centroids, axis=0, weights=weight)
    centre_panel = members[int(np.linalg.norm(centroids - middle, axis=1).argmin())]
    x, y, z = (float(value) for value in result.panel_centroids[centre_panel])
    distance, window, path = paths.from_panel(int(centre_panel))
    mean = float(np.average(result.panel_time_s[members], weights=weight))
    return Region(float(weight.sum()), mean, (x, y, z), distance, window, path)


class _PathsAlongWall:
    """Shortest paths from vertices to the nearest window along mesh edges and across pairs of faces.

    The shortcut between the two outer corners of each pair of faces (unfolded flat) brings the error of edge
    paths from up to 15 % down to a few per cent on ordinary meshes.
    """

    def __init__(self, result: EscapeResult) -> None:
        self._result = result
        vertices, faces = result.vertices, result.faces
        # A compact pore is a place of its own, joined to the corners of the panel under it.
        places, owner_of_place = _pore_places(result)
        graph, n = path_graph(vertices, faces), len(vertices) + len(places)
        if result.pores is not None:
            edges, corners = graph.tocoo(), faces[result.pores.panel]
            start = np.concatenate([edges.row, np.repeat(np.arange(len(vertices), n), 3)])
            end = np.concatenate([edges.col, corners.ravel()])
            gap = np.linalg.norm(vertices[corners] - places[:, None], axis=2).ravel()
            weight = np.concatenate([edges.data, np.maximum(gap, 1e-300)])
            graph = csr_matrix(coo_matrix((weight, (start, end)), shape=(n, n)))
        openings = np.concatenate([np.unique(faces[result.panel_window >= 0]), np.arange(len(vertices), n)])
        self._distance, self._before, self._source = dijkstra(
            graph, directed=False, indices=openings, min_only=True, return_predecessors=True
        )
        owner = np.full(n, -1)
        inside = result.panel_window >= 0
        owner[faces[inside]] = result.panel_window[inside][:, None]
        owner[len(vertices) :] = owner_of_place
        self._owner, self._places = owner, np.concatenate([vertices, places])

    def from_panel(self, panel: int) -> tuple[float, str, Floats]:
        """Length, name of the window and way points (k, 3) from the centroid of a panel."""
        result = self._result
        centroid = result.panel_centroids[panel]
        corners = result.faces[panel]
        length = self._distance[corners] + np.linalg.norm(result.vertices[corners] - centroid, axis=1)
        best = int(length.argmin())
        if not np.isfinite(length[best]):
            return float("inf"), "", centroid[None]
        way = [int(corners[best])]
        while self._before[way[-1]] >= 0:
            way.append(int(self._before[way[-1]]))
        window = result.windows[int(self._owner[way[-1]])].name
        return float(length[best]), window, np.concatenate([centroid[None], self._places[way]])


def _pore_places(result: EscapeResult) -> tuple[Floats, Ints]:
    """Middles (p, 3) of the compact pores and the numbers of their windows (p,)."""
    if result.pores is None:
        return np.zeros((0, 3)), np.zeros(0, np.int64)
    return result.pores.centre_um, result.pores.window


def path_graph(vertices: Floats, faces: Ints) -> csr_matrix:
    """Lengths (n, n) of the edges of a surface and of the shortcuts across pairs of faces, each pair once.

    Shortest paths in it, undirected, are those along the wall to a few per cent.
    """
    edges, of_face = mesh_edges(faces)
    length = np.linalg.norm(vertices[edges[:, 1]] - vertices[edges[:, 0]], axis=1)
    order = np.argsort(of_face.ravel(), kind="stable")
    sorted_edges = of_face.ravel()[order]
    paired = np.flatnonzero(sorted_edges[1:] == sorted_edges[:-1])
    apex = np.roll(faces, 1, axis=1).ravel()[order]  # corner opposite to edge k
    left, right, hinge = apex[paired], apex[paired + 1], edges[sorted_edges[paired]]
    across = _unfolded_distance(vertices, left, right, hinge)
    start = np.concatenate([edges[:, 0], left])
    end = np.concatenate([edges[:, 1], right])
    weight = np.concatenate([length, across])
    keep = np.isfinite(weight)
    n = len(vertices)
    return csr_matrix(coo_matrix((weight[keep], (start[keep], end[keep])), shape=(n, n)))


def _unfolded_distance(vertices: Floats, left: Ints, right: Ints, hinge: Ints) -> Floats:
    """Straight distance between the outer corners of two faces laid flat; infinite if it leaves the pair."""
    a, b = vertices[hinge[:, 0]], vertices[hinge[:, 1]]
    axis = b - a
    span = np.maximum(np.linalg.norm(axis, axis=1), 1e-300)
    axis = axis / span[:, None]

    def flat(corner: Ints) -> tuple[Floats, Floats]:
        offset = vertices[corner] - a
        along = np.einsum("ij,ij->i", offset, axis)
        return along, np.linalg.norm(offset - along[:, None] * axis, axis=1)

    along_left, off_left = flat(left)
    along_right, off_right = flat(right)
    total = np.maximum(off_left + off_right, 1e-300)
    crossing = along_left + (along_right - along_left) * off_left / total
    distance = np.hypot(along_right - along_left, off_left + off_right)
    return np.where((crossing >= 0.0) & (crossing <= span), distance, np.inf)


def _face_components(faces: Ints) -> Ints:
    """Number of the component of each face (m,), faces joined by common edges."""
    edges, of_face = mesh_edges(faces)
    rows = np.repeat(np.arange(len(faces)), 3)
    incidence = coo_matrix((np.ones(len(rows)), (rows, of_face.ravel())), shape=(len(faces), len(edges))).tocsr()
    return np.asarray(connected_components(incidence @ incidence.T, directed=False)[1])


def rule_of_thumb(volume_um3: float, window_areas_um2: Floats, diffusion_um2_s: float) -> RuleOfThumb:
    """V/(4 D Σa) with a = √(area/π) of each window: small, round, absorbing windows far apart.

    Source: Berg & Purcell (1977), doi:10.1016/S0006-3495(77)85544-6, for the rate 4Da of a disc.
    """
    radii = np.sqrt(window_areas_um2 / np.pi)
    return RuleOfThumb(
        formula="V / (4 D Σ √(A/π))",
        mean_time_s=float(volume_um3 / (4.0 * diffusion_um2_s * radii.sum())),
    )


def _spread_summary(result: EscapeResult) -> SpreadSummary | None:
    spread = result.spread
    if spread is None:
        return None
    return SpreadSummary(
        second_moment_s2=spread.second_moment_s2,
        cv=spread.cv,
        sd_relative_error=spread.relative_error,
        exponential_within=spread.exponential_within,
        tail_time_s=spread.tail_time_s,
        statement=exponential_statement(spread),
        balance=spread.balance,
    )


def _share_disagreement(result: EscapeResult, ways: WaysOut) -> float:
    shares = np.array([result.windows[number].share for number in ways.windows])
    return float(np.abs(ways.mean_splitting - shares).max())


def _opinion(kind: type[_Opinion], opinion: CrossCheck | WalkerEstimate | None) -> _Opinion | None:
    return None if opinion is None else kind(statement=opinion.line, **asdict(opinion))


def summarise(result: EscapeResult) -> Summary:
    """The content of `summary.json`."""
    window_areas = np.array([window.area_um2 for window in result.windows])
    wall_time = result.panel_time_s[result.panel_window < 0]
    ways = result.ways_out
    compact = set() if result.pores is None else set(result.pores.window.tolist())
    conditional_time = {} if ways is None else dict(zip(ways.windows, ways.mean_conditional_time_s, strict=True))
    return Summary(
        name=result.name,
        mean_time_s=result.mean_time_s,
        relative_error=result.relative_error,
        target_met=result.target_met,
        diffusion_um2_s=result.diffusion_um2_s,
        volume_um3=result.volume_um3,
        area_um2=float(result.panel_areas_um2.sum()),
        windows=[
            WindowSummary(
                name=window.name,
                area_um2=window.area_um2,
                share=window.share,
                permeability_um_s=window.permeability_um_s if np.isfinite(window.permeability_um_s) else None,
                share_error=window.share_error,
                conditional_time_s=conditional_time.get(number),
                compact=number in compact,
            )
            for number, window in enumerate(result.windows)
        ],
        escape_time_sd_s=result.escape_time_sd_s,
        spread=_spread_summary(result),
        start=dict(result.start),
        start_details={name: StartSummary(**asdict(row)) for name, row in result.start_details.items()},
        slowest_time_s=float(wall_time.max() if len(wall_time) else result.panel_time_s.max()),
        slow_regions=[
            SlowRegion(
                area_um2=region.area_um2,
                mean_time_s=region.mean_time_s,
                centre_um=region.centre_um,
                distance_to_window_um=region.distance_to_window_um,
                nearest_window=region.nearest_window,
            )
            for region in result.slow_regions()
        ],
        rule_of_thumb=rule_of_thumb(result.volume_um3, window_areas, result.diffusion_um2_s),
        panels=len(result.faces),
        iterations=result.iterations,
        wall_s=result.wall_s,
        checks=Checks(
            balance=result.balance,
            splitting_sum=None if ways is None else ways.sum_error,
            splitting_share=None if ways is None else _share_disagreement(result, ways),
            crosscheck=_opinion(CrossCheckSummary, result.crosschecked),
            walkers=_opinion(WalkersSummary, result.walked),
        ),
        notes=list(result.notes),
        made_with=MadeWith(version=__version__, mesh_sha256=result.mesh_sha256, settings=dict(result.settings)),
    )
