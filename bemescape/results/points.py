"""Values at points inside or on the wall, from a result's boundary values."""

from __future__ import annotations

from dataclasses import replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.field import FieldValues, field_at
from bemescape.bem.moments import source_potential_at
from bemescape.bem.panels import Panels, make_panels
from bemescape.bem.sinks import Sinks
from bemescape.errors import SettingsError

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.results.spread import Spread
    from bemescape.results.ways_out import WaysOut

__all__ = ["PlacedPoints"]

Floats = NDArray[np.float64]

#: Points closer to the wall than this part of the bounding box's diagonal count as on it.
_ON_WALL = 1e-6


class PlacedPoints:
    """Points (p, 3) in µm with respect to a result's surface; asks for the fields one by one.

    Parameters
    ----------
    result : EscapeResult
    points : (p, 3) float64
        Inside or on the wall.
    outside : {"raise", "nan"}
        What a point outside gives.

    Raises
    ------
    SettingsError
        A point lies outside the volume and `outside` is "raise"; a wrong shape or option.
    """

    def __init__(self, result: EscapeResult, points: Floats, *, outside: str = "raise") -> None:
        if outside not in {"raise", "nan"}:
            raise SettingsError(f"outside={outside!r} is not known; use 'raise' or 'nan'")
        if points.ndim != 2 or points.shape[1] != 3 or not np.isfinite(points).all():
            raise SettingsError(f"points have the shape {points.shape}; give finite positions in µm, three to a point")
        self._result, self._points = result, points
        self._times = self._field(result.panel_time_s, self._time_slope, 1.0 / result.diffusion_um2_s, self._time_sinks)
        diagonal = float(np.linalg.norm(result.vertices.max(axis=0) - result.vertices.min(axis=0)))
        self._on_wall = self._times.gap < _ON_WALL * diagonal
        self._beyond = (self._times.winding < 0.5) & ~self._on_wall
        if self._beyond.any() and outside == "raise":
            first = int(np.flatnonzero(self._beyond)[0])
            place = ", ".join(f"{value:.4g}" for value in points[first])
            raise SettingsError(
                f"point {first + 1} of {len(points)} at ({place}) µm lies outside the volume, about "
                f"{self._times.gap[first]:.3g} µm from the wall; move it inside, or ask with outside='nan'"
            )

    @cached_property
    def _panels(self) -> Panels:
        return make_panels(self._result.vertices[self._result.faces])

    @cached_property
    def _place_of(self) -> NDArray[np.int64]:
        """Where each panel of the result stands in the order of `_panels`."""
        place = np.empty_like(self._panels.order)
        place[self._panels.order] = np.arange(len(place))
        return place

    @property
    def _time_slope(self) -> Floats:
        result = self._result
        return -result.panel_exit_density_per_um2 * result.volume_um3 / result.diffusion_um2_s

    def _sinks(self, outflow: Floats | None) -> Sinks | None:
        pores = self._result.pores
        return None if pores is None or outflow is None else pores.sinks(outflow)

    @property
    def _time_sinks(self) -> Sinks | None:
        return None if self._result.pores is None else self._result.pores.time_sinks(self._result)

    def _field(self, f: Floats, slope: Floats, source: float, sinks: Sinks | None) -> FieldValues:
        order = self._panels.order
        values = field_at(self._panels, f[order], slope[order], source, self._points)
        if sinks is None:
            return values
        under = self._place_of[self._result.pores.panel] if self._result.pores is not None else np.zeros(0, np.int64)
        of_pores = sinks.close_to_pores(self._panels, under, self._points) - sinks.potential_at(self._points)
        return replace(values, u=values.u + of_pores)

    def _settled(self, inside: Floats, on_panels: Floats) -> Floats:
        values = np.where(self._on_wall, on_panels[self._panels.order[self._times.nearest]], inside)
        values[self._beyond] = np.nan
        return values

    def _chained(
        self,
        f: Floats,
        f_slope: Floats,
        factor: float,
        source: Floats,
        source_slope: Floats,
        constant: float,
        sinks: tuple[Sinks | None, Sinks | None],
    ) -> Floats:
        """Where Δf = −factor · source and Δsource = −constant."""
        order = self._panels.order
        of_f, of_source = sinks
        potential = source_potential_at(
            self._panels, source[order], source_slope[order], constant, self._points, of_source
        )
        return self._settled(factor * potential + self._field(f, f_slope, 0.0, of_f).u, f)

    def times(self) -> Floats:
        """Mean escape time (p,) in s."""
        return self._settled(self._times.u, self._result.panel_time_s)

    def second_moments(self, spread: Spread) -> Floats:
        """E[T²] (p,) in s²."""
        d = self._result.diffusion_um2_s
        return self._chained(
            spread.panel_second_moment_s2, spread.panel_second_slope_s2_per_um, 2.0 / d,
            self._result.panel_time_s, self._time_slope, 1.0 / d,
            (self._sinks(spread.pore_second_outflow), self._time_sinks),
        )  # fmt: skip

    def splitting(self, ways: WaysOut) -> Floats:
        """Probability (k, p) of leaving through each window."""
        rows = zip(
            ways.panel_splitting, ways.panel_splitting_slope_per_um,
            _rows(ways.pore_splitting_outflow, len(ways.windows)), strict=True,
        )  # fmt: skip
        return np.array([self._settled(self._field(f, slope, 0.0, self._sinks(flow)).u, f) for f, slope, flow in rows])

    def weighted_times(self, ways: WaysOut) -> Floats:
        """Probability times conditional mean time (k, p) in s."""
        d = self._result.diffusion_um2_s
        rows = zip(
            ways.panel_weighted_time_s, ways.panel_weighted_slope_s_per_um,
            ways.panel_splitting, ways.panel_splitting_slope_per_um,
            _rows(ways.pore_weighted_outflow, len(ways.windows)), _rows(ways.pore_splitting_outflow, len(ways.windows)),
            strict=True,
        )  # fmt: skip
        return np.array(
            [
                self._chained(g, slope, 1.0 / d, w, w_slope, 0.0, (self._sinks(flow), self._sinks(w_flow)))
                for g, slope, w, w_slope, flow, w_flow in rows
            ]
        )


def _rows(outflow: Floats | None, count: int) -> list[Floats | None]:
    return [None] * count if outflow is None else list(outflow)
