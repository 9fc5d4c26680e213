"""Second opinions on a result: the same body by methods that share nothing with the solve.

`cross_check` solves it by bempp-cl's symmetric Galerkin system on two coarser meshes with the same rims, and
extrapolates; `send_walkers` follows particles. Both say whether they agree with the result within the errors of both.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from bemescape.errors import AccuracyError, SettingsError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.units import format_time

if TYPE_CHECKING:
    from bemescape.bem.galerkin import GalerkinAnswer
    from bemescape.results.result import EscapeResult
    from bemescape.windows.coarsen import CoarseMesh

__all__ = [
    "CROSSCHECK_PANELS",
    "FEWEST_WALKERS",
    "MOST_WALKERS",
    "CrossCheck",
    "WalkerEstimate",
    "cross_check",
    "send_walkers",
]

Floats = NDArray[np.float64]

#: Fewer walkers have no standard error worth the name; more would not fit into memory.
FEWEST_WALKERS, MOST_WALKERS = 100, 100_000_000
#: Panels of the finer of the two Galerkin meshes; the coarser has half as many.
CROSSCHECK_PANELS = 3000
#: The error falls as a rim's panels get narrower, as panels^(−½) to panels^(−1): what is left after the step from the
#: coarser mesh to the finer is 1 to 2.4 of that step. 1.5 is added, and as much again is the error: it covers what is
#: left for any order from nothing (the step was all) to 0.6 of it per step.
_REST, _STEP_ERROR = 1.5, 1.5
#: The coarser mesh may have this part of the panels of the finer at most.
_MOST_COARSE = 0.75
#: A window's resistance follows the square root of its area, and the mean time the volume.
_WINDOW_ERROR, _VOLUME_ERROR = 0.5, 1.0
#: No Galerkin answer is believed below this.
_FLOOR = 1e-3
#: Where more than this is allowed, agreement is no confirmation, and the sentence says so.
_DECISIVE = 0.1
#: Two-sided probability of a false alarm that three standard errors leave, shared among all numbers compared.
_FALSE_ALARM = 0.0027


@dataclass(frozen=True)
class CrossCheck:
    """The mean time by another boundary element method, beside the result's.

    Attributes
    ----------
    mean_time_s : float
        By the Galerkin system, extrapolated from both meshes.
    shares : dict of str to float
        Window -> its part of all exits, the same way.
    relative_error : float
        Estimated error of `mean_time_s`, relative: from the step between the two meshes and what coarsening changed.
    panels : int
        Of the finer mesh.
    difference : float
        mean_time_s / that of the result − 1.
    allowed : float
        Sum of the relative errors of both.
    share_difference, share_allowed : float
        Largest absolute difference of a share in units of what is allowed for it, and what is allowed there.
    agrees : bool
        Both differences are allowed ones.
    seconds : float
    """

    mean_time_s: float
    shares: dict[str, float]
    relative_error: float
    panels: int
    difference: float
    allowed: float
    share_difference: float
    share_allowed: float
    agrees: bool
    seconds: float

    @property
    def line(self) -> str:
        """One sentence for a reader."""
        return (
            f"{_verdict(self.agrees, self.allowed)} a Galerkin solution by bempp-cl on up to {self.panels} panels "
            f"within {self.allowed:.2%}: {format_time(self.mean_time_s)} ± {self.relative_error:.2%}, off by "
            f"{self.difference:+.2%}; shares off by at most {self.share_difference:.2g} (allowed "
            f"{self.share_allowed:.2g}){_reservation(self.allowed)}"
        )


@dataclass(frozen=True)
class WalkerEstimate:
    """The mean time by particles, beside the result's.

    Attributes
    ----------
    mean_time_s, standard_error_s : float
    shares, share_errors : dict of str to float
        Window -> part of the walkers that left by it, and its standard error.
    walkers, lost, seed : int
        Walkers counted; walkers given up; where their random numbers began.
    steps : float
        Mean number of jumps.
    difference, allowed : float
        mean_time_s / that of the result − 1, and three standard errors plus the error of the result, both relative.
    share_difference, share_allowed : float
        The same for the share that fits worst, absolute.
    agrees : bool
        Both differences are allowed ones.
    seconds : float
    """

    mean_time_s: float
    standard_error_s: float
    shares: dict[str, float]
    share_errors: dict[str, float]
    walkers: int
    lost: int
    seed: int
    steps: float
    difference: float
    allowed: float
    share_difference: float
    share_allowed: float
    agrees: bool
    seconds: float

    @property
    def line(self) -> str:
        """One sentence for a reader."""
        lost = f"; {self.lost} more were lost and are not counted" if self.lost else ""
        return (
            f"{_verdict(self.agrees, self.allowed)} {self.walkers} walkers within {self.allowed:.2%}: "
            f"{format_time(self.mean_time_s)} ± {self.standard_error_s / self.mean_time_s:.2%} (standard error), "
            f"off by {self.difference:+.2%}; shares off by at most {self.share_difference:.2g} (allowed "
            f"{self.share_allowed:.2g}){lost}{_reservation(self.allowed)}"
        )


def _verdict(agrees: bool, allowed: float) -> str:  # noqa: FBT001 (one phrase or another)
    if not agrees:
        return "does NOT agree with"
    return "agrees with" if allowed <= _DECISIVE else "is not contradicted by"


def _reservation(allowed: float) -> str:
    return "" if allowed <= _DECISIVE else f"; within {allowed:.0%} an agreement confirms little"


def cross_check(result: EscapeResult, *, panels: int = CROSSCHECK_PANELS, progress: Progress = silent) -> CrossCheck:
    """Solve the body of a result again by bempp-cl, on a coarser mesh with the same rims.

    Parameters
    ----------
    result : EscapeResult
    panels : int, default 3000
        Most panels of the finer mesh: the matrices are dense.
    progress : callable, optional

    Raises
    ------
    SettingsError
        `panels` is out of range, or a window has no panels.
    AccuracyError
        The refined mesh cannot be made coarse enough, or not without damage.
    """
    from bemescape.bem.galerkin import galerkin_matrices, solve_mixed

    if not 200 <= panels <= 10_000:
        raise SettingsError(f"panels of the cross-check is {panels}; it must lie between 200 and 10000")
    _refuse_windows_without_panels(result)
    began = time.perf_counter()
    kappa = np.array([window.permeability_um_s for window in result.windows])
    answers: list[GalerkinAnswer] = []
    meshes: list[CoarseMesh] = []
    panels = min(panels, len(result.faces))
    for turn, most in enumerate((panels // 2, panels)):
        progress(ProgressEvent("cross-check", 0.4 * turn, f"coarsening to {most} panels"))
        mesh = _coarse(result, most, panels if turn == 1 else _MOST_COARSE * panels)
        compiling = ", compiling for about a minute first" if turn == 0 else ""
        progress(ProgressEvent("cross-check", 0.4 * turn + 0.1, f"assembling {len(mesh.faces)} panels{compiling}"))
        centred = mesh.vertices - 0.5 * (mesh.vertices.min(axis=0) + mesh.vertices.max(axis=0))
        matrices = galerkin_matrices(centred, mesh.faces)
        progress(ProgressEvent("cross-check", 0.4 * turn + 0.3, f"solving {len(mesh.faces)} panels"))
        answers.append(
            solve_mixed(centred, mesh.faces, mesh.window_of, result.diffusion_um2_s, matrices, permeability_um_s=kappa)
        )
        meshes.append(mesh)
    coarse, fine = answers
    # As if the coarser mesh had half the panels: with many windows it cannot go that low, and the step is short.
    stretch = math.log(2.0) / math.log(len(meshes[1].faces) / len(meshes[0].faces))
    step, share_step = stretch * (fine.mean_time_s - coarse.mean_time_s), stretch * (fine.shares - coarse.shares)
    mean, shares = fine.mean_time_s + _REST * step, fine.shares + _REST * share_step
    geometry = _WINDOW_ERROR * meshes[1].window_change + _VOLUME_ERROR * abs(meshes[1].volume_change)
    error = _STEP_ERROR * abs(step) / mean + geometry + _FLOOR
    own_shares = np.array([window.share for window in result.windows])
    # Two resistances that are off by `error` each move a share s by s(1 − s) of it, whatever the steps happen to be.
    share_error = _STEP_ERROR * np.abs(share_step) + (error * (1.0 - own_shares) + _FLOOR) * np.abs(own_shares)
    difference = mean / result.mean_time_s - 1.0
    allowed = error + result.relative_error
    worst, limit = _worst(shares - own_shares, share_error + _share_errors(result))
    return CrossCheck(
        mean_time_s=mean,
        shares=_named(result, shares),
        relative_error=error,
        panels=len(meshes[1].faces),
        difference=difference,
        allowed=allowed,
        share_difference=worst,
        share_allowed=limit,
        agrees=bool(abs(difference) <= allowed and worst <= limit),
        seconds=time.perf_counter() - began,
    )


def _coarse(result: EscapeResult, most: int, budget: float) -> CoarseMesh:
    """The refined mesh of a result with at most `most` panels; a little more where rims need it."""
    from bemescape.windows.coarsen import coarsened

    mesh = coarsened(result.vertices, result.faces, result.panel_window, most)
    if len(mesh.faces) > budget:
        raise AccuracyError(
            f"the mesh of {result.name!r} cannot be coarsened below {len(mesh.faces)} panels without damage (the "
            f"cross-check takes at most {budget:.0f} here); use walkers for a second opinion"
        )
    if not mesh.is_closed:
        raise AccuracyError(
            f"the coarse mesh of {result.name!r} for the cross-check is not closed; use walkers for a second opinion"
        )
    return mesh


def send_walkers(result: EscapeResult, walkers: int, *, seed: int = 0, progress: Progress = silent) -> WalkerEstimate:
    """Follow particles in the body of a result: see `bemescape.bem.walkers`.

    Parameters
    ----------
    result : EscapeResult
    walkers : int
        The standard error of the mean time is about 1/√walkers of it: 100 000 give 0.3 %.
    seed : int, default 0
        The same seed gives the same numbers.
    progress : callable, optional

    Raises
    ------
    SettingsError
        The number of walkers or the seed is out of range, or a window has no panels.
    AccuracyError
        More than 1 % of the walkers are lost.
    """
    from bemescape.bem.walkers import walk

    if not FEWEST_WALKERS <= walkers <= MOST_WALKERS:
        raise SettingsError(f"walkers is {walkers}; it must lie between {FEWEST_WALKERS} and {MOST_WALKERS}")
    if not 0 <= seed < 2**63:
        raise SettingsError(f"seed is {seed}; it must be a whole number from 0 to 2^63 − 1")
    _refuse_windows_without_panels(result)
    d = result.diffusion_um2_s
    kappa = np.array([window.permeability_um_s for window in result.windows])
    tally = walk(
        result.vertices,
        result.faces,
        result.panel_window,
        kappa / d,
        walkers=walkers,
        seed=seed,
        progress=progress,
    )
    # One mean and all shares are compared: each gets its part of the false alarms that three standard errors allow.
    compared = 1 + (len(result.windows) if len(result.windows) > 1 else 0)
    width = float(norm.isf(0.5 * _FALSE_ALARM / compared))
    mean, error = tally.mean / d, tally.mean_error / d
    difference = mean / result.mean_time_s - 1.0
    allowed = width * error / result.mean_time_s + result.relative_error
    own_shares = np.array([window.share for window in result.windows])
    worst, limit = _worst(tally.shares - own_shares, width * tally.share_errors + _share_errors(result))
    return WalkerEstimate(
        mean_time_s=mean,
        standard_error_s=error,
        shares=_named(result, tally.shares),
        share_errors=_named(result, tally.share_errors),
        walkers=tally.walkers,
        lost=tally.lost,
        seed=seed,
        steps=tally.steps,
        difference=difference,
        allowed=allowed,
        share_difference=worst,
        share_allowed=limit,
        agrees=bool(abs(difference) <= allowed and worst <= limit),
        seconds=tally.seconds,
    )


def _refuse_windows_without_panels(result: EscapeResult) -> None:
    """Pores that are solved without panels of their own exist for no other method."""
    panels = np.bincount(result.panel_window[result.panel_window >= 0], minlength=len(result.windows))
    without = [window.name for window, count in zip(result.windows, panels, strict=True) if count == 0]
    if without:
        raise SettingsError(
            f"{len(without)} windows of {result.name!r} have no panels ({without[0]!r} is the first), and a second "
            "opinion needs them; solve with meshed windows"
        )


def _named(result: EscapeResult, values: Floats) -> dict[str, float]:
    return {window.name: float(value) for window, value in zip(result.windows, values, strict=True)}


def _share_errors(result: EscapeResult) -> Floats:
    """Estimated absolute error of each share; that of the mean time stands in where there is none."""
    return np.array(
        [
            result.relative_error * abs(window.share) if window.share_error is None else window.share_error
            for window in result.windows
        ]
    )


def _worst(difference: Floats, allowed: Floats) -> tuple[float, float]:
    """The difference that exceeds what is allowed most, and what is."""
    number = int(np.argmax(np.abs(difference) / allowed))
    return float(abs(difference[number])), float(allowed[number])
