"""`bemescape check FILE`: whether a mesh can be solved, and what healing would change."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bemescape.errors import SettingsError, SurfaceError

if TYPE_CHECKING:
    from bemescape.surface.surface import Surface

__all__ = ["check"]


def check(
    file: Annotated[Path, typer.Argument(help="Mesh: PLY, STL, OBJ, OFF, GLB, glTF, VTP or legacy VTK.")],
    *,
    unit: Annotated[
        str | None,
        typer.Option(help='Length of one file unit, needed: "nm", "4 nm" for voxels, "4 nm, 4 nm, 40 nm" by axis.'),
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print the report as JSON, alone, on stdout.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress on stderr.")] = False,
) -> int:
    """Report the state of a surface, what healing "auto" would change, and whether it can be solved.

    Writes no files. Exit code 0: it can be solved, as it is or healed; 1: it cannot; 2: it cannot be read.
    """
    if unit is None:
        raise SettingsError(
            "--unit is missing: mesh files carry no unit, so give the length of one file unit, "
            'like --unit nm or --unit "4 nm, 4 nm, 40 nm"'
        )
    from bemescape.cli.answer import print_json
    from bemescape.cli.progress import reporting
    from bemescape.surface.heal import heal_surface
    from bemescape.surface.read import read_unhealed

    parts = [part.strip() for part in unit.split(",")]
    healed: Surface | None = None
    reason = None
    with reporting(quiet=quiet) as progress:
        raw = read_unhealed(file, unit=parts if len(parts) > 1 else parts[0], progress=progress)
        try:
            healed = heal_surface(raw, "auto", progress=progress)
        except SurfaceError as error:
            reason = str(error)
    if json:
        print_json(_report(file, raw, healed, reason))
    else:
        typer.echo("\n".join(_lines(file, raw, healed, reason)))
    return 0 if healed is not None else 1


def _report(file: Path, raw: Surface, healed: Surface | None, reason: str | None) -> dict[str, Any]:
    healing = healed.healing if healed is not None else None
    return {
        "file": str(file),
        "sha256": raw.sha256,
        "unit_um": raw.unit_um.tolist(),
        "solvable": healed is not None,
        "reason": reason,
        "health": raw.health.to_dict() if raw.health is not None else None,
        "healing": healing.to_dict() if healing is not None else None,
    }


def _lines(file: Path, raw: Surface, healed: Surface | None, reason: str | None) -> list[str]:
    lines = [str(file)]
    if raw.health is not None:
        lines += [f"  {line}" for line in raw.health.lines()]
    if healed is None:
        return [*lines, f"cannot be solved: {reason}"]
    if healed.healing is None:
        return [*lines, "can be solved as it is"]
    lines += ['healing "auto" would change', *(f"  {line}" for line in healed.healing.lines())]
    return [*lines, "can be solved after healing"]
