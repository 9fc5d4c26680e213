"""What goes to stdout: JSON for machines, a short table for people."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import typer

from bemescape.units import format_length, format_time

if TYPE_CHECKING:
    from bemescape.results.summary import Summary

__all__ = ["columns", "percent", "print_json", "summary_lines"]

_MOST_SLOW_REGIONS = 5


def print_json(value: Mapping[str, Any]) -> None:
    """Print one JSON object on stdout; NaN and infinity, which JSON does not know, become null."""
    typer.echo(json.dumps(_finite(value), indent=2, ensure_ascii=False, allow_nan=False))


def _finite(value: Any) -> Any:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: _finite(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(entry) for entry in value]
    return value


def summary_lines(summary: Summary) -> list[str]:
    """The answer of one solve as a short table."""
    rule = summary.rule_of_thumb
    lines = [
        f"{summary.name}: mean escape time {format_time(summary.mean_time_s)} ± {percent(summary.relative_error)}",
        f"  start uniform in the volume, D {summary.diffusion_um2_s:.4g} µm²/s, V {summary.volume_um3:.4g} µm³",
        "",
        *columns(
            [
                ("window", "area", "share of exits", "permeability"),
                *(
                    (
                        window.name,
                        f"{window.area_um2:.4g} µm²",
                        percent(window.share, digits=3)
                        + ("" if window.share_error is None else f" ± {percent(window.share_error)}"),
                        "absorbing" if window.permeability_um_s is None else f"{window.permeability_um_s:.4g} µm/s",
                    )
                    for window in summary.windows
                ),
            ]
        ),
    ]
    if summary.start:
        lines += ["", *columns(_start_rows(summary))]
    if summary.slow_regions:
        rows = [("slow region", "mean time", "area", "centre", "nearest window")]
        rows += [
            (
                str(number),
                format_time(region.mean_time_s),
                f"{region.area_um2:.3g} µm²",
                "({}) µm".format(", ".join(f"{value:.3g}" for value in region.centre_um)),
                f"{region.nearest_window}, {format_length(region.distance_to_window_um)} along the wall",
            )
            for number, region in enumerate(summary.slow_regions[:_MOST_SLOW_REGIONS], start=1)
        ]
        lines += ["", *columns(rows)]
        if len(summary.slow_regions) > _MOST_SLOW_REGIONS:
            lines.append(f"  and {len(summary.slow_regions) - _MOST_SLOW_REGIONS} smaller ones")
    lines += [
        "",
        *_spread_lines(summary),
        f"  slowest place   {format_time(summary.slowest_time_s)}",
        f"  rule of thumb   {format_time(rule.mean_time_s)} by {rule.formula}",
        f"  computed on     {summary.panels} panels, {summary.iterations} iterations, "
        f"{summary.wall_s:.3g} s, balance {summary.checks.balance:+.1e}",
        *_opinion_lines(summary),
        *(f"  note: {note}" for note in summary.notes),
    ]
    return lines


def _start_rows(summary: Summary) -> list[tuple[str, ...]]:
    rows: list[tuple[str, ...]] = [("start", "mean time", "standard deviation", "ways out")]
    for name, time in summary.start.items():
        details = summary.start_details.get(name)
        sd = None if details is None else details.escape_time_sd_s
        ways = {} if details is None else details.splitting or {}
        rows.append(
            (
                name,
                format_time(time),
                "" if sd is None else format_time(sd),
                ", ".join(f"{window} {percent(part, digits=3)}" for window, part in ways.items()),
            )
        )
    return rows


def _spread_lines(summary: Summary) -> list[str]:
    if summary.spread is None or summary.escape_time_sd_s is None:
        return []
    return [
        f"  spread          standard deviation {format_time(summary.escape_time_sd_s)} "
        f"± {percent(summary.spread.sd_relative_error)}, {summary.spread.cv:.3f} of the mean",
        f"                  {summary.spread.statement}",
    ]


def _opinion_lines(summary: Summary) -> list[str]:
    opinions = (summary.checks.crosscheck, summary.checks.walkers)
    return [f"  second opinion  {opinion.statement}" for opinion in opinions if opinion is not None]


def percent(part: float, digits: int = 2) -> str:
    """A fraction as a percentage.

    >>> percent(0.00312), percent(0.71234, digits=3)
    ('0.31 %', '71.2 %')
    """
    return f"{100.0 * part:.{digits}g} %"


def columns(rows: Iterable[Sequence[str]]) -> list[str]:
    """Rows of cells as lines of a table, columns aligned."""
    table = list(rows)
    widths = [max(len(row[column]) for row in table) for column in range(len(table[0]))]
    return [
        "  " + "   ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in table
    ]
