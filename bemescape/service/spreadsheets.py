"""CSV that a spreadsheet opens without running any of it."""

from __future__ import annotations

import csv
import io
from typing import Any

__all__ = ["csv_text", "harmless"]

#: What a spreadsheet takes for the beginning of a formula.
_FORMULA = ("=", "+", "-", "@", "\t", "\r")


def harmless(cell: Any) -> Any:
    """The cell; text that a spreadsheet would run as a formula gets a leading apostrophe.

    >>> harmless("=1+1"), harmless(-2.5), harmless("spine")
    ("'=1+1", -2.5, 'spine')
    """
    return "'" + cell if isinstance(cell, str) and cell[:1] in _FORMULA else cell


def csv_text(rows: list[list[Any]]) -> str:
    r"""Comma-separated rows of harmless cells.

    >>> csv_text([["=1+1", -2.5]])
    "'=1+1,-2.5\r\n"
    """
    stream = io.StringIO()
    csv.writer(stream).writerows([harmless(cell) for cell in row] for row in rows)
    return stream.getvalue()
