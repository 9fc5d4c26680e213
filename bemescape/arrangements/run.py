"""`explore`: candidate sites in; size sweep, clustering, and the best and the worst arrangement out."""

from __future__ import annotations

import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, replace

import numpy as np

from bemescape.arrangements.exploration import Arrangement, ClusteringRow, Exploration, SweepRow
from bemescape.arrangements.reduced import ReducedModel, reduced_model
from bemescape.arrangements.search import clustered, searched, spread_out
from bemescape.arrangements.sites import CandidateSites, candidate_sites
from bemescape.errors import EscapeError, SettingsError, WindowError
from bemescape.escape import SolverSettings
from bemescape.prepared_surface import PreparedSurface
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.results.result import EscapeResult
from bemescape.surface.surface import Surface
from bemescape.units import Quantity, diffusion_um2_s, fraction, length_um
from bemescape.windows.placement import place_windows
from bemescape.windows.window import Disc, Window

__all__ = ["MOST_ARRANGEMENTS", "explore"]

FEWEST_ARRANGEMENTS, MOST_ARRANGEMENTS = 100, 10_000_000
MOST_RADII = 20
#: Radii of the sweep where none are given, in radii of the sites.
_SWEEP = (0.5, 1.0, 2.0)


def explore(
    surface: Surface,
    sites: Window,
    *,
    open_windows: int,
    diffusion: Quantity,
    sweep: Sequence[Quantity] | None = None,
    arrangements: int = 10_000,
    seed: int = 0,
    target: float | str = 0.005,
    name: str | None = None,
    settings: SolverSettings | None = None,
    progress: Progress = silent,
) -> Exploration:
    """Compare arrangements of equal windows on candidate sites of one surface.

    Finds the mean time with one window at each site, and of one window over several radii; what is lost where k
    windows lie close together instead of far apart; and the k sites with the smallest and the largest mean time. A
    reduced model gives the times; the sweep, the best and the worst arrangement are solved in full, and their
    difference from the model is part of the answer.

    Parameters
    ----------
    surface : Surface
        Closed and outward-facing, one connected volume.
    sites : Window
        `Window.points` or `Window.scatter`: 2 to 400 candidate sites with the radius, and perhaps the permeability,
        of the windows.
    open_windows : int
        k, how many windows are open at a time.
    diffusion : quantity, text or float
        D > 0.
    sweep : sequence of length, optional
        Radii of one window alone; half, once and twice the radius of the sites by default; empty for none.
    arrangements : int, default 10 000
        About how many arrangements to try; all, where there are fewer.
    seed : int
        Of the random ones.
    target : float or text
        Relative error wanted of the full solves.
    name : str, optional
        The surface's name by default.
    settings : SolverSettings, optional
        Of the full solves.
    progress : callable, optional

    Returns
    -------
    Exploration

    Raises
    ------
    SettingsError
        A quantity is wrong, or there are too few sites, or more open windows than sites.
    SurfaceError
        The surface is not closed, or encloses several volumes.
    WindowError
        A site lies off the wall or overlaps another; a window of the sweep cannot be placed.

    Notes
    -----
    See `bemescape.arrangements.reduced` for the model and its source.
    """
    d = diffusion_um2_s(diffusion)
    wanted = fraction(target, "target error")
    _check_whole("arrangements", arrangements, FEWEST_ARRANGEMENTS, MOST_ARRANGEMENTS)
    _check_whole("seed", seed, 0, 2**63)
    prepared = PreparedSurface(surface, settings=settings, progress=progress)
    progress(ProgressEvent("placing sites"))
    candidates = candidate_sites(surface, sites, open_windows)
    radii = _radii(candidates, sweep)
    clock: dict[str, float] = {}
    with _timed(clock, "reduced model"):
        model = reduced_model(candidates, d / candidates.permeability_um_s, progress)
        alone = model.mean_times(np.arange(len(candidates))[:, None]) / d
    with _timed(clock, "arrangements"):
        clustering = _clustering(candidates, model, open_windows, d)
        found = searched(
            model.mean_times, candidates.places_um, open_windows, most=arrangements, seed=seed, progress=progress
        )
    notes = list(candidates.notes)
    solved: dict[str, EscapeResult] = {}
    ends = []
    with _timed(clock, "full solves"):
        for end, chosen in (("best", found.best), ("worst", found.worst)):
            numbers = [int(number) for number in chosen]
            windows = [candidates.windows[number] for number in numbers]
            try:
                solved[end] = prepared.solve(
                    windows, d, target=wanted, name=f"{name or surface.name}, {end} arrangement",
                    progress=_labelled(progress, f"{end} arrangement"),
                )  # fmt: skip
            except EscapeError as error:  # the table stands without it, and says so
                notes.append(f"the {end} arrangement has no full solve: {error}")
            ends.append(_arrangement(candidates, model, numbers, d, solved.get(end)))
    middle = int(np.argsort(alone)[len(alone) // 2])
    with _timed(clock, "sweep"):
        rows = _sweep(prepared, candidates.windows[middle], radii, d, wanted, notes, progress)
    return Exploration(
        name=name or surface.name,
        surface=surface,
        site_names=tuple(window.name for window in candidates.windows),
        places_um=candidates.places_um,
        site_time_s=alone,
        diffusion_um2_s=d,
        radius_um=candidates.radius_um,
        permeability_um_s=candidates.permeability_um_s,
        open_windows=open_windows,
        sweep_site=candidates.windows[middle].name if rows else None,
        sweep=tuple(rows),
        clustering=tuple(clustering),
        best=ends[0],
        worst=ends[1],
        solved=solved,
        tried=found.tried,
        complete=found.complete,
        sampled_s=found.sampled / d,
        asymmetry=model.asymmetry,
        seconds=clock,
        notes=tuple(notes),
        settings={
            "sites": sites.described(),
            "arrangements": arrangements,
            "seed": seed,
            "target": wanted,
            **asdict(settings or SolverSettings()),
        },
    )


def _check_whole(what: str, value: int, least: int, most: int) -> None:
    if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
        raise SettingsError(f"{what} is {value!r}; it must be a whole number from {least} to {most}")


@contextmanager
def _timed(clock: dict[str, float], part: str) -> Iterator[None]:
    began = time.perf_counter()
    yield
    clock[part] = time.perf_counter() - began


def _labelled(progress: Progress, label: str) -> Progress:
    """Tells of a full solve under the name of what it is for."""

    def tell(event: ProgressEvent) -> None:
        progress(ProgressEvent(f"{label}: {event.stage}", event.done, event.detail))

    return tell


def _radii(sites: CandidateSites, sweep: Sequence[Quantity] | None) -> list[float]:
    """Radii of the sweep, refused before any work where no window of that size can be placed."""
    if sweep is not None and len(sweep) > MOST_RADII:
        raise SettingsError(f"the sweep has {len(sweep)} radii (limit {MOST_RADII}); give fewer")
    given = [factor * sites.radius_um for factor in _SWEEP] if sweep is None else [
        length_um(radius, "radius of the sweep") for radius in sweep
    ]  # fmt: skip
    kept = []
    for radius in sorted(set(given)):
        try:
            place_windows(sites.surface, [_with_radius(sites.windows[0], radius)])
        except WindowError as error:
            if sweep is None:
                continue  # a size that nobody asked for
            raise WindowError(f"the sweep's radius of {radius:.4g} µm: {error}") from error
        kept.append(radius)
    return kept


def _with_radius(window: Window, radius_um: float) -> Window:
    if not isinstance(window.shape, Disc):
        raise TypeError(f"the site {window.name!r} is no disc")
    return replace(window, shape=Disc(window.shape.centre_um, radius_um))


def _sweep(
    prepared: PreparedSurface,
    window: Window,
    radii: Sequence[float],
    d: float,
    target: float,
    notes: list[str],
    progress: Progress,
) -> list[SweepRow]:
    rows = []
    for radius in radii:
        try:
            result = prepared.solve(
                [_with_radius(window, radius)], d, target=target,
                progress=_labelled(progress, f"radius {radius:.3g} µm"),
            )  # fmt: skip
        except EscapeError as error:
            notes.append(f"the sweep has no radius of {radius:.4g} µm: {error}")
            continue
        rows.append(SweepRow(radius_um=radius, mean_time_s=result.mean_time_s, relative_error=result.relative_error))
    return rows


def _clustering(sites: CandidateSites, model: ReducedModel, most: int, d: float) -> list[ClusteringRow]:
    rows = []
    for k in range(2, most + 1):
        close, apart = clustered(sites.places_um, k), spread_out(sites.places_um, k)
        close_time, apart_time = (float(model.mean_times(chosen[None])[0]) / d for chosen in (close, apart))
        rows.append(
            ClusteringRow(
                open_windows=k,
                spread_time_s=apart_time,
                clustered_time_s=close_time,
                lost_to_clustering=close_time / apart_time - 1.0,
                spread_sites=[sites.windows[int(number)].name for number in apart],
                clustered_sites=[sites.windows[int(number)].name for number in close],
            )
        )
    return rows


def _arrangement(
    sites: CandidateSites, model: ReducedModel, numbers: Sequence[int], d: float, solved: EscapeResult | None
) -> Arrangement:
    names = [sites.windows[number].name for number in numbers]
    mean = float(model.mean_times(np.array([numbers]))[0]) / d
    return Arrangement(
        sites=names,
        mean_time_s=mean,
        shares=dict(zip(names, model.shares(numbers).tolist(), strict=True)),
        solved_time_s=None if solved is None else solved.mean_time_s,
        solved_relative_error=None if solved is None else solved.relative_error,
        difference=None if solved is None else mean / solved.mean_time_s - 1.0,
    )
