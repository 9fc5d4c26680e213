"""A result for another diffusion coefficient, exactly: D Δu = −1 with u = 0 on the windows scales as 1/D."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError
from bemescape.results.result import EscapeResult
from bemescape.results.spread import Spread
from bemescape.results.starts import StartResult
from bemescape.results.ways_out import WaysOut
from bemescape.units import Quantity, diffusion_um2_s

__all__ = ["with_diffusion"]

Floats = NDArray[np.float64]


def with_diffusion(result: EscapeResult, diffusion: Quantity) -> EscapeResult:
    """See `EscapeResult.with_diffusion`."""
    d = diffusion_um2_s(diffusion)
    factor = result.diffusion_um2_s / d
    if factor == 1.0:
        return result
    for window in result.windows:
        if math.isfinite(window.permeability_um_s):
            raise SettingsError(
                f"window {window.name!r} has a permeability of {window.permeability_um_s:.4g} µm/s, so that times do "
                "not scale with D alone; solve again with the other D, on a prepared surface without new meshes"
            )
    return replace(
        result,
        diffusion_um2_s=d,
        mean_time_s=factor * result.mean_time_s,
        panel_time_s=factor * result.panel_time_s,
        levels=tuple({**row, "mean_time_s": factor * row["mean_time_s"]} for row in result.levels),
        start={name: factor * time for name, time in result.start.items()},
        start_details={name: _start(row, factor) for name, row in result.start_details.items()},
        spread=None if result.spread is None else _spread(result.spread, factor),
        ways_out=None if result.ways_out is None else _ways_out(result.ways_out, factor),
        crosschecked=None,
        walked=None,
    )


def _spread(spread: Spread, factor: float) -> Spread:
    return replace(
        spread,
        panel_second_moment_s2=factor**2 * spread.panel_second_moment_s2,
        panel_second_slope_s2_per_um=factor**2 * spread.panel_second_slope_s2_per_um,
        mean_time_s=factor * spread.mean_time_s,
        pore_second_outflow=_scaled(spread.pore_second_outflow, factor**2),
    )


def _start(row: StartResult, factor: float) -> StartResult:
    times = row.conditional_time_s
    return replace(
        row,
        mean_time_s=factor * row.mean_time_s,
        escape_time_sd_s=None if row.escape_time_sd_s is None else factor * row.escape_time_sd_s,
        conditional_time_s=None
        if times is None
        else {name: None if time is None else factor * time for name, time in times.items()},
    )


def _ways_out(ways: WaysOut, factor: float) -> WaysOut:
    return replace(
        ways,
        panel_weighted_time_s=factor * ways.panel_weighted_time_s,
        panel_weighted_slope_s_per_um=factor * ways.panel_weighted_slope_s_per_um,
        mean_weighted_time_s=factor * ways.mean_weighted_time_s,
        pore_weighted_outflow=_scaled(ways.pore_weighted_outflow, factor),
    )


def _scaled(values: Floats | None, factor: float) -> Floats | None:
    return None if values is None else factor * values
