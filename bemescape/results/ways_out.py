"""Which way out: the probability of leaving through each window, and the mean time of those who do."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.averages import volume_integral
from bemescape.bem.moments import volume_integral_of_chain
from bemescape.bem.sinks import with_discs
from bemescape.errors import SettingsError
from bemescape.results.prepared import PreparedMesh
from bemescape.results.result import WindowResult

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["MOST_WINDOWS", "WaysOut", "chosen_windows", "conditional", "conductance_um3_s", "find_ways_out"]

Floats = NDArray[np.float64]

#: With more windows than this they must be named: two solves each.
MOST_WINDOWS = 12


@dataclass(frozen=True, eq=False)
class WaysOut:
    """Splitting probabilities w and conditional times of k windows, on m panels.

    With w the probability of leaving through a window, D Δw = 0 with w = 1 on this window and 0 on the others
    (D ∂w/∂n = −κ (w − 1) and −κ w where they are partly open); g = w · (mean time of those who leave through it)
    solves D Δg = −w, closed as the mean time is.

    Attributes
    ----------
    windows : tuple of int, length k
        Their numbers in `EscapeResult.windows`.
    panel_splitting : (k, m) float64
        w from each panel.
    panel_splitting_slope_per_um : (k, m) float64
        ∂w/∂n; 0 on the wall.
    panel_weighted_time_s : (k, m) float64
        g from each panel.
    panel_weighted_slope_s_per_um : (k, m) float64
        ∂g/∂n; 0 on the wall.
    mean_splitting : (k,) float64
        Volume average of w: must agree with the window's share of the exits, which is found from its outflow.
    mean_weighted_time_s : (k,) float64
        Volume average of g.
    splitting_error : (k,) float64
        Estimated error of w, absolute.
    relative_error : float
        Estimated error of the conditional times, relative, for windows that many leave through.
    sum_error : float or None
        Largest |Σw − 1| on the panels; None where not all windows were asked for.
    pore_splitting_outflow : (k, p) float64 or None
        −∫ ∂w/∂n over each compact pore, µm; None where there are none.
    pore_weighted_outflow : (k, p) float64 or None
        The same of g, s µm.
    """

    windows: tuple[int, ...]
    panel_splitting: Floats
    panel_splitting_slope_per_um: Floats
    panel_weighted_time_s: Floats
    panel_weighted_slope_s_per_um: Floats
    mean_splitting: Floats
    mean_weighted_time_s: Floats
    splitting_error: Floats
    relative_error: float
    sum_error: float | None
    pore_splitting_outflow: Floats | None = None
    pore_weighted_outflow: Floats | None = None

    @property
    def mean_conditional_time_s(self) -> Floats:
        """Mean time (k,) of those who leave through each window, start uniform in the volume."""
        return self.mean_weighted_time_s / self.mean_splitting

    @property
    def panel_conditional_time_s(self) -> Floats:
        """Mean time (k, m) of those who leave through each window; NaN where nobody does."""
        return conditional(self.panel_weighted_time_s, self.panel_splitting)


def conditional(weighted: Floats, splitting: Floats) -> Floats:
    """The quotient; NaN where the probability is lost in the numerical error."""
    clear = splitting > 1e-6
    return np.divide(weighted, splitting, out=np.full_like(weighted, np.nan), where=clear)


def chosen_windows(windows: Sequence[WindowResult], names: Sequence[str] | None) -> tuple[int, ...]:
    """Numbers of the named windows, or of all.

    Raises
    ------
    SettingsError
        A name is unknown, or there are too many windows to take all without being told.
    """
    known = [window.name for window in windows]
    if names is None:
        if len(windows) > MOST_WINDOWS:
            raise SettingsError(
                f"there are {len(windows)} windows and each takes two more solves (limit {MOST_WINDOWS} unasked); "
                "name those that are wanted"
            )
        return tuple(range(len(windows)))
    for name in names:
        if name not in known:
            raise SettingsError(f"there is no window {name!r}; the windows are {', '.join(map(repr, known[:12]))}")
    if not names:
        raise SettingsError("no window is named; name at least one, or leave the list out for all")
    return tuple(sorted({known.index(name) for name in names}))


def find_ways_out(
    prepared: PreparedMesh,
    result: EscapeResult,
    windows: Sequence[int],
) -> WaysOut:
    """Solve for each of the windows with these numbers; `result` gives D, the stated errors and the shares."""
    panels, pores, back = prepared.panels, prepared.solver.operator.pores, prepared.back
    unknowns = len(prepared.source)
    count = unknowns - len(panels)
    of_pores = np.zeros((2, len(windows), count))
    d = result.diffusion_um2_s
    k = len(windows)
    fields = np.zeros((4, k, len(panels)))
    means = np.zeros((2, k))
    for row, number in enumerate(windows):
        name = result.windows[number].name
        f, slope, outflow = np.ones(len(panels)), np.zeros(len(panels)), np.zeros(count)
        if len(result.windows) > 1:
            given = np.zeros(unknowns)
            given[: len(panels)] = prepared.window_of == number
            if result.pores is not None:
                given[len(panels) :] = result.pores.window == number
            ways = prepared.solve(np.zeros(unknowns), f"ways out: {name}", given=given)
            f, slope, outflow = ways.u, ways.q, ways.outflow
        f_sinks = None if pores is None else pores.sinks(outflow)
        times = prepared.solve(prepared.source_potential.of(f, slope, 0.0, outflow), f"times out: {name}")
        of_pores[:, row] = outflow, times.outflow / d
        fields[0, row] = with_discs(panels, f, f_sinks)[back]
        fields[1, row] = slope[back]
        fields[2, row] = with_discs(panels, times.u, prepared.sinks(times), least=0.0)[back] / d
        fields[3, row] = times.q[back] / d
        means[0, row] = volume_integral(panels, f, slope, 0.0, f_sinks) / prepared.volume
        of_chain = volume_integral_of_chain(
            panels, times.u, times.q, 1.0, f, slope, 0.0, m_sinks=prepared.sinks(times), f_sinks=f_sinks
        )
        means[1, row] = of_chain / prepared.volume / d
    shares = np.array([result.windows[number].share for number in windows])
    share_errors = np.array([result.windows[number].share_error or 0.0 for number in windows])
    splitting_error = share_errors + np.abs(means[0] - shares)
    order = panels.order
    u = result.panel_time_s[order] * d
    q = -result.panel_exit_density_per_um2[order] * prepared.volume
    sinks = None if pores is None or result.pores is None else result.pores.time_sinks(result, per_diffusion=False)
    own_mean = volume_integral(panels, u, q, 1.0, sinks) / prepared.volume / d
    return WaysOut(
        windows=tuple(windows),
        panel_splitting=fields[0],
        panel_splitting_slope_per_um=fields[1],
        panel_weighted_time_s=fields[2],
        panel_weighted_slope_s_per_um=fields[3],
        mean_splitting=means[0],
        mean_weighted_time_s=means[1],
        splitting_error=splitting_error,
        # The fields are those of one mesh, the mean is extrapolated: their difference counts too.
        relative_error=result.relative_error + abs(own_mean / result.mean_time_s - 1.0) + float(splitting_error.max()),
        sum_error=float(np.abs(fields[0].sum(axis=0) - 1.0).max()) if k == len(result.windows) else None,
        pore_splitting_outflow=None if pores is None else of_pores[0],
        pore_weighted_outflow=None if pores is None else of_pores[1],
    )


def conductance_um3_s(result: EscapeResult, ways_out: WaysOut) -> Floats:
    """D ∮_j ∂w_i/∂n, (k, k): flow into window i per unit difference between it and j; symmetric, rows sum to 0."""
    areas = result.panel_areas_um2
    owner = [result.panel_window == number for number in ways_out.windows]
    flow = ways_out.panel_splitting_slope_per_um * areas
    conductance = np.array([[row[mask].sum() for mask in owner] for row in flow])
    if result.pores is not None and ways_out.pore_splitting_outflow is not None:
        column = {number: k for k, number in enumerate(ways_out.windows)}
        for pore, number in enumerate(result.pores.window.tolist()):
            if number in column:
                conductance[:, column[number]] -= ways_out.pore_splitting_outflow[:, pore]
    return np.asarray(result.diffusion_um2_s * conductance)
