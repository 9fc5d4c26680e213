"""The report of a result: one HTML file that carries its pictures and needs neither network nor script."""

from __future__ import annotations

import base64
import json
import math
import tempfile
from collections.abc import Iterable
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING

from bemescape.errors import SettingsError
from bemescape.units import format_length, format_time, time_scale

from .html import html_caution, html_figure, html_list, html_table, percent, with_error
from .page import PAGE
from .pictures import save_pictures

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.results.summary import Summary

__all__ = ["write_report"]

#: A longer table of windows would be the report; `summary.json` has all.
_MOST_WINDOW_ROWS = 60

# What each picture shows, in the order of the report; wide ones take both columns.
_CAPTIONS = {
    "view_front.png": (
        "Front: mean escape time of a molecule that starts at this place of the wall, "
        "seen along the shortest axis of the shape. Windows are light blue with a dark rim; slow regions "
        "have a red outline, and a dashed line leads from each along the wall to its nearest window.",
        True,
    ),
    "view_side.png": ("Side: along the longest axis.", False),
    "view_top.png": ("Top: along the middle axis.", False),
    "cutaway.png": (
        "Cut open: time from places inside, in the same colours. Thin white lines join places of equal time.",
        True,
    ),
    "windows.png": (
        "Where molecules leave: exits per µm² as a part of all exits, on a logarithmic scale; each window is "
        "seen straight on. Exits crowd towards the rim.",
        True,
    ),
    "spread.png": (
        "How the time is spread over the area of the wall, and against the distance to the nearest window.",
        True,
    ),
}


def write_report(result: EscapeResult, path: str | Path, *, pictures: Iterable[str | Path] | None = None) -> Path:
    """Write the report of `result` to `path`.

    Parameters
    ----------
    result : EscapeResult
        What to report.
    path : path
        The HTML file; its folder must exist.
    pictures : iterable of path or None
        What `save_pictures` wrote for this result; drawn anew if None.

    Raises
    ------
    SettingsError
        The file cannot be written.
    """
    path = Path(path)
    if pictures is None:
        with tempfile.TemporaryDirectory() as folder:
            images = _data_uris(save_pictures(result, folder))
    else:
        images = _data_uris(Path(picture) for picture in pictures)
    text = PAGE.substitute(name=escape(result.name), body=_body(result, images))
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        raise SettingsError(
            f"the report {path} cannot be written ({error.strerror or error}); name another place"
        ) from error
    return path


def _data_uris(paths: Iterable[Path]) -> dict[str, str]:
    return {path.name: "data:image/png;base64," + base64.b64encode(path.read_bytes()).decode("ascii") for path in paths}


def _body(result: EscapeResult, images: dict[str, str]) -> str:
    summary = result.summary
    sections = [
        _head(result, summary),
        _pictures(images),
        _windows(summary),
        _slow_regions(result, summary),
        _spread(summary, images),
        _start_points(summary),
        _rule_of_thumb(summary),
        _accuracy(result, summary, images),
        _mesh(result, summary),
        _origin(summary),
        _footer(summary),
    ]
    return "\n".join(section for section in sections if section)


def _error_words(mean_s: float) -> str:
    _, unit = time_scale(mean_s)
    return {"s": "seconds", "ms": "milliseconds", "µs": "microseconds", "ns": "nanoseconds"}[unit]


# -- sections -------------------------------------------------------------------------------------------


def _head(result: EscapeResult, summary: Summary) -> str:
    count = len(summary.windows)
    through = f"its window {summary.windows[0].name}" if count == 1 else f"its {count} windows"
    target = (
        f"The target of {percent(result.target)} was met."
        if summary.target_met
        else f"The target of {percent(result.target)} was NOT met: the refinement ended at its panel budget."
    )
    facts = [
        ("Mean escape time", with_error(summary.mean_time_s, summary.relative_error)),
        ("Relative error (estimated)", percent(summary.relative_error, 2)),
        ("Slowest place on the wall", format_time(summary.slowest_time_s)),
        ("Diffusion coefficient D", f"{summary.diffusion_um2_s:.4g} µm²/s"),
        ("Volume", f"{summary.volume_um3:.4g} µm³"),
        ("Surface area", f"{summary.area_um2:.4g} µm²"),
    ]
    if summary.escape_time_sd_s is not None:
        facts.insert(2, ("Standard deviation of the escape time", format_time(summary.escape_time_sd_s)))
    cards = "".join(f"<div><dt>{escape(key)}</dt><dd>{escape(value)}</dd></div>" for key, value in facts)
    return (
        f"<h1>{escape(summary.name)}</h1>"
        '<p class="lead">A molecule that starts anywhere inside leaves through '
        f"{escape(through)} after "
        f"<strong>{escape(with_error(summary.mean_time_s, summary.relative_error))}</strong> "
        f"({_error_words(summary.mean_time_s)}) on average.</p>"
        f'<p class="soft">Start uniform in the volume. The ± is the estimated numerical error on this mesh; '
        f"it does not cover the segmentation or D. {escape(target)}</p>"
        f'<dl class="facts">{cards}</dl>{html_caution()}'
    )


def _pictures(images: dict[str, str]) -> str:
    figures = [
        html_figure(images[name], caption, wide=wide) for name, (caption, wide) in _CAPTIONS.items() if name in images
    ]
    return f'<h2>Pictures</h2><div class="pictures">{"".join(figures)}</div>' if figures else ""


def _windows(summary: Summary) -> str:
    shown, left_out = list(summary.windows), ""
    if len(shown) > _MOST_WINDOW_ROWS:
        by_share = sorted(shown, key=lambda window: -window.share)
        shown = by_share[: _MOST_WINDOW_ROWS // 2] + by_share[-_MOST_WINDOW_ROWS // 2 :]
        left_out = (
            f"The {len(shown) // 2} with the largest and the {len(shown) // 2} with the smallest shares of "
            f"{len(summary.windows)}; summary.json has all. "
        )
    rows = [
        (
            window.name,
            f"{window.area_um2:.4g}",
            percent(window.area_um2 / summary.area_um2),
            percent(window.share, 4) + ("" if window.share_error is None else f" ± {percent(window.share_error, 2)}"),
            ("perfectly absorbing" if window.permeability_um_s is None else f"{window.permeability_um_s:.4g} µm/s")
            + (", compact pore" if window.compact else ""),
        )
        for window in shown
    ]
    total = sum(window.share for window in summary.windows)
    return (
        "<h2>Windows</h2>"
        + html_table(
            ("window", "area (µm²)", "part of the surface", "share of exits", "permeability"),
            rows,
        )
        + f'<p class="soft">{left_out}Share: part of all exits, start uniform in the volume. The shares are not '
        f"scaled to 1; their sum, {total:.6f}, is a check of the solution.</p>"
    )


def _slow_regions(result: EscapeResult, summary: Summary) -> str:
    if not summary.slow_regions:
        return ""
    rows = [
        (
            f"{number}",
            f"{region.area_um2:.3g}",
            format_time(region.mean_time_s),
            ", ".join(f"{value:.3f}" for value in region.centre_um),
            format_length(region.distance_to_window_um)
            if math.isfinite(region.distance_to_window_um)
            else "none along the wall",
            region.nearest_window,
        )
        for number, region in enumerate(summary.slow_regions, start=1)
    ]
    slow = result.slow_regions()
    return (
        "<h2>Slow regions</h2>"
        f"<p>Connected parts of the slowest {percent(slow.wall_fraction)} of the wall's area: from there "
        f"the mean escape time is above {escape(format_time(slow.level_s))}.</p>"
        + html_table(
            ("region", "area (µm²)", "mean time", "centre x, y, z (µm)", "path to window", "nearest window"),
            rows,
            text_columns=(5,),
        )
        + '<p class="soft">Path: shortest way along the wall from the centre of the region.</p>'
    )


def _spread(summary: Summary, images: dict[str, str]) -> str:
    spread = summary.spread
    if spread is None or summary.escape_time_sd_s is None:
        return ""
    rows = [
        ("standard deviation", with_error(summary.escape_time_sd_s, spread.sd_relative_error)),
        ("standard deviation / mean", f"{spread.cv:.4f}"),
        ("mean remaining time of those found inside", format_time(spread.tail_time_s)),
    ]
    chart = ""
    if "survival.png" in images:
        caption = (
            "The part still inside as time goes on. Solid: one rate 1/τ, with its proven bound as a band. Dashed: the "
            "exponential tail that has the computed mean and second moment; it does not show the early exits."
        )
        chart = f'<div class="pictures">{html_figure(images["survival.png"], caption, wide=False)}</div>'
    return (
        "<h2>Spread of the escape time</h2>"
        + html_table(("start uniform in the volume", ""), rows)
        + f"<p>{escape(spread.statement)}</p>"
        + chart
        + '<p class="soft">The bound follows from the first two moments alone (Brown 1983, Ann. Probab. 11:419).</p>'
    )


def _start_points(summary: Summary) -> str:
    if not summary.start:
        return ""
    rows = []
    for name, time in summary.start.items():
        details = summary.start_details.get(name)
        sd = None if details is None else details.escape_time_sd_s
        rows.append(
            (
                name,
                "point" if details is None else details.kind,
                format_time(time),
                f"{time / summary.mean_time_s:.3f}",
                "" if sd is None else format_time(sd),
            )
        )
    return (
        "<h2>Named starts</h2>"
        + html_table(
            ("start", "kind", "mean escape time from there", "ratio to the volume mean", "standard deviation"),
            rows,
            text_columns=(1,),
        )
        + _ways_out(summary)
    )


def _ways_out(summary: Summary) -> str:
    """Which window those from each start leave through, and after what time."""
    rows = []
    for name, details in summary.start_details.items():
        times = details.conditional_time_s or {}
        for window, part in (details.splitting or {}).items():
            time = times.get(window)
            rows.append((name, window, percent(part, 4), "nobody" if time is None else format_time(time)))
    if not rows:
        return ""
    return (
        "<h3>Which way out</h3>"
        + html_table(("start", "window", "leave through it", "mean time of those who do"), rows, text_columns=(1,))
        + '<p class="soft">The volume averages of these probabilities must be the shares above, which are found from '
        "the outflow; in this result they differ by at most "
        f"{0.0 if summary.checks.splitting_share is None else summary.checks.splitting_share:.1e}.</p>"
    )


def _rule_of_thumb(summary: Summary) -> str:
    rule = summary.rule_of_thumb
    ratio = summary.mean_time_s / rule.mean_time_s if rule.mean_time_s > 0.0 else float("nan")
    rows = [
        (f"rule of thumb, {rule.formula}", format_time(rule.mean_time_s), "1"),
        ("computed on this shape", format_time(summary.mean_time_s), f"{ratio:.3f}"),
    ]
    return (
        "<h2>Beside the rule of thumb</h2>"
        + html_table(("", "mean escape time", "ratio"), rows)
        + "<p>The rule is for small, round, perfectly absorbing windows, far apart on a smooth roundish "
        "wall; each window counts as a disc of its area. A neck, a constriction, a permeable or crowded "
        "window makes the computed time longer; a window that is a large part of the wall, or an elongated "
        "one, makes it shorter. A ratio far from 1 is the effect of the shape, not an error.</p>"
    )


def _accuracy(result: EscapeResult, summary: Summary, images: dict[str, str]) -> str:
    rows = []
    previous: float | None = None
    for level, row in enumerate(result.levels, start=1):
        mean = row["mean_time_s"]
        change = "" if previous is None else f"{100.0 * (mean / previous - 1.0):+.3f} %"
        previous = mean
        rows.append(
            (
                f"{level}",
                f"{row['panels']:.0f}",
                format_time(mean, 6),
                change,
                f"{row.get('iterations', float('nan')):.0f}",
                f"{row.get('seconds', float('nan')):.2f}",
            )
        )
    rows.append(("stated", f"{summary.panels}", format_time(summary.mean_time_s, 6), "", f"{summary.iterations}", ""))
    checks = [
        f"Balance: the outflow through all windows times D / V differs from 1 by "
        f"{summary.checks.balance:.2e} (0 for an exact solution).",
        f"Last relative residual of the iteration: {result.residuals[-1]:.1e} after {result.iterations} iterations."
        if result.residuals
        else "The iteration kept no residuals.",
    ]
    opinions = (summary.checks.crosscheck, summary.checks.walkers)
    checks += [f"Second opinion: {opinion.statement}." for opinion in opinions if opinion is not None]
    chart = ""
    if "convergence.png" in images and len(result.levels) > 1:
        caption = "Mean escape time of each resolution, and the stated value with its error."
        chart = f'<div class="pictures">{html_figure(images["convergence.png"], caption, wide=False)}</div>'
    return (
        "<h2>How accurate</h2>"
        + html_table(("resolution", "panels", "mean escape time", "change", "iterations", "seconds"), rows)
        + chart
        + "<h3>Checks</h3>"
        + html_list(checks)
        + f'<p class="soft">The run took {summary.wall_s:.2f} s.</p>'
    )


def _mesh(result: EscapeResult, summary: Summary) -> str:
    parts = ["<h2>The surface</h2>"]
    if result.health is not None:
        parts += ["<h3>State as it was read</h3>", html_list(result.health.lines())]
    if result.healing is not None:
        parts += ["<h3>Changes made by healing</h3>", html_list(result.healing.lines())]
    else:
        parts.append("<p>Healing changed nothing.</p>")
    if summary.notes:
        parts += ["<h3>Notes</h3>", html_list(summary.notes)]
    return "".join(parts)


def _origin(summary: Summary) -> str:
    made = summary.made_with
    settings = json.dumps(made.settings, indent=2, ensure_ascii=False, default=str)
    checksum = made.mesh_sha256 or "none: the surface was made in memory"
    return (
        "<h2>How to repeat this</h2>"
        f"<p>Made with bemescape {escape(made.version)}. With the same version, the case file (windows, "
        "diffusion coefficient), the mesh file of the checksum below and these settings, the numbers come "
        "out the same to rounding:</p>"
        "<pre>bemescape solve CASE.toml --out FOLDER</pre>"
        f"<p>SHA-256 of the mesh file: <code>{escape(checksum)}</code></p>"
        f"<h3>Settings</h3><pre>{escape(settings)}</pre>"
    )


def _footer(summary: Summary) -> str:
    return (
        f'<footer class="soft">Lengths in µm, times as stated, D in µm²/s. bemescape '
        f"{escape(summary.made_with.version)}.</footer>"
    )
