"""The outcome of one solve, as plain arrays on the refined mesh."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from bemescape.errors import SettingsError
from bemescape.progress import Progress, silent
from bemescape.surface.surface import triangle_areas_normals
from bemescape.units import Quantity, format_time, quantity

if TYPE_CHECKING:
    import pint

    from bemescape.results.measures import SlowRegions
    from bemescape.results.pores import PoreTable
    from bemescape.results.second_opinion import CrossCheck, WalkerEstimate
    from bemescape.results.spread import Spread
    from bemescape.results.starts import StartResult
    from bemescape.results.summary import Summary
    from bemescape.results.ways_out import WaysOut
    from bemescape.surface.heal import HealReport
    from bemescape.surface.health import HealthReport

__all__ = ["EscapeResult", "WindowResult"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def _as_points(points: ArrayLike) -> Floats:
    return np.atleast_2d(np.asarray(points, dtype=np.float64))


@dataclass(frozen=True)
class WindowResult:
    """One window after the solve.

    Attributes
    ----------
    name : str
    area_um2 : float
    share : float
        Part of all exits, start uniform in the volume.
    permeability_um_s : float
        Infinite for a perfectly absorbing window.
    share_error : float or None
        Estimated absolute error of the share.
    """

    name: str
    area_um2: float
    share: float
    permeability_um_s: float = math.inf
    share_error: float | None = None


@dataclass(frozen=True, eq=False)
class EscapeResult:
    """Mean escape times on a refined mesh of m panels.

    Attributes
    ----------
    name : str
        Name of the case.
    vertices : (n, 3) float64
        Corners of the panels, µm.
    faces : (m, 3) int64
        Panels: rims are edges of this mesh, and every panel is wholly wall or wholly window.
    parent_face : (m,) int64
        Face of the input surface on which each panel lies; -1 on a lid.
    panel_window : (m,) int64
        Number of the window in `windows`; -1 on the wall.
    panel_time_s : (m,) float64
        Mean escape time from the panel, s (0 on an absorbing window).
    panel_exit_density_per_um2 : (m,) float64
        Part of all exits per µm² of window, start uniform in the volume; 0 on the wall.
    windows : tuple of WindowResult
        In the order they were given.
    diffusion_um2_s, mean_time_s, relative_error : float
        D; mean escape time with the start uniform in the volume; its estimated relative error.
    balance : float
        Outflow through all windows * D / V - 1: 0 for an exact solution.
    residuals : tuple of float
        Relative residual after each iteration of the last solve.
    levels : tuple of dict
        One row per resolution: panels, mean_time_s, iterations, seconds.
    start : mapping of str to float
        Mean time from each named start, s.
    start_details : mapping of str to StartResult
        The same with standard deviation, splitting and conditional times.
    spread : Spread or None
        Second moment of the escape time.
    ways_out : WaysOut or None
        Splitting probabilities and conditional times, where they were asked for.
    crosschecked : CrossCheck or None
        What `crosscheck` gave, where `dataclasses.replace` has put it; it is saved and reported with the result.
    walked : WalkerEstimate or None
        The same of `walkers`.
    pores : PoreTable or None
        The windows that are solved as compact pores and have no panels.
    """

    name: str
    vertices: Floats
    faces: Ints
    parent_face: Ints
    panel_window: Ints
    panel_time_s: Floats
    panel_exit_density_per_um2: Floats
    windows: tuple[WindowResult, ...]
    diffusion_um2_s: float
    mean_time_s: float
    relative_error: float
    target: float
    target_met: bool
    balance: float
    residuals: tuple[float, ...]
    levels: tuple[dict[str, float], ...]
    wall_s: float
    start: Mapping[str, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    mesh_sha256: str = ""
    health: HealthReport | None = None
    healing: HealReport | None = None
    start_details: Mapping[str, StartResult] = field(default_factory=dict)
    spread: Spread | None = None
    ways_out: WaysOut | None = None
    crosschecked: CrossCheck | None = None
    walked: WalkerEstimate | None = None
    pores: PoreTable | None = None

    @cached_property
    def _areas_normals(self) -> tuple[Floats, Floats]:
        return triangle_areas_normals(self.vertices, self.faces)

    @property
    def panel_areas_um2(self) -> Floats:
        """Panel areas (m,) in µm²."""
        return self._areas_normals[0]

    @property
    def panel_normals(self) -> Floats:
        """Unit normals (m, 3) out of the diffusing volume."""
        return self._areas_normals[1]

    @property
    def panel_centroids(self) -> Floats:
        """Centroids (m, 3) in µm."""
        return np.asarray(self.vertices[self.faces].mean(axis=1))

    @cached_property
    def volume_um3(self) -> float:
        """Volume of the compartment in µm³ (divergence theorem)."""
        heights = np.einsum("ij,ij->i", self.panel_centroids - self.vertices.mean(axis=0), self.panel_normals)
        return float((self.panel_areas_um2 * heights).sum() / 3.0)

    @property
    def mean_time(self) -> pint.Quantity[Any]:
        """Mean escape time as a quantity in seconds."""
        return quantity(self.mean_time_s, "s")

    @property
    def shares(self) -> dict[str, float]:
        """Window name -> its part of all exits, start uniform in the volume."""
        return {window.name: window.share for window in self.windows}

    @property
    def iterations(self) -> int:
        """Iterations of the last solve."""
        return len(self.residuals)

    def time_at(self, points: ArrayLike, *, outside: str = "raise") -> Floats:
        """Mean escape time in s from points (p, 3) in µm, inside or on the wall.

        Parameters
        ----------
        points : (p, 3) array_like
            Positions in µm.
        outside : {"raise", "nan"}
            What a point outside the volume gives: an error that names it, or NaN.

        Raises
        ------
        SettingsError
            A point lies outside the volume and `outside` is "raise".
        """
        from bemescape.results.points import PlacedPoints

        return PlacedPoints(self, _as_points(points), outside=outside).times()

    @property
    def escape_time_sd_s(self) -> float | None:
        """Standard deviation of the escape time in s, start uniform in the volume; None if it was not computed."""
        return None if self.spread is None else self.spread.sd_s

    def time_sd_at(self, points: ArrayLike, *, outside: str = "raise") -> Floats:
        """Standard deviation of the escape time in s from points (p, 3) in µm; arguments as `time_at`.

        Raises
        ------
        SettingsError
            As `time_at`; or the result holds no spread.
        """
        from bemescape.results.points import PlacedPoints

        if self.spread is None:
            raise SettingsError(f"result {self.name!r} holds no second moment; solve the case again")
        placed = PlacedPoints(self, _as_points(points), outside=outside)
        variance = placed.second_moments(self.spread) - placed.times() ** 2
        return np.sqrt(np.where(variance < 0.0, 0.0, variance))

    def with_diffusion(self, diffusion: Quantity) -> EscapeResult:
        """The result for another D, without solving: with absorbing windows every time is in proportion to 1/D.

        Second opinions are left out, as they were given on the other numbers.

        Raises
        ------
        SettingsError
            D is no such quantity, or a window is partly open: then only D/κ together scale.
        """
        from bemescape.results.scaled import with_diffusion

        return with_diffusion(self, diffusion)

    def with_ways_out(self, windows: Sequence[str] | None = None, *, progress: Progress = silent) -> EscapeResult:
        """A copy that holds `ways_out` for the named windows, or for all of up to twelve; solved on the same panels.

        Raises
        ------
        SettingsError
            A window is unknown, or none is named and there are more than twelve.
        """
        from bemescape.results.prepared import prepare_mesh_again
        from bemescape.results.ways_out import chosen_windows, find_ways_out

        chosen = chosen_windows(self.windows, windows)
        return replace(self, ways_out=find_ways_out(prepare_mesh_again(self, progress), self, chosen))

    @cached_property
    def _known_ways_out(self) -> WaysOut:
        held = self.ways_out if self.ways_out is not None else self.with_ways_out().ways_out
        if held is None:
            raise SettingsError(f"result {self.name!r} holds no ways out; ask for result.with_ways_out()")
        return held

    def splitting(self) -> Floats:
        """Probability (k, m) of leaving through each window from each panel; solved now if `ways_out` is None.

        Row by row the windows of `ways_out.windows`, which are all windows unless fewer were named.
        """
        return self._known_ways_out.panel_splitting

    def splitting_at(self, points: ArrayLike, *, outside: str = "raise") -> Floats:
        """Probability (k, p) of leaving through each window from points (p, 3) in µm; arguments as `time_at`."""
        from bemescape.results.points import PlacedPoints

        return PlacedPoints(self, _as_points(points), outside=outside).splitting(self._known_ways_out)

    def conditional_time(self) -> Floats:
        """Mean time (k, m) in s of those who leave through each window, from each panel; NaN where nobody does."""
        return self._known_ways_out.panel_conditional_time_s

    def conditional_time_at(self, points: ArrayLike, *, outside: str = "raise") -> Floats:
        """Mean time (k, p) in s of those who leave through each window from points (p, 3) in µm, as `time_at`."""
        from bemescape.results.points import PlacedPoints
        from bemescape.results.ways_out import conditional

        placed = PlacedPoints(self, _as_points(points), outside=outside)
        ways = self._known_ways_out
        return conditional(placed.weighted_times(ways), placed.splitting(ways))

    def conductance_um3_s(self) -> Floats:
        """Flow (k, k) in µm³/s into window i for a unit difference of concentration between it and window j.

        Rows sum to zero where all windows are held; symmetric up to the numerical error.
        """
        from bemescape.results.ways_out import conductance_um3_s

        return conductance_um3_s(self, self._known_ways_out)

    def slow_regions(self, wall_fraction: float = 0.1) -> SlowRegions:
        """Connected parts of the slowest `wall_fraction` of the wall's area, largest first."""
        from bemescape.results.measures import find_slow_regions

        return find_slow_regions(self, wall_fraction)

    def crosscheck(self, *, progress: Progress = silent) -> CrossCheck:
        """Second opinion by bempp-cl's symmetric Galerkin system on at most 3 000 panels; takes minutes.

        Raises
        ------
        SettingsError
            A window has no panels.
        AccuracyError
            The mesh cannot be made coarse enough without damage.
        """
        from bemescape.results.second_opinion import cross_check

        return cross_check(self, progress=progress)

    def walkers(self, count: int, *, seed: int = 0, progress: Progress = silent) -> WalkerEstimate:
        """Second opinion by `count` particles, whose standard error is about 1/√count; takes minutes for 100 000.

        Raises
        ------
        SettingsError
            The count or the seed is out of range, or a window has no panels.
        AccuracyError
            More than 1 % of the walkers are lost.
        """
        from bemescape.results.second_opinion import send_walkers

        return send_walkers(self, count, seed=seed, progress=progress)

    @cached_property
    def summary(self) -> Summary:
        """The content of `summary.json`."""
        from bemescape.results.measures import summarise

        return summarise(self)

    def save(self, folder: str | Path, *, pictures: bool = True) -> Path:
        """Write `summary.json`, `surface.vtp`, and with `pictures` also PNGs and `report.html`, into `folder`."""
        from bemescape.results.store import save_result

        return save_result(self, Path(folder), pictures=pictures)

    @staticmethod
    def load(folder: str | Path) -> EscapeResult:
        """Read back what `save` wrote."""
        from bemescape.results.store import load_result

        return load_result(Path(folder))

    def __repr__(self) -> str:
        shares = ", ".join(f"{window.name} {window.share:.1%}" for window in self.windows[:4])
        more = f", and {len(self.windows) - 4} more" if len(self.windows) > 4 else ""
        return (
            f"EscapeResult: {self.name}, {format_time(self.mean_time_s)} ± {self.relative_error:.2%}, "
            f"{shares}{more}, {len(self.faces)} panels"
        )
