"""Compact pores in a result: where they are, and what a solver needs to ask again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.compact import CompactPores
from bemescape.bem.sinks import Sinks

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["PoreTable"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class PoreTable:
    """The p windows of a result that have no panels.

    Attributes
    ----------
    window : (p,) int64
        Their numbers in `EscapeResult.windows`.
    panel : (p,) int64
        The wall panel under each.
    centre_um, normal : (p, 3) float64
        Middle on the wall; unit normal out of the volume.
    radius_um : (p,) float64
    curvature_per_um : (p,) float64
        Mean curvature of the wall around, positive where convex.
    reach_um : (p,) float64
        How far around panels stand for a smooth wall.
    resistance_error_per_um : (p,) float64
        What may be wrong with its resistance, beside 1/4a, for D = 1.
    """

    window: Ints
    panel: Ints
    centre_um: Floats
    normal: Floats
    radius_um: Floats
    curvature_per_um: Floats
    reach_um: Floats
    resistance_error_per_um: Floats

    def __len__(self) -> int:
        return len(self.window)

    def compact(self, barrier_of_window: Floats) -> CompactPores:
        """For a solver on the result's panels; `barrier_of_window` (k,) is D/κ of each window in µm."""
        return CompactPores(
            self.centre_um,
            self.panel,
            self.radius_um,
            barrier_of_window[self.window],
            self.curvature_per_um,
            self.reach_um,
        )

    def sinks(self, outflow: Floats) -> Sinks:
        """With what each lets out of some solution, (p,)."""
        return Sinks(self.centre_um, self.normal, self.radius_um, outflow)

    def time_sinks(self, result: EscapeResult, *, per_diffusion: bool = True) -> Sinks:
        """With what each lets out of the mean time in s; or of D times that, in µm²."""
        share = np.array([result.windows[number].share for number in self.window])
        return self.sinks(share * result.volume_um3 / (result.diffusion_um2_s if per_diffusion else 1.0))

    def mean_error(self, shares: Floats, volume_um3: float, mean_at_unit_diffusion: float) -> float:
        """Relative error of the mean time that errors of the pores' resistances make, shares (k,) of all windows.

        A resistance that is larger by δ in one pore raises the mean by share² V δ, to first order: the mean time is an
        energy.
        """
        of_pores = shares[self.window]
        return float((of_pores**2 * self.resistance_error_per_um).sum() * volume_um3 / mean_at_unit_diffusion)
