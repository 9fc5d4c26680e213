"""`bemescape study STUDY`: many shapes in one go, resumable, with a table, statistics and a report."""

from __future__ import annotations

import json as json_text
import sys
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bemescape.errors import SettingsError

if TYPE_CHECKING:
    from bemescape.study.plan import StudyPlan
    from bemescape.study.run import StudyResult

__all__ = ["study"]


def study(
    study: Annotated[Path, typer.Argument(help="Study file (TOML).")],
    *,
    out: Annotated[
        Path | None,
        typer.Option(help="Folder of the study. Default: one named after it, in the current folder."),
    ] = None,
    plan: Annotated[bool, typer.Option("--plan", help="List the cases and estimate the time; solve nothing.")] = False,
    workers: Annotated[
        str | None, typer.Option(metavar="<int>", help="Local worker processes. Default: one for each core.")
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option(help="Address of a dask scheduler, like tcp://host:8786; mesh files travel with the cases."),
    ] = None,
    memory: Annotated[
        str | None,
        typer.Option(metavar="<GB>", help="What cases side by side may take together. Default: 80 % of what is free."),
    ] = None,
    report: Annotated[bool, typer.Option("--report/--no-report", help="Draw report.html and the figure.")] = True,
    json: Annotated[bool, typer.Option("--json", help="Print one JSON object per event, alone, on stdout.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress on stderr.")] = False,
) -> int:
    """Solve every shape of a study that is not finished yet, and compare the groups.

    A case that fails is kept in the table with its reason; run the same command again to retry it, or to go on after a
    stop. Exit code 0: every case has a result; 1: some failed; 2: wrong input; 130: stopped by Ctrl-C.
    """
    from bemescape.study.document import read_study
    from bemescape.study.engine import default_workers
    from bemescape.study.plan import plan_study

    count = None if workers is None else _count(workers, "--workers")
    megabytes = None if memory is None else 1e3 * _gigabytes(memory)
    read = read_study(study)
    folder = Path(read.name) if out is None else out
    if plan:
        planned = plan_study(read)
        _print_plan(planned, count or default_workers(len(planned.distinct)), folder, json=json)
        return 0
    from bemescape.cli.progress import Stopped
    from bemescape.study.run import StudyStopped, run_study

    try:
        with _watching(json=json, quiet=quiet) as events:
            result = run_study(
                read, folder, workers=count, scheduler=scheduler, memory_mb=megabytes, report=report, events=events
            )
    except StudyStopped as stop:
        raise Stopped(str(stop)) from stop
    if not json:
        _print_answer(result)
    return 1 if result.failures else 0


def _count(text: str, option: str) -> int:
    if not (text.isascii() and text.isdigit() and 0 < int(text[:6]) <= 1024 and len(text) < 6):
        raise SettingsError(f"{option} is {text[:40]!r}; give a whole number from 1 to 1024")
    return int(text)


def _gigabytes(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if not 0.1 <= value < 1e6:
        raise SettingsError(f"--memory is {text[:40]!r}; give a number of gigabytes from 0.1, like 8")
    return value


# --- the plan ---------------------------------------------------------------------------------------


def _print_plan(plan: StudyPlan, workers: int, folder: Path, *, json: bool) -> None:
    total = plan.estimated_s(workers)
    if json:
        from bemescape.cli.answer import print_json

        print_json(
            {
                "study": plan.study.name,
                "shapes": len(plan.shapes),
                "workers": workers,
                "estimated_s": round(total, 1),
                "cases": [
                    {
                        "case": case.name,
                        "file": case.shape.file,
                        "group": case.shape.group,
                        "subject": case.shape.subject,
                        "faces": case.faces,
                        "windows": [window.get("name") for window in case.table["window"]],
                        **case.swept,
                        "estimated_s": round(case.estimated_s, 1),
                        "estimated_mb": round(case.estimated_mb),
                    }
                    for case in plan.cases
                ],
            }
        )
        return
    rows = [
        (
            case.name,
            case.shape.group or "–",
            str(case.faces),
            f"{case.estimated_s:.0f} s",
            f"{case.estimated_mb:.0f} MB",
        )
        for case in plan.cases
    ]
    from bemescape.cli.answer import columns

    typer.echo("\n".join(columns([("case", "group", "faces", "time", "memory"), *rows])))
    typer.echo(
        f"{len(plan.shapes)} shapes, {len(plan.cases)} cases, about {duration(total)} on {workers} "
        f"worker{'s' * (workers > 1)} (a rough estimate, corrected while it runs); results would go to {folder}"
    )


def duration(seconds: float) -> str:
    """A time to wait, as a person says it.

    >>> duration(42), duration(600), duration(9000)
    ('42 s', '10 min', '2.5 h')
    """
    if seconds < 100:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 6000 else f"{seconds / 3600:.1f} h"


# --- while it runs ----------------------------------------------------------------------------------


@contextmanager
def _watching(*, json: bool, quiet: bool) -> Iterator[Callable[[Mapping[str, Any]], None]]:
    """A receiver of events: JSON lines on stdout, and progress for a person on stderr."""
    with _shown(quiet=quiet or (json and not sys.stderr.isatty())) as show:

        def receive(event: Mapping[str, Any]) -> None:
            if json:
                typer.echo(json_text.dumps(event, ensure_ascii=False))
                sys.stdout.flush()
            show(event)

        yield receive


@contextmanager
def _shown(*, quiet: bool) -> Iterator[Callable[[Mapping[str, Any]], None]]:
    from bemescape.cli.progress import reporting
    from bemescape.progress import ProgressEvent

    with reporting(quiet=quiet) as progress:

        def show(event: Mapping[str, Any]) -> None:
            kind = event["event"]
            if kind == "progress":
                failed = f", {event['failed']} failed" if event["failed"] else ""
                running = ", ".join(event["running"][:3]) + (" …" if len(event["running"]) > 3 else "")
                left = duration(event["left_s"])
                progress(
                    ProgressEvent(
                        "solving",
                        event["done"] / max(event["cases"], 1),
                        f"{event['done']} of {event['cases']}{failed}, about {left} left; {running or 'waiting'}",
                    )
                )
            elif kind == "planned" and not quiet:
                before = f", {event['finished_before']} finished before" if event["finished_before"] else ""
                progress(ProgressEvent("planned", None, f"{event['shapes']} shapes, {event['cases']} cases{before}"))
            elif kind == "damaged":
                typer.echo(f"bemescape: {event['folder']} is damaged ({event['reason']}); solved again", err=True)
            elif kind == "failed":
                typer.echo(f"bemescape: {event['case']} failed: {event['reason']}", err=True)
            elif kind == "worker_lost":
                typer.echo(f"bemescape: a worker was lost; {event['case']} is solved by another", err=True)
            elif kind == "drawing":
                progress(ProgressEvent("drawing", event.get("done"), event.get("detail", "report and figure")))

        yield show


def _print_answer(result: StudyResult) -> None:
    from bemescape.cli.answer import columns
    from bemescape.results.summary import CAUTION
    from bemescape.units import format_time

    typer.echo(repr(result))
    for setting in result.statistics.settings:
        if setting.swept:
            typer.echo(
                "  " + ", ".join(f"{key} = {value:g}" for key, value in setting.swept.items() if value is not None)
            )
        rows = [
            (
                group.group or "(none)",
                f"n = {group.units}",
                format_time(group.median_s),
                f"{format_time(group.lower_quartile_s, 3)} to {format_time(group.upper_quartile_s, 3)}",
            )
            for group in setting.groups
        ]
        if rows:
            typer.echo("\n".join(columns([("group", "", "median", "middle half"), *rows])))
        typer.echo("\n".join(f"  {line}" for line in setting.statements))
    typer.echo("\n".join(f"  {line}" for line in result.statistics.statements))
    files = ", ".join(sorted(entry.name for entry in result.folder.iterdir() if not entry.name.startswith(".")))
    typer.echo(f"  files  {result.folder}: {files}\n\n{CAUTION}")
