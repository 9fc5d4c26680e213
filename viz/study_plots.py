"""Flat figures of a study: groups with every point, and mean time against shape."""

from __future__ import annotations

import io
import itertools
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
from matplotlib.figure import Figure

from bemescape.units import time_scale

from .scales import INK, round_ticks, tick_label

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

    from bemescape.study.statistics import Setting, Trend

__all__ = ["drawn_for_groups", "figure_as", "group_marks", "study_figure"]

# Okabe & Ito's colours that stay apart for every kind of colour vision and in grey; the marks differ too.
_COLOURS = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#e69f00", "#56b4e9")
_MARKS = ("o", "s", "^", "D", "v", "P")
#: Measures against which the figure shows the time.
_AGAINST = {"volume_um3": "volume (µm³)", "narrowest_neck_radius_um": "narrowest neck, radius (µm)"}


def group_marks(groups: Sequence[str]) -> dict[str, tuple[str, str]]:
    """Colour and mark of each group, in the order of the study."""
    return {
        group: (_COLOURS[k % len(_COLOURS)], _MARKS[(k + k // len(_COLOURS)) % len(_MARKS)])
        for k, group in enumerate(groups)
    }


def study_figure(part: pd.DataFrame, setting: Setting, *, groups: Sequence[str], title: str = "") -> Figure:
    """Groups with every point, and mean time against volume and neck, for one combination of swept values.

    Parameters
    ----------
    part : DataFrame
        Rows of the table with that combination.
    setting : Setting
        Their statistics.
    groups : sequence of str
        All groups of the study, so that colours stay.
    """
    figure = Figure(figsize=(11.0, 3.7), dpi=150, layout="constrained")
    left, middle, right = figure.subplots(1, 3, width_ratios=(0.9, 1.0, 1.0))
    used = part[part["mean_time_s"].notna()]
    factor, unit = time_scale(float(used["mean_time_s"].median()) if len(used) else 1.0)
    marks = group_marks(groups)
    _groups(left, used, setting, marks, factor)
    left.set_ylabel(f"mean escape time ({unit})")
    trends = {trend.column: trend for trend in setting.trends}
    for axes, (column, label) in zip((middle, right), _AGAINST.items(), strict=True):
        _against(axes, used, column, trends.get(column), marks, factor)
        axes.set_xlabel(label)
        axes.set_ylabel(f"mean escape time ({unit})")
    if title:
        figure.suptitle(title, fontsize=10, x=0.01, ha="left")
    for axes in (left, middle, right):
        axes.spines[["top", "right"]].set_visible(False)
        axes.grid(visible=True, color="#e2e5e9", linewidth=0.6)
        axes.set_axisbelow(True)
    return figure


def drawn_for_groups(part: pd.DataFrame) -> str:
    """What the line and the band of a group are, in words."""
    if _by_subject(part):
        return "open: subjects; line, band: their median, middle half"
    return "line: median, band: middle half"


def _by_subject(part: pd.DataFrame) -> bool:
    return bool((part["subject"] != "").any())


def _groups(
    axes: Axes, used: pd.DataFrame, setting: Setting, marks: Mapping[str, tuple[str, str]], factor: float
) -> None:
    present = [group for group in marks if (used["group"] == group).any()]
    summaries = {group.group: group for group in setting.groups}
    by_subject = _by_subject(used)
    for place, group in enumerate(present):
        colour, mark = marks[group]
        members = used[used["group"] == group]
        times = members["mean_time_s"].to_numpy(float) / factor
        errors = members["mean_time_error_s"].to_numpy(float) / factor
        at = place + _apart(times)
        if by_subject:
            medians = members[members["subject"] != ""].groupby("subject")["mean_time_s"].median()
            at -= 0.12
            beside = np.full(len(medians), place + 0.22)
            axes.plot(beside, medians / factor, mark, color=colour, fillstyle="none", markersize=8, mew=1.6, zorder=5)
        axes.errorbar(
            at, times, yerr=errors, fmt=mark, color=colour, markersize=4.5, alpha=0.8, linewidth=0.8, zorder=3
        )
        if group not in summaries:
            continue  # nobody in it has a subject, so that it takes no part in the comparison
        summary = summaries[group]
        axes.hlines(summary.median_s / factor, place - 0.34, place + 0.34, color=INK, linewidth=1.8, zorder=4)
        axes.fill_between(
            [place - 0.34, place + 0.34],
            summary.lower_quartile_s / factor,
            summary.upper_quartile_s / factor,
            color=colour,
            alpha=0.14,
            linewidth=0.0,
        )
    unit = " subjects" if by_subject else ""
    units = {group: summaries[group].units if group in summaries else 0 for group in present}
    labels = [f"{group or '(none)'}\nn = {units[group]}{unit}" for group in present]
    axes.set_xticks(range(len(present)), labels)
    axes.set_xlim(-0.6, max(len(present) - 0.4, 0.6))
    axes.set_ylim(bottom=0.0)
    axes.set_title(drawn_for_groups(used), fontsize=8, loc="left")


def _apart(values: Any) -> Any:
    """Sideways shifts that keep points of nearly equal height apart, the same in every run."""
    shifts = np.zeros(len(values))
    if len(values) < 2:
        return shifts
    near = 0.035 * max(float(np.max(values)), 1e-300)
    order = np.argsort(values, kind="stable")
    streak = 0
    for before, number in itertools.pairwise(order):
        streak = streak + 1 if values[number] - values[before] < near else 0
        shifts[number] = 0.09 * ((streak + 1) // 2) * (1 if streak % 2 else -1)
    return np.clip(shifts, -0.32, 0.32)


def _against(
    axes: Axes,
    used: pd.DataFrame,
    column: str,
    trend: Trend | None,
    marks: Mapping[str, tuple[str, str]],
    factor: float,
) -> None:
    rows = used[used[column] > 0.0]
    for group, (colour, mark) in marks.items():
        members = rows[rows["group"] == group]
        if len(members):
            axes.plot(
                members[column],
                members["mean_time_s"] / factor,
                linestyle="none",
                marker=mark,
                color=colour,
                markersize=5,
                alpha=0.85,
                label=group or "(none)",
            )
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.minorticks_off()
    if len(rows):
        for axis, values in ((axes.xaxis, rows[column]), (axes.yaxis, rows["mean_time_s"] / factor)):
            low, high = 0.85 * float(values.min()), 1.18 * float(values.max())
            ticks = round_ticks(low, high, log=True)
            axis.set_ticks(ticks, labels=[tick_label(tick) for tick in ticks])
            (axes.set_xlim if axis is axes.xaxis else axes.set_ylim)(low, high)
    if trend is not None and trend.slope is not None and trend.slope_interval is not None and len(rows):
        x = np.log(rows[column].to_numpy(float))
        y = np.log(rows["mean_time_s"].to_numpy(float) / factor)
        ends = np.array([x.min(), x.max()])
        axes.plot(
            np.exp(ends), np.exp(y.mean() + trend.slope * (ends - x.mean())), color=INK, linewidth=1.2, linestyle="--"
        )
        low, high = trend.slope_interval
        axes.set_title(
            f"Spearman {trend.spearman:+.2f}; slope {trend.slope:.2f} ({low:.2f} to {high:.2f})", fontsize=8, loc="left"
        )
    if len(marks) > 1 and len(rows):
        axes.legend(fontsize=8, frameon=False)


def figure_as(figure: Figure, kind: str) -> bytes:
    """The figure as "svg", "pdf" or "png"; the same figure gives the same bytes."""
    stream = io.BytesIO()
    plain: dict[str, Any] = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}[kind]
    with mpl.rc_context({"svg.hashsalt": "bemescape"}):
        figure.savefig(stream, format=kind, metadata=plain, facecolor="white")
    return stream.getvalue()
