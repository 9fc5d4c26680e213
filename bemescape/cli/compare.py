"""`bemescape compare A B …`: a handful of saved results in one table and one picture."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bemescape.errors import SettingsError

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["compare"]

FEWEST, MOST = 2, 12


def compare(
    results: Annotated[list[Path], typer.Argument(help="Folders that a solve or a study wrote.")],
    *,
    png: Annotated[
        Path | None, typer.Option(help="Draw all side by side, with one colour scale, into this file.")
    ] = None,
    csv: Annotated[Path | None, typer.Option(help="Write the table into this file.")] = None,
    json: Annotated[bool, typer.Option("--json", help="Print the table as JSON, alone, on stdout.")] = False,
) -> int:
    """Put 2 to 12 saved results side by side: times, shapes, shares; nothing is solved."""
    from bemescape.results.store import load_result
    from bemescape.study.measures import measured
    from bemescape.study.table import share_columns

    if not FEWEST <= len(results) <= MOST:
        raise SettingsError(f"{len(results)} results are given; compare takes {FEWEST} to {MOST}, a study takes more")
    for path, ending in ((png, ".png"), (csv, ".csv")):
        if path is not None and (path.suffix.lower() != ending or not path.parent.is_dir() or path.is_dir()):
            raise SettingsError(f"--{ending[1:]} is {path}; give a file that ends in {ending} in an existing folder")
    loaded = [load_result(folder) for folder in results]
    names = _names(results, loaded)
    found = [measured(result) for result in loaded]
    shares = share_columns(name for row in found for name in row["shares"])
    rows = [
        {"result": name, "diffusion_um2_s": result.diffusion_um2_s, **_flat(row, shares)}
        for name, result, row in zip(names, loaded, found, strict=True)
    ]
    if csv is not None:
        import pandas as pd

        from bemescape.study.store import write_atomically
        from bemescape.study.table import table_as_csv

        write_atomically(csv, table_as_csv(pd.DataFrame(rows)))
    if png is not None:
        from bemescape.viz.side_by_side import save_side_by_side

        save_side_by_side(loaded, names, png)
    if json:
        from bemescape.cli.answer import print_json

        print_json({"results": rows})
    else:
        _print_table(rows)
        typer.echo("".join(f"\n{path}" for path in (csv, png) if path is not None).lstrip("\n"))
    return 0


def _names(folders: list[Path], results: list[EscapeResult]) -> list[str]:
    """The names of the cases; where two are equal, the folders'."""
    names = [result.name for result in results]
    return names if len(set(names)) == len(names) else [str(folder) for folder in folders]


def _flat(row: Mapping[str, Any], shares: Mapping[str, str]) -> dict[str, object]:
    """The row with a column for each window, by its name in the table of a study."""
    values = {key: value for key, value in row.items() if key != "shares"}
    return values | {shares[name]: share for name, share in row["shares"].items()}


def _print_table(rows: list[dict[str, object]]) -> None:
    from bemescape.cli.answer import columns

    hidden = {"result", "notes", "mesh_sha256", "solve_wall_s"}
    keys = [key for key in dict.fromkeys(key for row in rows for key in row) if key not in hidden]
    lines = [["", *(str(row["result"]) for row in rows)]]
    lines += [[key, *(_cell(row.get(key)) for row in rows)] for key in keys]
    typer.echo("\n".join(columns(lines)))


def _cell(value: object) -> str:
    if value is None:
        return "–"
    return f"{value:.5g}" if isinstance(value, float) else str(value)
