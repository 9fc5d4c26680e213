"""A surface made ready for many questions: what changes from one to the next is worked out, the rest is kept."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from bemescape.escape import SolverSettings, check_closed, solve_on
from bemescape.progress import Progress, silent
from bemescape.results.kept_meshes import KeptMeshes
from bemescape.results.result import EscapeResult
from bemescape.results.starts import Start
from bemescape.surface.surface import Surface
from bemescape.units import Quantity, diffusion_um2_s
from bemescape.windows.window import Window

__all__ = ["PreparedSurface", "prepare"]


@dataclass(frozen=True, eq=False)
class _Asked:
    """The latest question but for D, and its answer."""

    windows: tuple[Window, ...]
    rest: Mapping[str, Any]
    result: EscapeResult


class PreparedSurface:
    """One surface on which windows are changed: radius, permeability, place, or D.

    Results are those of `solve_escape`, with the same resolutions and the same estimate of the error; they agree with
    it within the stated errors, since
    - another D with absorbing windows scales every time exactly, and nothing is solved;
    - another permeability (or another D with partly open windows) keeps the meshes, their near fields and all else
      but the windows' own blocks;
    - another radius or place keeps the rows of the near field whose panels, and all panels close to them, are the
      same as before.

    Memory: the near fields of all resolutions stay, a few kB per panel. Not for several threads at a time.

    Attributes
    ----------
    surface : Surface
    settings : SolverSettings
    """

    def __init__(
        self, surface: Surface, *, settings: SolverSettings | None = None, progress: Progress = silent
    ) -> None:
        check_closed(surface)
        self.surface = surface
        self.settings = settings or SolverSettings()
        self._progress = progress
        self._kept = KeptMeshes()
        self._asked: _Asked | None = None

    def solve(
        self,
        windows: Sequence[Window],
        diffusion: Quantity,
        *,
        target: float | str = 0.005,
        start: Mapping[str, Start] | None = None,
        ways_out: bool | Sequence[str] | None = None,
        name: str | None = None,
        progress: Progress | None = None,
    ) -> EscapeResult:
        """Solve for these windows; parameters, result and errors as `bemescape.solve_escape`.

        `result.levels` says for each resolution which part of the near field's rows was kept (`kept_rows`).
        """
        d = diffusion_um2_s(diffusion)
        asked = self._asked
        rest = {"target": target, "ways_out": ways_out}
        if start is None and asked is not None and asked.windows == tuple(windows) and asked.rest == rest:
            absorbing = all(window.permeability_um_s == float("inf") for window in windows)
            if absorbing or d == asked.result.diffusion_um2_s:
                return replace(asked.result.with_diffusion(d), name=name or self.surface.name)
        result = solve_on(
            self.surface, windows, d, target=target, start=start, ways_out=ways_out, name=name,
            settings=self.settings, progress=progress or self._progress, kept=self._kept,
        )  # fmt: skip
        self._asked = _Asked(tuple(windows), rest, result) if start is None else None
        return result


def prepare(
    surface: Surface, *, settings: SolverSettings | None = None, progress: Progress = silent
) -> PreparedSurface:
    """Make a surface ready for many solves with other windows.

    Parameters
    ----------
    surface : Surface
        Closed and outward-facing.
    settings : SolverSettings, optional
    progress : callable, optional
        Receives the events of every solve.

    Raises
    ------
    SurfaceError
        The surface is not closed and outward-facing.

    Examples
    --------
    ::

        prepared = be.prepare(cell)
        times = [prepared.solve([be.Window.disc("pore", centre=place, radius=r)], 20.0).mean_time_s for r in radii]
    """
    return PreparedSurface(surface, settings=settings, progress=progress)
