"""Figures and the page of an exploration of arrangements."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection
from matplotlib.figure import Figure
from numpy.typing import NDArray

from bemescape.results.summary import CAUTION
from bemescape.units import format_length, format_time, time_scale

from .html import LOCAL_RULES
from .page import PAGE
from .plots import plain_axes
from .scales import INK, MAP_NAME
from .shapes import principal_axes

if TYPE_CHECKING:
    from bemescape.arrangements.exploration import Arrangement, Exploration

__all__ = ["clustering_figure", "search_figure", "sites_figure", "sweep_figure", "write_exploration"]

Floats = NDArray[np.float64]

# Best and worst differ in lightness and in shape, for every kind of colour vision.
_BEST, _WORST = "#00366e", "#b3001b"


def sites_figure(found: Exploration) -> Figure:
    """The sites on the two sides of the surface, coloured by the mean time of a window there alone."""
    surface = found.surface
    middles = surface.vertices[surface.faces].mean(axis=1)
    centre, axes = principal_axes(middles, surface.areas)
    along, up = axes[:2]  # the longest first
    towards = np.cross(along, up)  # right-handed: nothing is mirrored
    factor, unit = time_scale(float(found.site_time_s.max()))
    side = ((found.places_um - centre) @ towards) >= 0.0
    figure = Figure(figsize=(10.5, 5.0), dpi=150, layout="constrained")
    drawn: Any = None
    for axis, front in zip(figure.subplots(1, 2), (True, False), strict=True):
        turn = 1.0 if front else -1.0
        flat = np.column_stack([turn * ((surface.vertices - centre) @ along), (surface.vertices - centre) @ up])
        facing = (surface.normals @ towards) * turn > 0.0
        shade = 0.78 + 0.17 * np.abs(surface.normals[facing] @ towards)
        order = np.argsort(turn * (middles[facing] @ towards))
        axis.add_collection(
            PolyCollection(
                list(flat[surface.faces[facing][order]]),
                facecolors=np.repeat(shade[order][:, None], 3, axis=1),
                edgecolors="face",
                linewidths=0.2,
            )
        )
        here = np.flatnonzero(side == front)
        place = np.column_stack(
            [turn * ((found.places_um[here] - centre) @ along), (found.places_um[here] - centre) @ up]
        )
        drawn = axis.scatter(
            *place.T, c=found.site_time_s[here] / factor, cmap=MAP_NAME, s=46, edgecolors=INK, linewidths=0.6, zorder=3,
            vmin=float(found.site_time_s.min()) / factor, vmax=float(found.site_time_s.max()) / factor,
        )  # fmt: skip
        for row, marker, colour, label in ((found.best, "o", _BEST, "smallest"), (found.worst, "s", _WORST, "largest")):
            chosen = np.isin(np.array(found.site_names)[here], row.sites)
            axis.scatter(
                *place[chosen].T, s=190, marker=marker, facecolors="none", edgecolors=colour, linewidths=2.0, zorder=4,
                label=f"{label} mean time with {found.open_windows} open",
            )  # fmt: skip
        axis.set_aspect("equal")
        axis.autoscale_view()
        axis.set_title("seen along the shortest axis" if front else "from the other side", fontsize=9, loc="left")
        axis.set_xlabel("µm")
        axis.spines[["top", "right"]].set_visible(False)
    figure.colorbar(drawn, ax=figure.axes, label=f"mean escape time, one window at the site ({unit})")
    handles, labels = figure.axes[0].get_legend_handles_labels()
    figure.legend(handles, labels, fontsize=8, frameon=False, loc="outside lower left", ncols=2)
    return figure


def sweep_figure(found: Exploration) -> Figure:
    """Mean time of one window over its radius, beside 1/radius through the middle one."""
    figure = Figure(figsize=(6.4, 4.2), dpi=150, layout="constrained")
    axes = figure.subplots()
    radii = np.array([row.radius_um for row in found.sweep])
    times = np.array([row.mean_time_s for row in found.sweep])
    errors = times * np.array([row.relative_error for row in found.sweep])
    factor, unit = time_scale(float(times.max()))
    middle = len(radii) // 2
    line = np.geomspace(radii.min(), radii.max(), 100)
    axes.plot(
        line, times[middle] * radii[middle] / line / factor, color="#6b7280", linestyle="--",
        label="in proportion to 1/radius",
    )  # fmt: skip
    axes.errorbar(radii, times / factor, errors / factor, color=_BEST, marker="o", capsize=3, label="full solves")
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlabel("radius (µm)")
    axes.set_ylabel(f"mean escape time ({unit})")
    axes.set_title(f"one window at {found.sweep_site}", fontsize=9, loc="left")
    axes.legend(fontsize=8, frameon=False)
    plain_axes(axes)
    return figure


def clustering_figure(found: Exploration) -> Figure:
    """Mean time of k windows far apart and clustered."""
    figure = Figure(figsize=(6.4, 4.2), dpi=150, layout="constrained")
    axes = figure.subplots()
    counts = [row.open_windows for row in found.clustering]
    apart = np.array([row.spread_time_s for row in found.clustering])
    close = np.array([row.clustered_time_s for row in found.clustering])
    factor, unit = time_scale(float(close.max()))
    axes.plot(counts, close / factor, color=_WORST, marker="s", label="on neighbouring sites")
    axes.plot(counts, apart / factor, color=_BEST, marker="o", label="on sites far apart")
    for row, time in zip(found.clustering, close, strict=True):
        axes.annotate(
            f"{100.0 * row.lost_to_clustering:+.3g} %", (row.open_windows, time / factor), fontsize=8,
            textcoords="offset points", xytext=(0, 7), ha="center",
        )  # fmt: skip
    axes.set_xticks(counts)
    axes.set_ylim(0.0, 1.15 * float(close.max()) / factor)
    axes.set_xlabel("open windows")
    axes.set_ylabel(f"mean escape time ({unit})")
    axes.legend(fontsize=8, frameon=False)
    plain_axes(axes)
    return figure


def search_figure(found: Exploration) -> Figure:
    """How the mean time is spread over arrangements, with the smallest and the largest found."""
    figure = Figure(figsize=(6.4, 4.2), dpi=150, layout="constrained")
    axes = figure.subplots()
    factor, unit = time_scale(found.worst.mean_time_s)
    axes.hist(found.sampled_s / factor, bins=50, color="#8fa3b8", edgecolor=INK, linewidth=0.3)
    _marked(axes, found.best, factor, _BEST, "smallest found")
    _marked(axes, found.worst, factor, _WORST, "largest found")
    axes.set_xlabel(f"mean escape time with {found.open_windows} windows open ({unit})")
    axes.set_ylabel("arrangements")
    kind = "all" if found.complete else "random"
    axes.set_title(f"{len(found.sampled_s)} {kind} arrangements, by the reduced model", fontsize=9, loc="left")
    axes.legend(fontsize=8, frameon=False)
    plain_axes(axes)
    return figure


def _marked(axes: Axes, row: Arrangement, factor: float, colour: str, label: str) -> None:
    axes.axvline(row.mean_time_s / factor, color=colour, linewidth=1.8, label=label)
    if row.solved_time_s is not None:
        axes.axvline(
            row.solved_time_s / factor, color=colour, linewidth=1.2, linestyle=":", label="the same, full solve"
        )


_CAPTIONS = {
    "sites.png": "Candidate sites: colour, the mean escape time with one window there alone; rings and squares, the "
    "arrangements with the smallest and the largest mean time.",
    "search.png": "Mean escape times of arrangements.",
    "clustering.png": "Windows on neighbouring sites against windows far apart; the figures are what clustering loses.",
    "sweep.png": "One window alone over its radius.",
}


def write_exploration(found: Exploration, folder: Path) -> list[Path]:
    """Write the pictures and `exploration.html` into a folder that exists; hands out their paths.

    Raises
    ------
    OSError
        The folder cannot be written.
    """
    figures = {"sites.png": sites_figure(found), "search.png": search_figure(found)}
    if found.clustering:
        figures["clustering.png"] = clustering_figure(found)
    if found.sweep:
        figures["sweep.png"] = sweep_figure(found)
    written = []
    for name, figure in figures.items():
        figure.savefig(folder / name, facecolor="white")
        written.append(folder / name)
    page = folder / "exploration.html"
    title = f"{found.name}, arrangements"
    page.write_text(PAGE.substitute(name=escape(title), body=_body(found, written)), encoding="utf-8")
    return [*written, page]


def _body(found: Exploration, pictures: Sequence[Path]) -> str:
    summary = found.summary
    ends = [
        (
            name,
            ", ".join(row.sites),
            "" if row.solved_time_s is None else format_time(row.solved_time_s),
            "" if row.solved_relative_error is None else f"{100.0 * row.solved_relative_error:.2g} %",
            format_time(row.mean_time_s),
            "" if row.difference is None else f"{100.0 * row.difference:+.2f} %",
        )
        for name, row in (("smallest mean time", summary.best), ("largest mean time", summary.worst))
    ]
    clustering = [
        (
            str(row.open_windows),
            format_time(row.spread_time_s),
            format_time(row.clustered_time_s),
            f"{100.0 * row.lost_to_clustering:.3g} %",
        )
        for row in summary.clustering
    ]
    sweep = [
        (format_length(row.radius_um), format_time(row.mean_time_s), f"{100.0 * row.relative_error:.2g} %")
        for row in summary.sweep
    ]
    sites = [
        (row.name, *(f"{value:.4g}" for value in row.place_um), format_time(row.mean_time_s)) for row in summary.sites
    ]
    kind = "absorbing" if summary.permeability_um_s is None else f"of {summary.permeability_um_s:.4g} µm/s"
    parts = [
        f"<h1>{escape(summary.name)}: where windows should be</h1>",
        f'<p class="lead">{summary.open_windows} of {len(summary.sites)} sites open at a time; each window '
        f"{kind}, radius {format_length(summary.radius_um)}; D {summary.diffusion_um2_s:.4g} µm²/s.</p>",
        f'<div class="caution"><p>{escape(CAUTION)} {escape(LOCAL_RULES)}</p></div>',
        "<h2>The best and the worst arrangement</h2>",
        _table(("", "sites", "mean escape time", "its error", "reduced model", "difference"), ends),
        f"<p>Of {summary.arrangements_tried} arrangements{' (all there are)' if summary.complete else ''}, by a "
        "reduced model: the flux through the window of each site is made of six given fluxes, whose fields on this "
        "surface are worked out once. The two ends are solved in full, and “difference” is what the model is off by "
        f"there. It misses reciprocity between sites by {summary.asymmetry:.1e}. Where the search could not try all, "
        "a better arrangement may exist.</p>",
    ]
    parts += ['<div class="pictures">', *(_figure(path) for path in pictures), "</div>"]
    if clustering:
        parts += [
            "<h2>Clustered against spread</h2>",
            _table(("open windows", "far apart", "clustered", "lost to clustering"), clustering),
        ]
    if sweep:
        parts += [
            f"<h2>Size of one window, at {escape(str(summary.sweep_site))}</h2>",
            _table(("radius", "mean escape time", "its error"), sweep),
        ]
    parts += ["<h2>Sites</h2>", _table(("site", "x (µm)", "y (µm)", "z (µm)", "one window there"), sites)]
    if summary.notes:
        parts += ["<h2>Notes</h2><ul>", *(f"<li>{escape(note)}</li>" for note in summary.notes), "</ul>"]
    made = summary.made_with
    parts.append(
        f'<footer class="soft">Made with bemescape {escape(str(made["version"]))}; SHA-256 of the mesh file: '
        f"<code>{escape(str(made['mesh_sha256'] or 'none, the surface was made in memory'))}</code></footer>"
    )
    return "\n".join(parts)


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    cells = "".join(f'<th scope="col">{escape(text)}</th>' for text in head)
    body = "".join("<tr>" + "".join(f"<td>{escape(cell)}</td>" for cell in row) + "</tr>" for row in rows)
    return f'<div class="table"><table><thead><tr>{cells}</tr></thead><tbody>{body}</tbody></table></div>'


def _figure(path: Path) -> str:
    data = base64.b64encode(path.read_bytes()).decode("ascii")
    caption = escape(_CAPTIONS[path.name])
    wide = ' class="wide"' if path.name == "sites.png" else ""
    return (
        f'<figure{wide}><img src="data:image/png;base64,{data}" alt="{caption}"><figcaption>{caption}</figcaption>'
        "</figure>"
    )
