"""`bemescape solve CASE`: from a case file to numbers, pictures and a report."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from bemescape.errors import EscapeError, SettingsError

if TYPE_CHECKING:
    from bemescape.case import Case
    from bemescape.progress import Progress
    from bemescape.results.result import EscapeResult

__all__ = ["solve"]


def solve(
    case: Annotated[Path, typer.Argument(help="Case file (TOML).")],
    *,
    out: Annotated[
        Path | None,
        typer.Option(help="Folder for the results. Default: one named after the case, in the current folder."),
    ] = None,
    target: Annotated[
        str | None,
        typer.Option(help='Relative error wanted, like "0.5 %" or 0.005; replaces that of the case.'),
    ] = None,
    max_panels: Annotated[
        str | None,
        typer.Option(metavar="<int>", help="Panels at which refinement ends; replaces that of the case."),
    ] = None,
    crosscheck: Annotated[
        bool, typer.Option("--crosscheck", help="Second opinion by a Galerkin method (bempp-cl); takes minutes.")
    ] = False,
    walkers: Annotated[
        str | None,
        typer.Option(
            metavar="<int>", help="Second opinion by this many particles; 100000 give 0.3 % and take minutes."
        ),
    ] = None,
    seed: Annotated[str, typer.Option(metavar="<int>", help="Where the random numbers of the walkers begin.")] = "0",
    server: Annotated[
        str | None, typer.Option(metavar="URL", help="Have this service solve it; its token in BEMESCAPE_TOKEN.")
    ] = None,
    pictures: Annotated[bool, typer.Option("--pictures/--no-pictures", help="Render pictures and report.html.")] = True,
    json: Annotated[bool, typer.Option("--json", help="Print the content of summary.json, alone, on stdout.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress on stderr.")] = False,
) -> int:
    """Compute the mean escape time, the share of each window and the slow regions of one case.

    A second opinion that does not agree is said in the answer and in summary.json (checks); it changes no exit code.

    Exit code 0: done; 1: solved and saved, but the target for the error was not met within the panel
    budget, or the solve failed its own checks and nothing is saved; 2: wrong input; 130: stopped by Ctrl-C.
    """
    from bemescape.case import read_case
    from bemescape.cli.folder import refuse_foreign_folder
    from bemescape.cli.progress import Stopped, reporting
    from bemescape.progress import ProgressEvent
    from bemescape.results.store import add_pictures, is_result_folder, save_result
    from bemescape.units import fraction

    problem = read_case(case).with_accuracy(
        target=None if target is None else fraction(_number_or_text(target), "--target"),
        max_panels=None if max_panels is None else _whole_number(max_panels, "--max-panels"),
    )
    count = None if walkers is None else _walkers(walkers)
    first = _whole_number(seed, "--seed", example=1)
    folder = Path(problem.name) if out is None else out
    refuse_foreign_folder(folder, is_result_folder)
    saved = False
    try:
        with reporting(quiet=quiet) as progress:
            result = problem.solve(progress) if server is None else _solved_by(server, problem, progress)
            progress(ProgressEvent("saving", None, str(folder)))
            save_result(result, folder, pictures=False)
            saved = True
            if crosscheck or count is not None:
                result = _with_opinions(result, progress, crosscheck=crosscheck, walkers=count, seed=first)
                save_result(result, folder, pictures=False)
            if pictures:
                progress(ProgressEvent("drawing", None, "pictures and report"))
                add_pictures(result, folder)
    except KeyboardInterrupt as stop:
        if saved:
            missing = "second opinions and pictures may be" if crosscheck or count is not None else "the pictures are"
            raise Stopped(f"the numbers are in {folder}, {missing} missing") from stop
        raise
    _print_answer(result, folder, json=json)
    return 0 if result.target_met else 1


def _solved_by(url: str, problem: Case, progress: Progress) -> EscapeResult:
    from bemescape.remote import connect

    with connect(url) as service:
        return service.solve_case(problem, progress=progress)


def _number_or_text(text: str) -> str | float:
    try:
        return float(text)
    except ValueError:
        return text


def _whole_number(text: str, option: str, *, example: int = 60_000) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 10):
        raise SettingsError(f"{option} is {text[:40]!r}; give a whole number, like {example}")
    return int(text)


def _walkers(text: str) -> int:
    """Refused before the solve, which may take minutes."""
    from bemescape.results.second_opinion import FEWEST_WALKERS, MOST_WALKERS

    count = _whole_number(text, "--walkers", example=100_000)
    if not FEWEST_WALKERS <= count <= MOST_WALKERS:
        raise SettingsError(f"--walkers is {count}; it must lie between {FEWEST_WALKERS} and {MOST_WALKERS}")
    return count


def _with_opinions(
    result: EscapeResult, progress: Progress, *, crosscheck: bool, walkers: int | None, seed: int
) -> EscapeResult:
    """The result with the second opinions that were asked for; a note says why one could not be had."""
    if crosscheck:
        try:
            result = replace(result, crosschecked=result.crosscheck(progress=progress))
        except EscapeError as error:
            result = replace(result, notes=(*result.notes, f"no cross-check: {error}"))
    if walkers is not None:
        try:
            result = replace(result, walked=result.walkers(walkers, seed=seed, progress=progress))
        except EscapeError as error:
            result = replace(result, notes=(*result.notes, f"no walkers: {error}"))
    return result


def _print_answer(result: EscapeResult, folder: Path, *, json: bool) -> None:
    from bemescape.cli.answer import percent, summary_lines
    from bemescape.results.summary import CAUTION

    if json:
        typer.echo(result.summary.model_dump_json(indent=2))
    else:
        files = ", ".join(sorted(entry.name for entry in folder.iterdir() if not entry.name.startswith(".")))
        lines = [*summary_lines(result.summary), f"  files           {folder}: {files}", "", CAUTION]
        typer.echo("\n".join(lines))
    if not result.target_met:
        typer.echo(
            f"bemescape: the target {percent(result.target)} was not met: the estimated error is "
            f"{percent(result.relative_error)} at {len(result.faces)} panels; the results are saved; raise "
            "--max-panels or accept the error with a larger --target",
            err=True,
        )
