"""The reduced model: a few fluxes per candidate site stand for its window, so that an arrangement costs microseconds.

Strategy. With windows open at the sites S, the mean time from x is (D = 1)

    u(x) = ū + Σ_μ c_μ g_μ(x),     u − ρ q = 0 on each window, tested with every flux ψ_μ,

where ψ_μ is a flux through the window of one site, q = Σ c_μ ψ_μ is the outflow density, ρ = D/κ, and g_μ is the
field of that flux alone: Δg = −1/|Ω| for a flux of net flow 1, 0 for one without net flow, no flux elsewhere,
volume mean 0. So

    R c = ū e,   e·c = |Ω|,   R_μν = ρ ∫ψ_μ ψ_ν − ∫ψ_μ g_ν,   e_μ = ∫ψ_μ,

hence ū = |Ω| / (e·R⁻¹e) and the shares are c/|Ω|. R is symmetric by reciprocity and is worked out once, for all
sites; an arrangement takes its rows and columns. With the equilibrium flux alone and R by matched asymptotics this is
the matrix method for small windows on a ball (Cheviakov, Ward & Straube 2010, doi:10.1137/100782620); here R comes
from the surface as it is, and further fluxes, the window's response to potentials linear and quadratic across it,
make near neighbours right.

The fields g are found on panels of the wall without any window, by (½ + K) g = −V ψ + (1/|Ω|) ∫_Ω G, which is
factored once; the singular part of g near its window is in V ψ, integrated in closed form.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve
from scipy.spatial import cKDTree

from bemescape.arrangements.sites import CandidateSites
from bemescape.bem.averages import enclosed_volume
from bemescape.bem.operator import assemble
from bemescape.bem.panels import Panels, make_panels
from bemescape.bem.wall_fluxes import dense_single_layer, flux_couplings, fluxes_on_panels
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.surface.surface import Surface
from bemescape.windows.coarsen import coarsened
from bemescape.windows.grade import Fineness, Placement, graded
from bemescape.windows.mesh_edits import Mesh, bisected_to_size
from bemescape.windows.patch import Patch, disc_patch
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Window

__all__ = ["ReducedModel", "reduced_model"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A surface with more faces than this is coarsened first; the wall gets at least so many panels, and near sites
#: finer ones until there are about so many. The matrix of the wall is dense: 3 000 panels take 70 MB and seconds.
#: (Measured on a ball: windows as small as the coarse faces are 1 % off at 2 000 faces, 0.4 % at 3 000.)
_MOST_FACES, _WALL_PANELS, _MOST_PANELS = 3000, 1500, 3000
#: Panel size at a site in radii, and gained per distance from it.
_SIZE_AT_SITE, _GROWTH = 1.0, 0.5
#: Panels of a window: as a full solve has them at its first resolution.
_RIM = Fineness(rim_segments=16.0, layers=5, wall_panels=1.0, growth=0.5)
#: Fluxes per window: the equilibrium one, and the responses to x, y, x² − y², xy and x² + y².
_MODES = 6
#: Arrangements solved at once.
_BATCH_BYTES = 100_000_000


@dataclass(frozen=True, eq=False)
class ReducedModel:
    """R for s sites with `modes` fluxes each, for D = 1.

    Attributes
    ----------
    volume : float
        |Ω| in µm³.
    resistance : (s, modes, s, modes) float64
        R, made symmetric; in 1/µm between fluxes of net flow 1.
    asymmetry : float
        Largest |R − Rᵀ| between sites before that, relative to the smallest R of a site with itself: what the panels
        of the wall leave of reciprocity.
    panels : int
        Of the wall.
    """

    volume: float
    resistance: Floats
    asymmetry: float
    panels: int

    @property
    def sites(self) -> int:
        """Number of sites."""
        return len(self.resistance)

    def mean_times(self, arrangements: Ints) -> Floats:
        """Mean time (b,) for D = 1 with windows open at the sites of each row of `arrangements` (b, k)."""
        return self._solved(arrangements)[0]

    def shares(self, arrangement: Sequence[int]) -> Floats:
        """Part of all exits (k,) through each window of one arrangement."""
        _, flows = self._solved(np.asarray(arrangement, dtype=np.int64)[None])
        return np.asarray(flows[0] / self.volume)

    def _solved(self, arrangements: Ints) -> tuple[Floats, Floats]:
        count, k = arrangements.shape
        modes = self.resistance.shape[1]
        square = self.resistance.reshape(self.sites * modes, -1)
        net = np.tile(np.arange(modes) == 0, k).astype(np.float64)
        mean, flow = np.empty(count), np.empty((count, k))
        step = max(1, _BATCH_BYTES // (8 * (k * modes) ** 2))
        for begin in range(0, count, step):
            rows = arrangements[begin : begin + step]
            index = (rows[:, :, None] * modes + np.arange(modes)).reshape(len(rows), -1)
            matrix = square[index[:, :, None], index[:, None, :]]
            unit = np.linalg.solve(matrix, np.broadcast_to(net, (len(rows), len(net)))[..., None])[..., 0]
            flows = unit[:, ::modes]
            level = self.volume / flows.sum(axis=1)
            mean[begin : begin + step] = level
            flow[begin : begin + step] = flows * level[:, None]
        return mean, flow


@dataclass(frozen=True, eq=False)
class _SiteFluxes:
    """The fluxes of one window: points (p, 3), weights (modes, p), and their own energy (modes, modes)."""

    points: Floats
    weights: Floats
    own: Floats


def reduced_model(sites: CandidateSites, rho: float, progress: Progress = silent) -> ReducedModel:
    """Work out R for candidate sites.

    Parameters
    ----------
    sites : CandidateSites
    rho : float
        D/κ of each window in µm, 0 where it absorbs perfectly.
    progress : callable, optional

    Raises
    ------
    WindowError
        A window cannot be cut into the wall.
    """
    progress(ProgressEvent("reduced model", 0.0, "panels of the wall"))
    wall, centres = _wall_panels(sites)
    fluxes = []
    for number, centre in enumerate(centres):
        window = replace(sites.windows[number], shape=Disc(tuple(centre.tolist()), sites.radius_um))
        fluxes.append(_site_fluxes(wall, window, rho))
        progress(ProgressEvent("reduced model", 0.4 * (number + 1) / len(sites), f"site {number + 1}"))
    panels = make_panels(wall.corners)
    points = np.concatenate([flux.points for flux in fluxes])
    weights = np.concatenate([flux.weights for flux in fluxes], axis=1)
    first = np.concatenate([[0], np.cumsum([len(flux.points) for flux in fluxes])])
    progress(ProgressEvent("reduced model", 0.5, f"fluxes of {len(sites)} sites against {len(panels)} panels"))
    tested = fluxes_on_panels(panels, points, weights, first)
    couplings = flux_couplings(points, weights, first)
    for number, flux in enumerate(fluxes):
        couplings[number, :, number, :] = flux.own
    progress(ProgressEvent("reduced model", 0.7, f"wall of {len(panels)} panels"))
    operator = assemble(panels, np.full(len(panels), -1), np.zeros(len(panels)))
    volume = enclosed_volume(panels)
    net = np.zeros(_MODES)
    net[0] = 1.0
    flat = (len(sites) * _MODES, len(panels))
    right = -tested.single.reshape(flat) / panels.areas
    right += np.tile(net, len(sites))[:, None] * operator.volume_potential / volume
    matrix = operator.half_plus_double_of_clusters(np.arange(len(panels)), len(panels))
    matrix += panels.areas / panels.areas.sum()  # constants, which ½ + K takes to 0
    g = lu_solve(lu_factor(matrix, overwrite_a=True), right.T).T
    progress(ProgressEvent("reduced model", 0.95, "couplings"))
    level = _volume_means(panels, g.reshape(tested.double.shape), points, weights, first, net, volume)
    # g on the wall is 2 (−V ψ + (1/|Ω|) ∫G − K g), less its mean.
    resistance = 2.0 * couplings
    resistance += 2.0 * (tested.double.reshape(flat) @ g.T).reshape(resistance.shape)
    resistance -= 2.0 * tested.volume[:, :, None, None] * net / volume
    resistance += net[:, None, None] * level
    return _made_symmetric(resistance, fluxes, volume, len(panels))


def _made_symmetric(resistance: Floats, fluxes: Sequence[_SiteFluxes], volume: float, panels: int) -> ReducedModel:
    count = len(fluxes) * _MODES
    square = resistance.reshape(count, count)
    plain = resistance[:, 0, :, 0]
    asymmetry = float(np.abs(plain - plain.T).max() / np.abs(np.diag(plain)).min())
    return ReducedModel(volume, (0.5 * (square + square.T)).reshape(resistance.shape), asymmetry, panels)


def _volume_means(
    panels: Panels, g: Floats, points: Floats, weights: Floats, first: Ints, net: Floats, volume: float
) -> Floats:
    """Volume mean (sites, modes) of each field, by Green's identity with |x|²/6; see `bem.averages`."""
    centre = panels.centroids.mean(axis=0)
    heights = np.einsum("ij,ij->i", panels.centroids - centre, panels.normals)
    squares = ((panels.three_points - centre) ** 2).sum(axis=2).mean(axis=1)
    integral_phi = float((panels.areas * squares * heights).sum() / 30.0)
    flow = weights * ((points - centre) ** 2).sum(axis=1) / 6.0
    of_flux = np.add.reduceat(flow, first[:-1], axis=1).T
    return np.asarray((g @ (panels.areas * heights / 3.0) + of_flux - net * integral_phi / volume) / volume)


def _wall_panels(sites: CandidateSites) -> tuple[Wall, Floats]:
    """The wall in a few thousand panels, and the sites (s, 3) on it."""
    surface = sites.surface
    vertices, faces = np.array(surface.vertices), np.array(surface.faces)
    if len(faces) > _MOST_FACES:
        coarse = coarsened(vertices, faces, np.full(len(faces), -1), _MOST_FACES)
        vertices, faces = coarse.vertices, coarse.faces
    tree = cKDTree(sites.places_um)
    largest = float(np.sqrt(surface.area / _WALL_PANELS / 0.433))

    def size_at(points: Floats) -> Floats:
        away = tree.query(points)[0]
        return np.asarray(np.minimum(largest, _SIZE_AT_SITE * sites.radius_um + _GROWTH * away))

    mesh = bisected_to_size(Mesh(vertices, faces, np.arange(len(faces))), size_at, most_faces=_MOST_PANELS)
    wall = Wall.of(Surface(mesh.vertices, mesh.faces, name=surface.name))
    return wall, wall.nearest.closest(sites.places_um)[1]


def _site_fluxes(wall: Wall, window: Window, rho: float) -> _SiteFluxes:
    """Fluxes through the window of one site: (2V + ρ)⁻¹ of polynomials on its panels, as in a flat wall."""
    if not isinstance(window.shape, Disc):
        raise TypeError(f"the site {window.name!r} is no disc")
    patch, _ = disc_patch(wall, window, window.shape)
    corners, normal = _window_corners(wall, patch, window)
    single, panels = dense_single_layer(corners)
    matrix = 2.0 * single
    matrix[np.diag_indices(len(panels))] += rho * panels.areas
    densities = np.linalg.solve(matrix, _polynomials(panels, normal, window.shape) * panels.areas[:, None]).T
    weights = densities * panels.areas
    flow = weights.sum(axis=1)
    weights[0] /= flow[0]
    weights[1:] -= flow[1:, None] * weights[0]
    own = weights @ (single / np.outer(panels.areas, panels.areas)) @ weights.T
    own += 0.5 * rho * (weights / panels.areas) @ weights.T  # R takes it twice
    scale = np.sqrt(own[0, 0] / np.maximum(np.diag(own), 1e-12 * own[0, 0]))
    scale[0] = 1.0
    return _SiteFluxes(panels.centroids, weights * scale[:, None], own * np.outer(scale, scale))


def _window_corners(wall: Wall, patch: Patch, window: Window) -> tuple[Floats, Floats]:
    """Panels (w, 3, 3) of a window, cut out of the faces around it alone, and their mean normal (3,)."""
    reach = 2.0 * patch.radius_um
    near = np.linalg.norm(wall.middles - np.asarray(patch.touchdown_um), axis=1) - wall.reaches < reach
    near |= np.isin(np.arange(len(near)), patch.faces)
    chosen = np.flatnonzero(near)
    used, faces = np.unique(wall.surface.faces[chosen], return_inverse=True)
    piece = Surface(wall.surface.vertices[used], faces.reshape(-1, 3))
    own = replace(
        patch,
        faces=np.flatnonzero(np.isin(chosen, patch.faces)),
        touchdown_face=int(np.flatnonzero(chosen == patch.touchdown_face)[0]),
    )
    mesh = graded(Placement(piece, (window,), (own,), ()), _RIM)
    corners = mesh.vertices[mesh.faces[mesh.window_of == 0]]
    normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]).sum(axis=0)
    return corners, normal / np.linalg.norm(normal)


def _polynomials(panels: Panels, normal: Floats, disc: Disc) -> Floats:
    """1, x, y, x² − y², xy and x² + y² (w, modes) in the plane of the window, in units of its radius."""
    along = np.eye(3)[int(np.abs(normal).argmin())]
    first = np.cross(normal, along)
    first /= np.linalg.norm(first)
    offset = (panels.centroids - np.asarray(disc.centre_um)) / disc.radius_um
    x, y = offset @ first, offset @ np.cross(normal, first)
    return np.column_stack([np.ones(len(x)), x, y, x * x - y * y, x * y, x * x + y * y])
