"""Which resolutions to solve, and what their differences say about the error.

Two things limit the mean time: how well the panels resolve the flux at the rims, and how well they resolve the
time along the wall. Their errors often have opposite signs, so that refining both at once can hide either. They
are refined in turn instead: the last step of each gives an estimate of its own, and the two add up.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bemescape.windows.grade import Fineness

__all__ = ["Estimate", "Ladder", "Rung"]

Floats = NDArray[np.float64]

#: Panels around a rim and lines of equal distance beside it, step by step. The innermost strip is about
#: rim panel / layers³ wide, and the error of the flux at the rim is in proportion to that width: each step divides
#: it by about four.
_RIM_STEPS = (
    (12.0, 4, 0.6),
    (16.0, 5, 0.5),
    (24.0, 7, 0.5),
    (36.0, 9, 0.4),
    (54.0, 12, 0.35),
    (80.0, 16, 0.3),
)
#: Panels over the whole wall at the first step; each step doubles them, which halves a second-order error.
_FIRST_WALL_PANELS = 800.0
#: The first rims are the coarsest with more windows than this, whose errors do not add up, and for targets from this
#: one on.
_FEW_WINDOWS, _LOOSE_TARGET = 8, 0.02
#: Part of the last step that is added to extrapolate, and part that stays as the error of doing so.
#: Measured on boxes, balls, a neck and a strip: what is left after a step at the rims was 0.05 to 0.25 of the step,
#: after a step of the wall 0.2 (smooth bodies) to 1 (sharp edges beside the window).
_RIM_REST, _RIM_ERROR = 0.2, 0.35
#: The same after a step from the coarsest rims of few windows, which may leave twice the step (measured: up to 1.6, on
#: a ball with two caps).
_COARSEST_RIM_ERROR = 2.0
_WALL_REST, _WALL_ERROR = 0.5, 1.0
#: The mean time is off by a few times what the windows' outflow is off by (measured: 2 on boxes, 3.5 at a neck).
_BALANCE_ERROR = 2.5
#: Added to every estimate, which knows nothing of it: what the far-field formula leaves out (measured against a near
#: field twice as wide: 1e-4 to 2e-4 at a few thousand panels), single-precision sums and the iteration's tolerance.
_FLOOR = 3e-4


@dataclass(frozen=True)
class Rung:
    """One resolution: steps of refinement at the rims and on the wall."""

    rim: int
    wall: int

    @property
    def fineness(self) -> Fineness:
        """Panel sizes of this step."""
        segments, layers, growth = _RIM_STEPS[self.rim]
        return Fineness(segments, layers, _FIRST_WALL_PANELS * 2**self.wall, growth)


@dataclass(frozen=True)
class Estimate:
    """Mean time extrapolated from the resolutions, its relative error, and what the error is made of."""

    mean: float
    relative_error: float
    from_rims: float
    from_wall: float
    from_balance: float


@dataclass
class Ladder:
    """Decides what to solve next; fed with the mean time of each resolution, in any unit.

    Attributes
    ----------
    target : float
        Relative error wanted.
    windows : int
        Number of windows.
    has_rims : bool
        False where windows cover everything.
    """

    target: float
    windows: int
    has_rims: bool = True
    _solved: list[tuple[Rung, float, float]] = field(default_factory=list)
    _rim_change: float | None = None
    _wall_change: float | None = None
    _shares: Floats | None = None
    _share_rim_change: Floats | None = None
    _share_wall_change: Floats | None = None

    @property
    def solved(self) -> int:
        """Number of resolutions solved."""
        return len(self._solved)

    def next_rung(self) -> Rung | None:
        """The resolution to solve next; None when the estimate is below the target or nothing finer is left."""
        if not self._solved:
            return Rung(1 if self.windows <= _FEW_WINDOWS and self.target < _LOOSE_TARGET else 0, 0)
        rung = self._solved[-1][0]
        finer_rim = Rung(rung.rim + 1, rung.wall) if self.has_rims and rung.rim + 1 < len(_RIM_STEPS) else None
        finer_wall = Rung(rung.rim, rung.wall + 1)
        if self.has_rims and self._rim_change is None:
            return finer_rim
        if self._wall_change is None:
            return finer_wall
        estimate = self.estimate()
        if estimate.relative_error <= self.target:
            return None
        if finer_rim is None or estimate.from_rims < estimate.from_wall + estimate.from_balance:
            return finer_wall
        return finer_rim

    def record(self, rung: Rung, mean: float, balance: float, shares: Floats | None = None) -> None:
        """Take in the mean time, the balance and the windows' shares (k,) of one resolution."""
        shares = np.zeros(0) if shares is None else shares
        if self._solved and self._shares is not None:
            before, old, _ = self._solved[-1]
            if rung.rim > before.rim:
                self._rim_change, self._share_rim_change = mean - old, shares - self._shares
            if rung.wall > before.wall:
                self._wall_change, self._share_wall_change = mean - old, shares - self._shares
        self._solved.append((rung, mean, balance))
        self._shares = shares

    @property
    def _rim_error(self) -> float:
        from_coarsest = self._solved[-1][0].rim <= 1 and self.windows <= _FEW_WINDOWS
        return _COARSEST_RIM_ERROR if from_coarsest else _RIM_ERROR

    def share_errors(self) -> Floats:
        """Estimated absolute error (k,) of the last shares, which are not extrapolated."""
        if self._shares is None:
            return np.zeros(0)
        unknown = 0.05 * np.abs(self._shares)
        none = np.zeros_like(unknown)
        rim = self._share_rim_change if self._share_rim_change is not None else (unknown if self.has_rims else none)
        wall = self._share_wall_change if self._share_wall_change is not None else unknown
        balance = _BALANCE_ERROR * abs(self._solved[-1][2]) + _FLOOR
        steps = (_RIM_REST + self._rim_error) * np.abs(rim) + (_WALL_REST + _WALL_ERROR) * np.abs(wall)
        return np.asarray(steps + balance * np.abs(self._shares))

    def estimate(self) -> Estimate:
        """Extrapolated mean time and its error, from what has been solved so far."""
        _, mean, balance = self._solved[-1]
        rim = self._rim_change if self._rim_change is not None else (0.05 * mean if self.has_rims else 0.0)
        wall = self._wall_change if self._wall_change is not None else 0.05 * mean
        extrapolated = mean
        if self._rim_change is not None:
            extrapolated += _RIM_REST * rim
        if self._wall_change is not None:
            extrapolated += _WALL_REST * wall
        parts = (self._rim_error * abs(rim / mean), _WALL_ERROR * abs(wall / mean), _BALANCE_ERROR * abs(balance))
        return Estimate(extrapolated, sum(parts) + _FLOOR, *parts)
