"""The report of a study: one HTML file with its figure, a picture per shape and a table that sorts by itself."""

from __future__ import annotations

import base64
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bemescape.errors import EscapeError
from bemescape.results.store import load_result
from bemescape.study.store import write_atomically
from bemescape.study.table import MEASURES
from bemescape.units import format_length, format_time
from bemescape.version import __version__

from .html import html_caution, html_figure, html_list, html_table, percent, with_error
from .page import PAGE
from .study_plots import drawn_for_groups, figure_as, study_figure
from .thumbnails import colour_bar, common_scale, thumbnails

if TYPE_CHECKING:
    import pandas as pd

    from bemescape.study.plan import PlannedCase
    from bemescape.study.run import StudyResult
    from bemescape.study.statistics import Setting

__all__ = ["write_study_report"]

#: Combinations of swept values that get a column and a figure of their own; all are in the table files.
_MOST_SETTINGS = 6
_SLOWEST_SHAPES = 6
_MOST_FAILURES = 200
#: With more shapes the pictures get smaller, so that the file can still be sent by mail.
_MANY_SHAPES = 120

#: Columns of the ranked table that hold pictures, and those that hold text.
_PICTURED, _TEXTS = ("one scale for all", "own scale"), ("shape", "group", "subject")

_STYLE = """
<style>
main { max-width: 76rem; }
table.sortable { font-size: .79rem; }
table.sortable th button { font: inherit; color: inherit; background: none; border: 0; padding: 0; cursor: pointer;
  text-align: inherit; }
/* The mark is for the eye; aria-sort tells the rest. Browsers that do not know "/" keep the first line. */
table.sortable th button::after { content: "\u00a0↕"; content: "\u00a0↕" / ""; color: var(--soft); }
table.sortable th[aria-sort="ascending"] button::after { content: "\u00a0↑"; content: "\u00a0↑" / ""; }
table.sortable th[aria-sort="descending"] button::after { content: "\u00a0↓"; content: "\u00a0↓" / ""; }
table.sortable th { vertical-align: bottom; }
table.sortable td { vertical-align: middle; }
table.sortable th, table.sortable td { overflow-wrap: normal; padding-left: .2rem; padding-right: .2rem; }
table.sortable td:not(.picture) { white-space: nowrap; }
td.picture { padding: .1rem; }
td.picture img { display: block; width: 6.1rem; height: auto; background: #fff; border-radius: .3rem; }
.tiles { display: grid; grid-template-columns: repeat(3, 1fr); gap: .8rem; }
.bar { max-width: 32rem; background: #fff; }
.bar img { width: 100%; display: block; }
@media (max-width: 44rem) { .tiles { grid-template-columns: 1fr; } }
@media print { table.sortable th button::after { content: ""; } }
</style>
"""
# Sorts by data-value where a cell has one, by its text elsewhere; cells without a value stay last.
_SCRIPT = """
<script>
document.querySelectorAll("table.sortable").forEach(function (table) {
  table.querySelectorAll("th button").forEach(function (button) {
    button.addEventListener("click", function () {
      var head = button.parentNode, column = head.cellIndex, body = table.tBodies[0];
      var down = head.getAttribute("aria-sort") === "ascending";
      table.querySelectorAll("th").forEach(function (th) { th.removeAttribute("aria-sort"); });
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      var rows = Array.prototype.slice.call(body.rows).map(function (row, place) {
        var cell = row.cells[column], text = cell.getAttribute("data-value");
        if (text === null) { text = cell.textContent.trim(); }
        var number = text === "" ? NaN : Number(text);
        return { row: row, place: place, text: text, number: number };
      });
      rows.sort(function (a, b) {
        if ((a.text === "") !== (b.text === "")) { return a.text === "" ? 1 : -1; }
        var order = isNaN(a.number) || isNaN(b.number) ? a.text.localeCompare(b.text) : a.number - b.number;
        return (down ? -order : order) || a.place - b.place;
      });
      rows.forEach(function (entry) { body.appendChild(entry.row); });
    });
  });
});
</script>
"""


@dataclass(frozen=True)
class _Pictures:
    """Of one shape, as data URIs: in the common scale, in its own, and with its slow regions."""

    common: str
    own: str
    slow: str = ""


@dataclass
class _Report:
    result: StudyResult
    settings: list[tuple[Setting, pd.DataFrame, str]]
    groups: list[str]
    pictures: dict[str, _Pictures] = field(default_factory=dict)
    bar: str = ""
    figures: list[str] = field(default_factory=list)


def write_study_report(
    result: StudyResult, folder: str | Path, *, told: Callable[[int, int], None] | None = None
) -> list[Path]:
    """Write `report.html`, `figure.pdf` and `figure.svg` of a study into `folder`.

    Parameters
    ----------
    result : StudyResult
    folder : path
        Must exist.
    told : callable, optional
        Called with the pictures done and their number.

    Raises
    ------
    SettingsError
        A file cannot be written.
    """
    folder = Path(folder)
    settings = _settings(result)
    report = _Report(result, settings, list(dict.fromkeys(result.table["group"])))
    written = []
    for number, (setting, part, title) in enumerate(settings):
        figure = study_figure(part, setting, groups=report.groups, title=title)
        report.figures.append(_uri(figure_as(figure, "svg"), "svg+xml"))
        if number == 0:
            for kind in ("pdf", "svg"):
                write_atomically(folder / f"figure.{kind}", figure_as(figure, kind))
                written.append(folder / f"figure.{kind}")
    _draw_shapes(report, told)
    text = PAGE.substitute(name=escape(result.plan.study.name), body=_body(report))
    write_atomically(folder / "report.html", text.encode("utf-8"))
    return [folder / "report.html", *written]


def _uri(content: bytes, kind: str) -> str:
    return f"data:image/{kind};base64," + base64.b64encode(content).decode("ascii")


def _settings(result: StudyResult) -> list[tuple[Setting, pd.DataFrame, str]]:
    """Each of the first combinations of swept values with its rows and its name."""
    found = []
    for setting in result.statistics.settings[:_MOST_SETTINGS]:
        part = result.table
        for column, value in setting.swept.items():
            part = part[part[column] == (math.inf if value is None else value)]
        found.append((setting, part, _swept_text(setting.swept)))
    return found


def _swept_text(swept: Mapping[str, float | None]) -> str:
    words = {
        "diffusion_um2_s": ("D", "µm²/s"),
        "swept_radius_um": ("radius", "µm"),
        "swept_permeability_um_s": ("permeability", "µm/s"),
        "swept_count": ("count", ""),
        "swept_seed": ("seed", ""),
    }
    parts = []
    for column, value in swept.items():
        name, unit = words[column]
        parts.append(f"{name} = {'infinite' if value is None else f'{value:g} {unit}'.strip()}")
    return ", ".join(parts)


# -- pictures -------------------------------------------------------------------------------------------


def _draw_shapes(report: _Report, told: Callable[[int, int], None] | None) -> None:
    """One picture a shape in each scale, of its case at the first combination of swept values."""
    result = report.result
    if not report.settings:
        return
    _, part, _ = report.settings[0]
    first = part[part["mean_time_s"].notna()]
    if not len(first):
        return
    scale = common_scale(list(first["slowest_time_s"]))
    report.bar = _uri(figure_as(colour_bar(scale), "png"), "png")
    slowest = set(first.sort_values("mean_time_s", ascending=False)["shape"].head(_SLOWEST_SHAPES))
    size = (320, 240) if len(first) <= _MANY_SHAPES else (200, 150)
    for number, (_, row) in enumerate(first.iterrows()):
        stored = result.stored[row["case_key"]]
        try:
            solved = load_result(stored.folder)
        except EscapeError:
            continue  # checked when the run began: whoever damaged it since is told by the next run
        common, own = (_uri(picture, "png") for picture in thumbnails(solved, [scale, None], size=size))
        slow = ""
        if row["shape"] in slowest:
            slow = _uri(thumbnails(solved, [None], size=(480, 360), slow=True)[0], "png")
        report.pictures[row["shape"]] = _Pictures(common, own, slow)
        if told is not None:
            told(number + 1, len(first))


# -- sections -------------------------------------------------------------------------------------------


def _body(report: _Report) -> str:
    sections = [
        _STYLE,
        _head(report),
        _figures(report),
        _comparison(report),
        _trends(report),
        _slowest(report),
        _ranked(report),
        _failures(report),
        _how(report),
        _SCRIPT,
    ]
    return "\n".join(section for section in sections if section)


def _head(report: _Report) -> str:
    result = report.result
    table, plan = result.table, result.plan
    done = int(table["mean_time_s"].notna().sum())
    errors = table["relative_error"].dropna()
    facts = [
        ("Shapes", str(len(plan.shapes))),
        ("Groups", str(len(report.groups))),
        ("Cases with a result", f"{done} of {len(table)}"),
        ("Unit of comparison", result.statistics.unit),
        ("Numerical error, median", percent(float(errors.median()), 2) if len(errors) else "–"),
        ("Numerical error, largest", percent(float(errors.max()), 2) if len(errors) else "–"),
    ]
    cards = "".join(f"<div><dt>{escape(key)}</dt><dd>{escape(value)}</dd></div>" for key, value in facts)
    first = report.settings[0][0] if report.settings else None
    lead = [] if first is None else [pair.statement for pair in first.pairs] or first.statements
    return (
        f"<h1>{escape(plan.study.name)}</h1>"
        f'<p class="lead">Mean escape times of {len(plan.shapes)} shapes'
        f"{f' in {len(report.groups)} groups' if len(report.groups) > 1 else ''}.</p>"
        + (f"<p>{escape(lead[0])}</p>" if lead else "")
        + f'<dl class="facts">{cards}</dl>{html_caution()}'
    )


def _figures(report: _Report) -> str:
    figures = [
        html_figure(
            source,
            f"{f'{title}. ' if title else ''}Left: every shape with its numerical error; {drawn_for_groups(part)}. "
            "Middle and right: mean escape time against volume and narrowest neck; dashed: least squares on "
            "logarithms.",
            wide=True,
        )
        for source, (_, part, title) in zip(report.figures, report.settings, strict=True)
    ]
    more = len(report.result.statistics.settings) - len(report.settings)
    note = f'<p class="soft">and {more} more combinations of swept values; all are in cases.csv.</p>' if more else ""
    return f'<h2>Groups and shapes</h2><div class="pictures">{"".join(figures)}</div>{note}' if figures else ""


def _comparison(report: _Report) -> str:
    text = "<h2>Comparison of the groups</h2>" + html_list(report.result.statistics.statements)
    for setting, _, title in report.settings:
        text += f"<h3>{escape(title)}</h3>" if title else ""
        if setting.groups:
            rows = [
                (
                    group.group or "(none)",
                    str(group.shapes),
                    str(group.units),
                    format_time(group.median_s),
                    f"{format_time(group.lower_quartile_s, 3)} to {format_time(group.upper_quartile_s, 3)}",
                )
                for group in setting.groups
            ]
            text += html_table(("group", "shapes", "n", "median", "middle half"), rows)
        if setting.overall is not None:
            text += f"<p>Kruskal–Wallis over all groups: p = {setting.overall.p:.2g}.</p>"
        text += html_list(setting.statements)
    return text + f'<p class="soft">{escape(report.result.statistics.method)}</p>'


def _trends(report: _Report) -> str:
    text = ""
    for setting, _, title in report.settings[:1]:
        rows = []
        for trend in setting.trends:
            slope = "–"
            if trend.slope is not None and trend.slope_interval is not None:
                slope = f"{trend.slope:.3f} ({trend.slope_interval[0]:.3f} to {trend.slope_interval[1]:.3f})"
            rows.append(
                (
                    trend.column,
                    str(trend.shapes),
                    f"{trend.spearman:+.3f}",
                    "not given" if trend.p is None else f"{trend.p:.2g}",
                    slope,
                )
            )
        if rows:
            text += f"<h3>{escape(title)}</h3>" if title else ""
            text += html_table(("measure", "shapes", "Spearman", "p", "slope, log–log (95 %)"), rows)
    if not text:
        return ""
    note = (
        ""
        if report.result.statistics.unit == "shape"
        else " p is not given: shapes of one subject are not independent."
    )
    return (
        "<h2>Mean time against shape</h2>" + text + f'<p class="soft">All groups together. A slope of 1 means: in '
        f"proportion; −2: with the inverse square.{note}</p>"
    )


def _slowest(report: _Report) -> str:
    if not report.settings:
        return ""
    _, part, _ = report.settings[0]
    tiles = []
    for _, row in part[part["mean_time_s"].notna()].sort_values("mean_time_s", ascending=False).iterrows():
        pictures = report.pictures.get(row["shape"])
        if pictures is None or not pictures.slow:
            continue
        tiles.append(
            html_figure(
                pictures.slow,
                f"{row['shape']} ({row['group'] or 'no group'}): mean {_unbroken(row['mean_time_s'])}, slowest place "
                f"{_unbroken(row['slowest_time_s'])}; in its own scale, red: its slowest 10 % of the wall.",
                wide=False,
            )
        )
    return f'<h2>Slowest shapes and their slow regions</h2><div class="tiles">{"".join(tiles)}</div>' if tiles else ""


def _unbroken(seconds: float) -> str:
    return format_time(seconds, 3).replace(" ", "\u00a0")


def _ranked(report: _Report) -> str:
    if not report.settings:
        return ""
    _, part, title = report.settings[0]
    heads = ["rank", *_PICTURED, *_TEXTS]
    heads += [f"mean time{f', {name}' if name else ''}" for _, _, name in report.settings]
    heads += [
        "CV",
        "slow part of the wall",
        "× rule of thumb",
        "volume (µm³)",
        "sphericity",
        "longest path",
        "neck radius",
    ]
    head = "".join(_head_cell(name) for name in heads)
    others = [rows.set_index("shape") for _, rows, _ in report.settings]
    lines = []
    ranked = part[part["mean_time_s"].notna()].sort_values("mean_time_s", ascending=False)
    for rank, (_, row) in enumerate(ranked.iterrows(), start=1):
        lines.append(_ranked_row(rank, row, others, report.pictures.get(row["shape"])))
    if not lines:
        return ""
    return (
        "<h2>All shapes, slowest first</h2>"
        f'<p class="soft">Click a heading to sort. Pictures{f" ({escape(title)})" if title else ""}: light blue: '
        "windows. The first is in one scale over the study:</p>"
        f'<div class="bar"><img src="{report.bar}" alt="colour bar of the common scale"></div>'
        f'<div class="table"><table class="sortable"><thead><tr>{head}</tr></thead>'
        f"<tbody>{''.join(lines)}</tbody></table></div>"
        '<p class="soft">× rule of thumb: mean time over V / (4 D Σ √(A/π)). Neck radius: of a disc as large as the '
        "narrowest way to the windows, an estimate. All columns and cases are in cases.csv and cases.parquet.</p>"
    )


def _head_cell(name: str) -> str:
    kind = ' class="text"' if name in (*_PICTURED, *_TEXTS) else ""
    inside = escape(name) if name in _PICTURED else f'<button type="button">{escape(name)}</button>'
    return f"<th{kind}>{inside}</th>"


def _ranked_row(rank: int, row: Any, others: Sequence[pd.DataFrame], pictures: _Pictures | None) -> str:
    cells = [_cell(str(rank), rank)]
    for source in (None, None) if pictures is None else (pictures.common, pictures.own):
        shown = f'<img src="{source}" alt="{escape(str(row["shape"]), quote=True)}">' if source else ""
        cells.append(f'<td class="picture">{shown}</td>')
    cells += [f'<td class="text">{escape(str(row[name]))}</td>' for name in _TEXTS]
    for table in others:
        there = table.loc[row["shape"]]
        time = float(there["mean_time_s"])
        cells.append(
            _cell("", "") if math.isnan(time) else _cell(with_error(time, float(there["relative_error"])), time)
        )
    shown_as: tuple[tuple[str, Callable[[float], str]], ...] = (
        ("cv", lambda value: f"{value:.3f}"),
        ("slow_fraction", percent),
        ("rule_of_thumb_ratio", lambda value: f"{value:.2f}"),
        ("volume_um3", lambda value: f"{value:.4g}"),
        ("sphericity", lambda value: f"{value:.3f}"),
        ("longest_geodesic_um", format_length),
        ("narrowest_neck_radius_um", format_length),
    )
    for column, words in shown_as:
        value = float(row[column])
        cells.append(_cell("", "") if math.isnan(value) else _cell(words(value), value))
    return f"<tr>{''.join(cells)}</tr>"


def _cell(text: str, value: float | str) -> str:
    return f'<td data-value="{value}">{escape(text)}</td>'


def _failures(report: _Report) -> str:
    table = report.result.table
    failed = table[table["failure"] != ""]
    if not len(failed):
        return "<h2>Failures</h2><p>None: every case has a result.</p>"
    rows = [(row["case"], row["group"], row["failure"]) for _, row in failed.head(_MOST_FAILURES).iterrows()]
    return (
        f"<h2>Failures</h2><p>{len(failed)} of {len(table)} cases have no result and are in no statistic.</p>"
        + html_table(("case", "group", "reason"), rows, text_columns=(1, 2))
    )


def _how(report: _Report) -> str:
    result = report.result
    plan = result.plan
    accuracy = plan.study.document.accuracy
    first = plan.cases[0]
    lines = [
        f"target for the numerical error: {percent(accuracy.target)}"
        + ("" if accuracy.max_panels is None else f", at most {accuracy.max_panels} panels"),
        *_window_lines(first),
        f"healing of meshes: {', '.join(sorted({shape.heal for shape in plan.shapes}))}",
        f"bemescape {__version__}; checksums of all meshes are in cases.csv (mesh_sha256)",
    ]
    measures = [(name, text) for name, text in MEASURES.items()]
    return (
        "<h2>Settings, and how to reproduce</h2>"
        + html_list(lines)
        + f"<pre>bemescape study {escape(plan.study.name)}.study.toml --out {escape(result.folder.name)}</pre>"
        '<p class="soft">The study file, the meshes and this version give the same numbers; finished cases are not '
        "solved again.</p><h3>Columns of the table</h3>"
        + html_table(("column", "meaning"), measures, text_columns=(1,))
    )


def _window_lines(case: PlannedCase) -> list[str]:
    lines = []
    for window in case.table["window"]:
        rules = []
        for key, part in window.items():
            if isinstance(part, Mapping):
                inside = ", ".join(f"{name} {value}" for name, value in part.items())
                rules.append(f"{key} ({inside})")
            elif key == "permeability":
                rules.append(f"permeability {part}")
        lines.append(f"window {window.get('name')!r} of {case.name}: {'; '.join(rules)}")
    return lines
