"""Which shapes a study has: from patterns of files, or from a CSV list with groups and covariates."""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from bemescape.errors import SettingsError
from bemescape.study.document import ShapesSection, Study
from bemescape.units import unit_scale_um

__all__ = ["StudyShape", "find_shapes"]

#: Endings that `bemescape.surface.read_surface` knows; a pattern like "*" passes over other files.
MESH_ENDINGS = (".ply", ".stl", ".obj", ".off", ".glb", ".gltf", ".vtp", ".vtk")
#: Columns of a list with a meaning of their own; every other one is a covariate or overrides a window.
KNOWN_COLUMNS = ("file", "name", "unit", "group", "subject")
#: A column `window.NAME.KEY` replaces KEY of that window's rule for the shape of the row.
OVERRIDE = "window."
LARGEST_LIST_BYTES = 20_000_000
MOST_SHAPES = 100_000
LONGEST_NAME = 100
#: Of a path in a message.
LONGEST_PATH = 300
_DECIMAL_COMMA = re.compile(r"\s*[+-]?\d+,\d+(?:[eE][+-]?\d+)?\s*")


@dataclass(frozen=True)
class StudyShape:
    """One shape of a study.

    Attributes
    ----------
    name : str
        Distinct within the study.
    path : Path
        The mesh file.
    file : str
        The same as written.
    unit : str or tuple of str
    heal : str
    group, subject : str
        Empty where the study names none.
    covariates : mapping of str to number or text
        Other columns of the list.
    overrides : mapping of str to str
        "NAME.KEY" -> cell of a column `window.NAME.KEY`.
    place : str
        Where the study names it: "shapes.csv row 3".
    """

    name: str
    path: Path
    file: str
    unit: str | tuple[str, ...]
    heal: str
    group: str = ""
    subject: str = ""
    covariates: Mapping[str, float | str] = field(default_factory=dict)
    overrides: Mapping[str, str] = field(default_factory=dict)
    place: str = ""


def find_shapes(study: Study) -> tuple[StudyShape, ...]:
    """Every shape of the study, in the order of the file.

    Raises
    ------
    SettingsError
        A file is missing, a name is used twice, a unit is unknown, or a row of a list is wrong; the message names
        the row.
    """
    shapes: list[StudyShape] = []
    for number, section in enumerate(study.document.shapes, start=1):
        place = f"[[shapes]] number {number}"
        found = _from_list(study, section, place) if section.listed else _from_patterns(study, section, place)
        shapes += found
        if len(shapes) > MOST_SHAPES:
            raise SettingsError(f"study {study.name!r} has more than {MOST_SHAPES} shapes; split it")
    _refuse_equal_names(shapes)
    return tuple(shapes)


def _refuse_equal_names(shapes: Sequence[StudyShape]) -> None:
    seen: dict[str, StudyShape] = {}
    for shape in shapes:
        # Names become folders: letters that differ only in case would meet on some disks.
        other = seen.setdefault(shape.name.casefold(), shape)
        if other is not shape:
            raise SettingsError(
                f"{shape.place}: the name {shape.name!r} ({shape.file}) is also that of {other.file} ({other.place}); "
                "give each shape its own in a column 'name' of a list"
            )


def _from_patterns(study: Study, section: ShapesSection, place: str) -> list[StudyShape]:
    if section.unit is None:
        raise SettingsError(f'{place}: unit is missing; mesh files carry none, so write unit = "nm"')
    shapes: list[StudyShape] = []
    for pattern in section.files or ():
        paths = _matching(study.folder, pattern, place)
        for path in paths:
            if any(path == shape.path for shape in shapes):
                continue
            shapes.append(
                StudyShape(
                    name=path.stem,
                    path=path,
                    file=_as_written(path, study.folder),
                    unit=section.unit,
                    heal=section.heal,
                    group=section.group or "",
                    subject=section.subject or "",
                    place=f"{place}, files {pattern!r}",
                )
            )
    return shapes


def _matching(folder: Path, pattern: str, place: str) -> list[Path]:
    try:
        if Path(pattern).is_absolute():
            root = Path(Path(pattern).anchor)
            found = root.glob(str(Path(pattern).relative_to(root)))
        else:
            found = folder.glob(pattern)
        paths = sorted(path for path in found if path.is_file() and path.suffix.lower() in MESH_ENDINGS)
    except (ValueError, NotImplementedError, OSError) as error:
        raise SettingsError(
            f'{place}: files is {pattern!r}, which is no pattern of files; write "control/*.ply"'
        ) from (error)
    if not paths:
        raise SettingsError(
            f"{place}: files is {pattern!r}, but no mesh file in {folder} fits it; the pattern is relative to the "
            f"study file, and mesh files end in {', '.join(MESH_ENDINGS)}"
        )
    return paths


def _as_written(path: Path, folder: Path) -> str:
    return (path.relative_to(folder) if path.is_relative_to(folder) else path).as_posix()


# --- lists ------------------------------------------------------------------------------------------


def _from_list(study: Study, section: ShapesSection, place: str) -> list[StudyShape]:
    path = study.folder / str(section.listed)
    label = path.name
    shapes = []
    for row, cells in _rows(path, place):
        where = f"{label} row {row}"
        mesh = _mesh_of_row(path.parent, cells["file"], where)
        shapes.append(
            StudyShape(
                name=_checked_name("name", cells.get("name") or mesh.stem, where),
                path=mesh,
                file=_as_written(mesh, study.folder),
                unit=_unit_of_row(cells.get("unit"), section, where),
                heal=section.heal,
                group=_checked_name("group", cells.get("group") or section.group or "", where),
                subject=_checked_name("subject", cells.get("subject") or section.subject or "", where),
                covariates={
                    column: _covariate(text, f"{where}, column {column!r}")
                    for column, text in cells.items()
                    if column not in KNOWN_COLUMNS and not column.startswith(OVERRIDE)
                },
                overrides={
                    column.removeprefix(OVERRIDE): text
                    for column, text in cells.items()
                    if column.startswith(OVERRIDE) and text
                },
                place=where,
            )
        )
    if not shapes:
        raise SettingsError(f"{place}: the list {path} names no shape; add a row per mesh file")
    return shapes


def _rows(path: Path, place: str) -> Iterator[tuple[int, dict[str, str]]]:
    """Number of the line in the file and cells of every row; commas, semicolons or tabs between cells."""
    text = _text_of(path, place)
    head = text.splitlines()[0] if text.strip() else ""
    mark = max(",;\t", key=head.count)
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=mark, strict=True)
    try:
        columns = [column.strip() for column in next(reader, [])]
        _check_columns(columns, path)
        while (cells := next(reader, None)) is not None:
            if not any(cell.strip() for cell in cells):
                continue
            row = reader.line_num
            if len(cells) != len(columns):
                split = len(cells) > len(columns) and mark == ","
                remedy = (
                    "decimal commas split a number in two: write 1.5, or put semicolons between cells"
                    if split
                    else "fill the row, or leave cells empty between separators"
                )
                raise SettingsError(
                    f"{path.name} row {row} has {len(cells)} cells, but the header has {len(columns)}; {remedy}"
                )
            yield row, {column: cell.strip() for column, cell in zip(columns, cells, strict=True)}
    except csv.Error as error:
        raise SettingsError(f"{path.name} row {reader.line_num} is not CSV ({error}); check its quotes") from error


def _text_of(path: Path, place: str) -> str:
    try:
        if not path.is_file():
            raise SettingsError(
                f"{place}: list is {path.name!r}, but there is no file {path}; the path is relative to the study file"
            )
        with path.open("rb") as stream:
            content = stream.read(LARGEST_LIST_BYTES + 1)
    except (OSError, ValueError) as error:
        if isinstance(error, SettingsError):
            raise
        raise SettingsError(f"{place}: the list {path} cannot be read: {getattr(error, 'strerror', error)}") from error
    if len(content) > LARGEST_LIST_BYTES:
        raise SettingsError(
            f"{path} is larger than {LARGEST_LIST_BYTES // 1_000_000} MB; it should name one mesh a row"
        )
    try:
        # Spreadsheets put a mark of three bytes before UTF-8 text; it is no part of the first column's name.
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = content[: error.start].count(b"\n") + 1
        raise SettingsError(f"{path.name} row {row} is not UTF-8 text; save the list as CSV UTF-8") from error


def _check_columns(columns: Sequence[str], path: Path) -> None:
    if "file" not in columns:
        shown = ", ".join(map(repr, columns[:8])) or "nothing"
        raise SettingsError(f"{path.name} row 1 names the columns {shown}; one of them must be 'file'")
    for number, column in enumerate(columns, start=1):
        if not column or not column.isprintable():
            raise SettingsError(f"{path.name} row 1: column {number} has no name; name it or remove it")
        if column in columns[: number - 1]:
            raise SettingsError(f"{path.name} row 1 names the column {column!r} twice; rename one of them")


def _mesh_of_row(folder: Path, file: str, where: str) -> Path:
    if not file:
        raise SettingsError(f"{where}: the column 'file' is empty; name the mesh file")
    mesh = folder / file
    try:
        found = mesh.is_file()
    except (OSError, ValueError):  # longer than a name can be, for instance
        found = False
    if not found:
        raise SettingsError(f"{where}: there is no file {str(mesh)[:LONGEST_PATH]}; the path is relative to the list")
    if mesh.suffix.lower() not in MESH_ENDINGS:
        raise SettingsError(f"{where}: {file!r} is no mesh file; such files end in {', '.join(MESH_ENDINGS)}")
    return mesh


def _checked_name(column: str, name: str, where: str) -> str:
    if len(name) > LONGEST_NAME or not name.isprintable():
        raise SettingsError(
            f"{where}: the {column} {name[:40]!r} is too long or not printable (limit {LONGEST_NAME} characters)"
        )
    return name


def _unit_of_row(cell: str | None, section: ShapesSection, where: str) -> str | tuple[str, ...]:
    if not cell:
        if section.unit is None:
            raise SettingsError(f'{where}: no unit, neither in the row nor in [[shapes]]; write nm or "4 nm"')
        return section.unit
    parts = tuple(part.strip() for part in re.split(r"[,;]", cell))
    if len(parts) not in (1, 3):
        raise SettingsError(f"{where}: the unit is {cell!r}; write nm, 4 nm, or three of them for x, y, z")
    try:
        for part in parts:
            unit_scale_um(part)
    except SettingsError as error:
        raise SettingsError(f"{where}: {error}") from error
    return parts if len(parts) == 3 else parts[0]


def _covariate(text: str, where: str) -> float | str:
    """A number where the cell is one; text elsewhere; an empty cell is a missing number."""
    if not text:
        return math.nan
    if _DECIMAL_COMMA.fullmatch(text):
        raise SettingsError(f"{where}: {text!r} has a decimal comma; write {text.replace(',', '.')}")
    try:
        return float(text)
    except ValueError:
        return text


def overridden(windows: Sequence[Mapping[str, Any]], shape: StudyShape) -> list[dict[str, Any]]:
    """The rules for windows with the cells of the shape's row put in.

    Raises
    ------
    SettingsError
        A column names a window that the rules do not have.
    """
    changed: list[dict[str, Any]] = [
        {key: dict(part) if isinstance(part, Mapping) else part for key, part in window.items()} for window in windows
    ]
    for target, text in shape.overrides.items():
        name, _, key = target.rpartition(".")
        window = next((entry for entry in changed if entry.get("name") == name), None)
        if window is None:
            names = ", ".join(repr(entry.get("name")) for entry in changed) or "none"
            raise SettingsError(
                f"{shape.place}: the column {OVERRIDE + target!r} names the window {name!r}, but the windows are "
                f"{names}; such a column is window.NAME.KEY"
            )
        if key == "permeability":
            window[key] = text
            continue
        kind = next(part for part in window.values() if isinstance(part, dict))
        kind[key] = _override_value(text)
    return changed


def _override_value(text: str) -> Any:
    """Three numbers are a position, one is a number, anything else is text with a unit."""
    parts = re.split(r"[\s;]+", text.strip())
    try:
        numbers = [float(part) for part in parts]
    except ValueError:
        return text
    if len(numbers) == 1:
        return int(numbers[0]) if numbers[0].is_integer() else numbers[0]
    return numbers
