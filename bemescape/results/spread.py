"""How the escape time scatters: its second moment, and how far its law is from an exponential one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.averages import volume_integral
from bemescape.bem.moments import volume_integral_of_chain
from bemescape.bem.sinks import with_discs
from bemescape.results.prepared import PreparedMesh
from bemescape.units import format_time

__all__ = ["Spread", "exponential_statement", "find_spread"]

Floats = NDArray[np.float64]

#: Added to the error of the deviation: its two sums one after the other are off by up to this beyond the mean's error
#: (measured on the bodies of tests/verification.md; largest between two shells, where the mean's is small).
_OWN_ERROR = 5e-4


@dataclass(frozen=True, eq=False)
class Spread:
    """Second moment of the escape time T, start uniform in the volume unless a place is named.

    Attributes
    ----------
    panel_second_moment_s2 : (m,) float64
        E[T²] from each panel.
    panel_second_slope_s2_per_um : (m,) float64
        Its slope along the outward normal; 0 on the wall.
    mean_time_s : float
        The stated mean.
    cv : float
        Standard deviation over mean, both from one mesh.
    relative_error : float
        Estimated numerical error of the standard deviation, relative.
    balance : float
        Outflow of the second moment / (2 D⁻¹ ∫ mean time) − 1: 0 for an exact solution.
    pore_second_outflow : (p,) float64 or None
        −∫ of its slope over each compact pore, s² µm; None where there are none.
    """

    panel_second_moment_s2: Floats
    panel_second_slope_s2_per_um: Floats
    mean_time_s: float
    cv: float
    relative_error: float
    balance: float
    pore_second_outflow: Floats | None = None

    @property
    def sd_s(self) -> float:
        """Standard deviation of the escape time."""
        return self.cv * self.mean_time_s

    @property
    def second_moment_s2(self) -> float:
        """⟨T²⟩ = τ² (1 + CV²)."""
        return self.mean_time_s**2 * (1.0 + self.cv**2)

    @property
    def tail_time_s(self) -> float:
        """⟨T²⟩ / 2τ: mean remaining time of those found inside; the late decay is no faster than this."""
        return self.second_moment_s2 / (2.0 * self.mean_time_s)

    @property
    def exponential_within(self) -> float:
        """Largest difference, at any time, between the part still inside and exp(−t/τ).

        The part still inside is a mixture of decaying exponentials with positive weights, since diffusion is
        reversible and the start uniform. Such a law has an increasing mean residual life, for which the difference
        is at most 1 − 2τ²/⟨T²⟩ (Brown 1983, Ann. Probab. 11:419–427).
        """
        return max(0.0, 1.0 - self.mean_time_s / self.tail_time_s)

    @property
    def exponential_until_s(self) -> float:
        """Until when exp(−t/τ) is larger than `exponential_within`: later the bound says nothing about it."""
        return float(-self.mean_time_s * np.log(max(self.exponential_within, 1e-6)))


def find_spread(
    prepared: PreparedMesh,
    u: Floats,
    q: Floats,
    *,
    outflow: Floats | None = None,
    diffusion_um2_s: float,
    mean_time_s: float,
    relative_error: float,
) -> Spread:
    """Solve D Δm = −2u for the second moment m = E[T²].

    Parameters
    ----------
    prepared : PreparedMesh
    u, q : (m,) float64
        Mean time and its slope for D = 1, in the order of the panels.
    outflow : (p,) float64, optional
        Of the mean time through the compact pores.
    diffusion_um2_s : float
    mean_time_s, relative_error : float
        Stated mean and its error.
    """
    panels, volume = prepared.panels, prepared.volume
    right = 2.0 * prepared.source_potential.of(u, q, 1.0, outflow)
    second = prepared.solve(right, "second moment")
    pores, sinks = prepared.solver.operator.pores, prepared.sinks(second)
    of_mean = None if pores is None or outflow is None else pores.sinks(outflow)
    total = volume_integral(panels, u, q, 1.0, of_mean)
    mean = total / volume
    chain = volume_integral_of_chain(panels, second.u, second.q, 2.0, u, q, 1.0, m_sinks=sinks, f_sinks=of_mean)
    mean_square = chain / volume
    balance = prepared.outflow(second) / (2.0 * total) - 1.0
    variance = max(mean_square - mean**2, 0.0)
    # The mean's error moves the second moment by twice its part, and the deviation by once; the balance is what
    # this solve adds.
    own = abs(balance) * mean_square / max(2.0 * variance, 1e-300)
    return Spread(
        panel_second_moment_s2=with_discs(panels, second.u, sinks, least=0.0)[prepared.back] / diffusion_um2_s**2,
        panel_second_slope_s2_per_um=second.q[prepared.back] / diffusion_um2_s**2,
        mean_time_s=mean_time_s,
        cv=float(np.sqrt(variance)) / mean,
        relative_error=relative_error + own + _OWN_ERROR,
        balance=balance,
        pore_second_outflow=None if pores is None else second.outflow / diffusion_um2_s**2,
    )


def exponential_statement(spread: Spread) -> str:
    """How close the escape is to one with a constant rate, in one sentence for a reader."""
    within = spread.exponential_within
    start = f"The part still inside differs from exp(−t/τ) by at most {100.0 * within:.2g} % at any time"
    if within <= 0.02:
        return f"{start}: for most purposes the escape is a single rate 1/τ."
    if within <= 0.1:
        return (
            f"{start}: one rate 1/τ describes it until about {format_time(spread.exponential_until_s, 2)}; later it "
            "decays more slowly."
        )
    return f"{start}: one rate does not describe it; some leave early and the rest stay longer than τ suggests."
