"""Pieces of HTML that reports share; text is escaped here."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from html import escape

from bemescape.results.summary import CAUTION
from bemescape.units import time_scale

__all__ = [
    "LOCAL_RULES",
    "html_caution",
    "html_figure",
    "html_list",
    "html_table",
    "percent",
    "with_error",
]

LOCAL_RULES = "Follow local rules and licensed practice."
_MOST_ROWS = 60


def html_table(head: Sequence[str], rows: Sequence[Sequence[str]], *, text_columns: Iterable[int] = ()) -> str:
    """A table; cells are plain text and are escaped here. The first column names the row."""
    texts = set(text_columns)

    def cells(tag: str, row: Sequence[str]) -> str:
        kinds = (' class="text"' if number in texts else "" for number in range(len(row)))
        return "".join(f"<{tag}{kind}>{escape(cell)}</{tag}>" for kind, cell in zip(kinds, row, strict=True))

    lines = [f"<tr>{cells('td', row)}</tr>" for row in rows[:_MOST_ROWS]]
    more = (
        f'<p class="soft">and {len(rows) - _MOST_ROWS} more; all are in summary.json.</p>'
        if len(rows) > _MOST_ROWS
        else ""
    )
    return (
        f'<div class="table"><table><thead><tr>{cells("th", head)}</tr></thead>'
        f"<tbody>{''.join(lines)}</tbody></table></div>{more}"
    )


def html_list(lines: Iterable[str]) -> str:
    """Plain lines as a list."""
    return "<ul>" + "".join(f"<li>{escape(line)}</li>" for line in lines) + "</ul>"


def html_figure(source: str, caption: str, *, wide: bool) -> str:
    """A picture, given as a data URI, with its caption; a wide one takes both columns."""
    kind = ' class="wide"' if wide else ""
    return (
        f'<figure{kind}><img src="{source}" alt="{escape(caption, quote=True)}">'
        f"<figcaption>{escape(caption)}</figcaption></figure>"
    )


def percent(part: float, digits: int = 3) -> str:
    """A fraction as a percentage."""
    return f"{100.0 * part:.{digits}g} %"


def with_error(mean_s: float, relative: float) -> str:
    """Mean and its error in one unit, to two digits of the error.

    >>> with_error(0.01234, 0.0031), with_error(250.0, 0.05), with_error(0.002, 0.0)
    ('12.340 ± 0.038 ms', '250 ± 12 s', '2 ± 0 ms')
    """
    factor, unit = time_scale(mean_s)
    mean, error = mean_s / factor, abs(relative * mean_s / factor)
    if not 1e-6 * mean < error < 10.0 * mean:
        return f"{mean:.6g} ± {error:.2g} {unit}"
    digits = max(0, 1 - math.floor(math.log10(error)))
    return f"{mean:.{digits}f} ± {error:.{digits}f} {unit}"


def html_caution() -> str:
    """What every report says before anybody acts on it."""
    return (
        f'<div class="caution" role="note"><p><strong>Caution.</strong> {escape(CAUTION)}</p>'
        f"<p>{escape(LOCAL_RULES)}</p></div>"
    )
