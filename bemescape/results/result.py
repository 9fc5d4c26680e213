"""The outcome of one solve, as plain arrays on the refined mesh."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from bemescape.surface.surface import triangle_areas_normals
from bemescape.units import format_time, quantity

if TYPE_CHECKING:
    import pint

    from bemescape.results.measures import SlowRegions
    from bemescape.results.summary import Summary
    from bemescape.surface.heal import HealReport
    from bemescape.surface.health import HealthReport

__all__ = ["EscapeResult", "WindowResult"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class WindowResult:
    """One window after the solve: area in µm², share of all exits, permeability in µm/s (inf: absorbing)."""

    name: str
    area_um2: float
    share: float
    permeability_um_s: float = math.inf


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
        Face of the input surface on which each panel lies.
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
        from bemescape.results.measures import time_at

        return time_at(self, np.atleast_2d(np.asarray(points, dtype=np.float64)), outside=outside)

    def slow_regions(self, wall_fraction: float = 0.1) -> SlowRegions:
        """Connected parts of the slowest `wall_fraction` of the wall's area, largest first."""
        from bemescape.results.measures import find_slow_regions

        return find_slow_regions(self, wall_fraction)

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
