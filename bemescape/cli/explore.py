"""`bemescape explore CASE`: where windows should be, and what their places cost."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from bemescape.errors import SettingsError

if TYPE_CHECKING:
    from bemescape.arrangements import Exploration

__all__ = ["explore"]


def explore(
    case: Annotated[Path, typer.Argument(help="Case file (TOML) with an [explore] section.")],
    *,
    out: Annotated[
        Path | None,
        typer.Option(help="Folder for the answer. Default: one named after the case, with -explore."),
    ] = None,
    arrangements: Annotated[
        str | None,
        typer.Option(metavar="<int>", help="About how many arrangements to try; replaces that of the case."),
    ] = None,
    pictures: Annotated[
        bool, typer.Option("--pictures/--no-pictures", help="Draw pictures and exploration.html.")
    ] = True,
    json: Annotated[
        bool, typer.Option("--json", help="Print the content of exploration.json, alone, on stdout.")
    ] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress on stderr.")] = False,
) -> int:
    """Compare arrangements of equal windows on candidate sites of one surface.

    Tabulates the mean escape time of one window over its size, what clustering loses, and the placements with the
    smallest and the largest mean time, which are solved in full.

    Exit code 0: done; 1: done and saved, but the best or the worst arrangement has no full solve within the target;
    2: wrong input; 130: stopped by Ctrl-C.
    """
    from bemescape.arrangements.exploration import is_exploration_folder
    from bemescape.case import read_case
    from bemescape.cli.folder import refuse_foreign_folder
    from bemescape.cli.progress import reporting
    from bemescape.progress import ProgressEvent

    problem = read_case(case)
    if arrangements is not None:
        if not (arrangements.isascii() and arrangements.isdigit() and len(arrangements) < 10):
            raise SettingsError(f"--arrangements is {arrangements[:40]!r}; give a whole number, like 10000")
        problem = problem.with_arrangements(int(arrangements))
    folder = Path(f"{problem.name}-explore") if out is None else out
    refuse_foreign_folder(folder, is_exploration_folder)
    with reporting(quiet=quiet) as progress:
        found = problem.explore(progress)
        progress(ProgressEvent("saving", None, str(folder)))
        found.save(folder, pictures=pictures)
    _print_answer(found, folder, json=json)
    return 0 if len(found.solved) == 2 and all(result.target_met for result in found.solved.values()) else 1


def _print_answer(found: Exploration, folder: Path, *, json: bool) -> None:
    from bemescape.results.summary import CAUTION

    if json:
        typer.echo(found.summary.model_dump_json(indent=2))
    else:
        files = ", ".join(sorted(entry.name for entry in folder.iterdir() if not entry.name.startswith(".")))
        typer.echo("\n".join([*_lines(found), f"  files           {folder}: {files}", "", CAUTION]))
    for end in ("best", "worst"):
        result = found.solved.get(end)
        if result is None or not result.target_met:
            reason = "failed" if result is None else f"ended at an error of {result.relative_error:.2%}"
            typer.echo(f"bemescape: the full solve of the {end} arrangement {reason}; the answer is saved", err=True)


def _lines(found: Exploration) -> list[str]:
    from bemescape.cli.answer import columns, percent
    from bemescape.units import format_length, format_time

    summary = found.summary
    lines = [
        f"{summary.name}: {summary.open_windows} of {len(summary.sites)} sites open, radius "
        f"{format_length(summary.radius_um)}, D {summary.diffusion_um2_s:.4g} µm²/s",
        "",
    ]
    rows: list[tuple[str, ...]] = [("arrangement", "mean escape time", "reduced model", "difference", "sites")]
    for name, row in (("smallest mean time", summary.best), ("largest mean time", summary.worst)):
        solved = "" if row.solved_time_s is None else format_time(row.solved_time_s)
        if row.solved_relative_error is not None:
            solved += f" ± {percent(row.solved_relative_error)}"
        difference = "" if row.difference is None else f"{100.0 * row.difference:+.2f} %"
        rows.append((name, solved, format_time(row.mean_time_s), difference, ", ".join(row.sites[:12])))
    lines += columns(rows)
    if summary.clustering:
        rows = [("windows", "far apart", "clustered", "lost to clustering")]
        rows += [
            (
                str(row.open_windows),
                format_time(row.spread_time_s),
                format_time(row.clustered_time_s),
                f"{100.0 * row.lost_to_clustering:.3g} %",
            )
            for row in summary.clustering
        ]
        lines += ["", *columns(rows)]
    if summary.sweep:
        rows = [(f"one window at {summary.sweep_site}", "mean escape time", "error")]
        rows += [
            (format_length(row.radius_um), format_time(row.mean_time_s), percent(row.relative_error))
            for row in summary.sweep
        ]
        lines += ["", *columns(rows)]
    times = [row.mean_time_s for row in summary.sites]
    lines += [
        "",
        f"  one window      {format_time(min(times))} to {format_time(max(times))} by site",
        f"  arrangements    {summary.arrangements_tried}{', all there are' if summary.complete else ''}; "
        f"median {format_time(summary.typical_time_s)}; found in {summary.seconds.get('arrangements', 0.0):.3g} s",
        *(f"  note: {note}" for note in summary.notes),
    ]
    return lines
