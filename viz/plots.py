"""Flat figures of a result: how the time is spread over the wall, and how it settled with finer panels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.errors import SettingsError
from bemescape.units import time_scale

from .scales import INK, map_colours, time_colours

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["convergence_figure", "plain_axes", "spread_figure", "survival_figure"]

Floats = NDArray[np.float64]

# Dark blue of the map, for everything that is computed; grey for what it is compared with.
_LINE = "#00366e"
_GREY = "#6b7280"


def spread_figure(result: EscapeResult) -> Figure:
    """Time on the wall: its spread over the area, and against the distance to the nearest window."""
    figure = Figure(figsize=(10.5, 4.2), dpi=150, layout="constrained")
    left, right = figure.subplots(1, 2)
    wall = result.panel_window < 0
    times, areas = result.panel_time_s[wall], result.panel_areas_um2[wall]
    factor, unit = time_scale(float(times.max(initial=0.0)))

    counts, edges = np.histogram(times, bins=40, range=(0.0, float(times.max(initial=1e-300))), weights=areas)
    middles = 0.5 * (edges[1:] + edges[:-1])
    colours = map_colours(time_colours(result), middles) / 255.0
    left.bar(
        middles / factor,
        100.0 * counts / max(float(areas.sum()), 1e-300),
        width=(edges[1] - edges[0]) / factor,
        color=colours,
        edgecolor=INK,
        linewidth=0.4,
    )
    left.axvline(result.mean_time_s / factor, color=INK, linestyle="--", linewidth=1.2)
    left.set_title("dashed: mean over the volume", fontsize=9, loc="left")
    left.set_xlabel(f"mean escape time from the wall ({unit})")
    left.set_ylabel("part of the wall's area (%)")

    _against_distance(right, result, wall, factor)
    right.set_xlabel("straight distance to the nearest window (µm)")
    right.set_ylabel(f"mean escape time ({unit})")
    for axes in (left, right):
        plain_axes(axes)
    return figure


def _against_distance(axes: Axes, result: EscapeResult, wall: NDArray[np.bool_], factor: float) -> None:
    window = ~wall
    openings = result.panel_centroids[window]
    if result.pores is not None:
        openings = np.concatenate([openings, result.pores.centre_um])
    if not (wall.any() and len(openings)):
        return
    distance, _ = cKDTree(openings).query(result.panel_centroids[wall])
    times, areas = result.panel_time_s[wall] / factor, result.panel_areas_um2[wall]
    edges = np.linspace(0.0, float(distance.max()) * (1.0 + 1e-9), 31)
    number = np.digitize(distance, edges) - 1
    rows = []
    for k in range(len(edges) - 1):
        inside = number == k
        if inside.any():
            low, middle, high = _weighted_quantiles(times[inside], areas[inside], (0.1, 0.5, 0.9))
            rows.append((0.5 * (edges[k] + edges[k + 1]), low, middle, high))
    at, low, middle, high = np.array(rows).T
    axes.fill_between(at, low, high, color=_LINE, alpha=0.18, linewidth=0.0)
    axes.plot(at, middle, color=_LINE, linewidth=1.8)
    axes.set_title("line: median of the area; band: from 10 % to 90 %", fontsize=9, loc="left")
    axes.set_xlim(left=0.0)
    axes.set_ylim(bottom=0.0)


def _weighted_quantiles(values: Floats, weights: Floats, parts: tuple[float, ...]) -> Floats:
    order = np.argsort(values)
    sums = np.cumsum(weights[order]) - 0.5 * weights[order]
    return np.asarray(np.interp(np.array(parts) * weights.sum(), sums, values[order]))


def convergence_figure(result: EscapeResult) -> Figure:
    """Mean escape time of every resolution against its panels, with the stated value and error."""
    figure = Figure(figsize=(6.4, 4.2), dpi=150, layout="constrained")
    axes = figure.subplots()
    factor, unit = time_scale(result.mean_time_s)
    panels = [row["panels"] for row in result.levels]
    means = [row["mean_time_s"] / factor for row in result.levels]
    stated, error = result.mean_time_s / factor, result.relative_error * result.mean_time_s / factor
    axes.axhspan(stated - error, stated + error, color=_GREY, alpha=0.22, linewidth=0.0)
    axes.axhline(stated, color=_GREY, linewidth=1.2, linestyle="--")
    axes.plot(panels, means, color=_LINE, marker="o", linewidth=1.5)
    axes.set_title("dashed: stated value; band: its error", fontsize=9, loc="left")
    if panels and max(panels) > 3 * min(panels):
        axes.set_xscale("log")
    axes.set_xlabel("panels")
    axes.set_ylabel(f"mean escape time ({unit})")
    axes.ticklabel_format(axis="y", useOffset=False)
    axes.margins(0.12)
    plain_axes(axes)
    return figure


def survival_figure(result: EscapeResult) -> Figure:
    """The part still inside as time goes on: exp(−t/τ) within its proven bound, and the tail by two moments.

    The tail, (τ/τ′) exp(−t/τ′) with τ′ = ⟨T²⟩/2τ, has the mean and the second moment of the true law.

    Raises
    ------
    SettingsError
        The result holds no second moment.
    """
    spread = result.spread
    if spread is None:
        raise SettingsError(f"result {result.name!r} holds no second moment; solve the case again")
    figure = Figure(figsize=(6.4, 4.2), dpi=150, layout="constrained")
    axes = figure.subplots()
    mean, tail, within = spread.mean_time_s, spread.tail_time_s, spread.exponential_within
    factor, unit = time_scale(mean)
    time = np.linspace(0.0, 5.0 * mean, 400)
    curve = np.exp(-time / mean)
    axes.fill_between(
        time / factor,
        np.clip(curve - within, 1e-6, 1.0),
        np.clip(curve + within, 1e-6, 1.0),
        color=_LINE,
        alpha=0.18,
        linewidth=0.0,
        label=f"± {100.0 * within:.2g} %: bound for any time",
    )
    axes.plot(time / factor, curve, color=_LINE, linewidth=1.8, label="exp(−t/τ), τ the mean escape time")
    axes.plot(
        time / factor,
        mean / tail * np.exp(-time / tail),
        color=_GREY,
        linewidth=1.4,
        linestyle="--",
        label="tail with the same mean and second moment",
    )
    until = spread.exponential_until_s
    if until < 5.0 * mean:
        axes.axvline(until / factor, color=INK, linewidth=1.0, linestyle=":", label="the curve falls below its bound")
    axes.set_yscale("log")
    axes.set_ylim(5e-3, 1.1)
    axes.set_xlim(0.0, 5.0 * mean / factor)
    axes.set_xlabel(f"time since the start ({unit})")
    axes.set_ylabel("part still inside")
    axes.set_title("start uniform in the volume", fontsize=9, loc="left")
    axes.legend(fontsize=8, frameon=False)
    plain_axes(axes)
    return figure


def plain_axes(axes: Axes) -> None:
    """Light grid, no box: the style of every flat figure."""
    axes.spines[["top", "right"]].set_visible(False)
    axes.grid(visible=True, color="#e2e5e9", linewidth=0.6)
    axes.set_axisbelow(True)
