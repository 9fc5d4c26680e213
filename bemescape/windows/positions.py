"""Positions from a CSV file: columns x, y and z, with a unit from the file or from the caller.

Nothing is guessed: a decimal comma could as well separate thousands or columns, so it is refused with its line.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError
from bemescape.surface.read import file_unit_um
from bemescape.units import Quantity, unit_scale_um

__all__ = ["read_positions"]

Floats = NDArray[np.float64]

LARGEST_BYTES = 100_000_000
MOST_ROWS = 1_000_000
#: "x", "x [nm]", "x (nm)" or "x_nm".
_HEADING = re.compile(r"(?P<axis>[xyz])(?:\s*[\[(](?P<bracket>[^\])]+)[\])]|_(?P<suffix>\w+))?", re.IGNORECASE)
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)


def read_positions(
    path: str | Path,
    *,
    unit: Quantity | Sequence[Quantity] | None = None,
    otherwise_um: Floats | None = None,
) -> tuple[Floats, tuple[int, ...]]:
    """Positions (k, 3) in µm from a CSV file, and the line of the file that each comes from.

    Parameters
    ----------
    path : str or Path
        Comma, semicolon or tab separated, with a header that names x, y and z among others; units stand behind the
        names ("x [nm]") or in a row of their own under the header.
    unit : unit, optional
        Of the numbers; must not contradict the file.
    otherwise_um : (3,), optional
        µm per unit where neither the file nor `unit` says it.

    Raises
    ------
    SettingsError
        The file cannot be read, has no such columns or no unit, or an entry is not a finite number; with the line.
    """
    path = Path(path)
    rows = _rows(path)
    header_line, header = rows[0]
    column, named = _columns(header, path.name, header_line)
    body = rows[1:]
    if body and not named and _is_unit_row([_entry(body[0][1], k) for k in column]):
        named = [_entry(body[0][1], k) for k in column]
        body = body[1:]
    scale = _scale(named, unit, otherwise_um, path.name)
    if not body:
        raise SettingsError(f"{path.name} has a header but no positions; add a row of x, y and z for each")
    if len(body) > MOST_ROWS:
        raise SettingsError(f"{path.name} has {len(body)} rows (limit {MOST_ROWS}); it is no list of pores")
    places = np.empty((len(body), 3))
    for row, (line, entries) in enumerate(body):
        _check_length(entries, header, path.name, line)
        for axis in range(3):
            places[row, axis] = _number(_entry(entries, column[axis]), "xyz"[axis], path.name, line)
    places *= scale
    return places, tuple(line for line, _ in body)


def _rows(path: Path) -> list[tuple[int, list[str]]]:
    """Line number and entries of each row that is neither blank nor a comment; at least one."""
    try:
        if not path.is_file():
            raise SettingsError(f"there is no file {path} with positions; check the name and the folder")
        if path.stat().st_size > LARGEST_BYTES:
            raise SettingsError(f"{path.name} is larger than {LARGEST_BYTES / 1e6:.0f} MB; it is no list of pores")
        data = path.read_bytes()
    except (OSError, ValueError) as error:
        if isinstance(error, SettingsError):
            raise
        raise SettingsError(f"{str(path)[:200]!r} cannot be read: {error}") from error
    if data.startswith((b"\xff\xfe", b"\xfe\xff")) or b"\0" in data:
        raise SettingsError(f"{path.name} is not plain text (UTF-16 or binary); save it again as CSV in UTF-8")
    text = data.decode("utf-8-sig", errors="replace")
    lines = text.splitlines()
    kept = [(number, line) for number, line in enumerate(lines, 1) if line.strip() and not line.startswith("#")]
    if not kept:
        raise SettingsError(f"{path.name} is empty; it needs a header x, y, z and a row for each position")
    separator = max(",;\t", key=kept[0][1].count)
    try:
        parsed = csv.reader((line for _, line in kept), delimiter=separator, skipinitialspace=True, strict=True)
        rows = [(kept[parsed.line_num - 1][0], [entry.strip() for entry in row]) for row in parsed]
    except csv.Error as error:
        raise SettingsError(f"{path.name} is not a CSV file: {error}; save it again without quotes") from error
    return rows


def _columns(header: list[str], name: str, line: int) -> tuple[list[int], list[str]]:
    """Column of x, y and z, and their units where all three headings have one (else none)."""
    found: dict[str, tuple[int, str]] = {}
    for number, heading in enumerate(header):
        if match := _HEADING.fullmatch(heading):
            axis = match["axis"].lower()
            if axis in found:
                raise SettingsError(f"{name} line {line} names the column {axis} twice; keep one of them")
            found[axis] = number, match["bracket"] or match["suffix"] or ""
    missing = [axis for axis in "xyz" if axis not in found]
    if missing:
        shown = ", ".join(header)[:80]
        raise SettingsError(
            f"{name} line {line} has no column {' or '.join(missing)} but {shown!r}; the first row names the columns "
            "x, y and z"
        )
    units = [found[axis][1] for axis in "xyz"]
    if any(units) and not all(units):
        raise SettingsError(f"{name} line {line} gives some of x, y and z a unit but not all; give each its unit")
    return [found[axis][0] for axis in "xyz"], units if all(units) else []


def _entry(entries: list[str], column: int) -> str:
    return entries[column] if column < len(entries) else ""


def _is_unit_row(entries: list[str]) -> bool:
    return all(entry and entry[0].isalpha() and entry.lower() not in {"nan", "inf", "na", "none"} for entry in entries)


def _scale(named: list[str], unit: Quantity | Sequence[Quantity] | None, otherwise: Floats | None, name: str) -> Floats:
    asked = None if unit is None else file_unit_um(unit)
    if named:
        try:
            inside = np.array([unit_scale_um(part) for part in named])
        except SettingsError as error:
            raise SettingsError(f"{name}: {error}") from error
        if asked is not None and not np.allclose(asked, inside, rtol=1e-12):
            raise SettingsError(
                f"{name} says that its numbers are in {', '.join(dict.fromkeys(named))}, but the unit given is "
                f"{unit!r}; leave out one of them"
            )
        return inside
    if asked is not None:
        return asked
    if otherwise is not None:
        return np.asarray(otherwise)
    raise SettingsError(
        f"{name} does not say in which unit its positions are; give unit='nm', or a row of units under the header"
    )


def _check_length(entries: list[str], header: list[str], name: str, line: int) -> None:
    extra = [entry for entry in entries[len(header) :] if entry]
    if extra:
        raise SettingsError(
            f"{name} line {line} has {len(entries)} entries, but the header {len(header)}; if numbers have decimal "
            "commas, save it with decimal points"
        )


def _number(text: str, axis: str, name: str, line: int) -> float:
    if _NUMBER.fullmatch(text) and math.isfinite(value := float(text)):
        return value
    if not text:
        raise SettingsError(f"{name} line {line} has no {axis}; every row needs x, y and z")
    if "," in text:
        raise SettingsError(f"{name} line {line}: {axis} is {text[:30]!r}; save it with decimal points, not commas")
    raise SettingsError(f"{name} line {line}: {axis} is {text[:30]!r}, which is not a finite number; correct the row")
