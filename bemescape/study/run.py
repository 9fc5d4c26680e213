"""A whole study: plan, solve what is not finished, write the table, compare groups, report."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from bemescape.errors import SettingsError
from bemescape.study.document import Study, read_study
from bemescape.study.engine import Engine, crew, default_workers, refuse_unguarded_script
from bemescape.study.events import StudyEvents, unheard
from bemescape.study.plan import PlannedCase, StudyPlan, plan_study
from bemescape.study.store import StoredCase, StudyStore, write_atomically
from bemescape.study.table import make_table, table_as_csv, table_as_parquet
from bemescape.study.work import Outcome, Solve

if TYPE_CHECKING:
    import pandas as pd

    from bemescape.study.statistics import StudyStatistics

__all__ = ["StudyResult", "StudyStopped", "run_study"]

TABLE_CSV, TABLE_PARQUET, STATISTICS, REPORT = "cases.csv", "cases.parquet", "statistics.json", "report.html"


class StudyStopped(KeyboardInterrupt):
    """Ctrl-C: the message says what is kept and what remains."""


@dataclass(frozen=True)
class StudyResult:
    """What a study gave.

    Attributes
    ----------
    folder : Path
        Holds `cases.csv`, `cases.parquet`, `statistics.json`, `report.html`, `figure.pdf`, `figure.svg` and a folder
        for every case.
    plan : StudyPlan
    table : pandas.DataFrame
        One row a case; see `bemescape.study.table.MEASURES`.
    statistics : StudyStatistics
    stored : mapping of str to StoredCase
        Key of a case -> where it is.
    failures : mapping of str to str
        Key of a case -> why it has no result.
    """

    folder: Path
    plan: StudyPlan
    table: pd.DataFrame
    statistics: StudyStatistics
    stored: Mapping[str, StoredCase]
    failures: Mapping[str, str]

    def __repr__(self) -> str:
        failed = f", {len(self.failures)} failed" if self.failures else ""
        return f"StudyResult: {self.plan.study.name}, {len(self.stored)} of {len(self.plan.distinct)} cases{failed}"


def run_study(
    study: str | Path | Study,
    out: str | Path,
    *,
    workers: int | None = None,
    scheduler: str | None = None,
    memory_mb: float | None = None,
    report: bool = True,
    events: StudyEvents = unheard,
    solve: Solve | None = None,
) -> StudyResult:
    """Solve every case of a study that is not finished in `out` yet, and write table, statistics and report.

    Call it under ``if __name__ == "__main__":`` in a script: worker processes load the script too.

    Parameters
    ----------
    study : path or Study
        The study file.
    out : path
        The study's own folder. What an earlier run finished there is kept; its failures are tried again.
    workers : int, optional
        Local worker processes of one thread each; by default one for each core.
    scheduler : str, optional
        Address of a dask scheduler whose workers are used instead. Mesh files travel with the orders and results
        travel back, so no shared folder is needed; workers need the same version of this package.
    memory_mb : float, optional
        What the cases that run side by side may take together; by default 80 % of the free memory, or the sum of the
        limits of a scheduler's workers. A case that exceeds it runs alone.
    report : bool, default True
        Whether to draw the report and the figure, which takes about a second a shape.
    events : callable, optional
        Receives a dictionary per event.
    solve : callable, optional
        Replaces the solver; for tests.

    Raises
    ------
    SettingsError
        The study file or a list is wrong, the folder cannot be written, or there are no workers.
    StudyStopped
        Ctrl-C; what was finished is stored, and the table says what remains.
    """
    if scheduler is None:
        refuse_unguarded_script()
    plan = plan_study(study if isinstance(study, Study) else read_study(study))
    if workers is not None and not 1 <= workers <= 1024:
        raise SettingsError(f"workers is {workers}; give a number from 1 to 1024")
    with StudyStore(Path(out)) as store:
        stored, damaged = store.finished({key: case.name for key, case in plan.distinct.items()})
        for damage in damaged:
            events({"event": "damaged", "folder": str(damage.folder), "reason": damage.reason})
        waiting = [case for key, case in plan.distinct.items() if key not in stored]
        count = workers or default_workers(len(waiting))
        events(
            {
                "event": "planned",
                "study": plan.study.name,
                "shapes": len(plan.shapes),
                "cases": len(plan.distinct),
                "finished_before": len(stored),
                "estimated_s": round(plan.estimated_s(count, frozenset(stored)), 1),
            }
        )
        failures: dict[str, str] = {}
        stopped = False
        try:
            if waiting:
                failures = _solve_all(waiting, stored, store, events, count, scheduler, memory_mb, solve)
        except _Interrupted as stop:
            failures, stopped = stop.failures, True
        result = _written(plan, stored, failures, store.folder, events)
        if stopped:
            left = len(plan.distinct) - len(stored)
            events({"event": "stopped", "finished": len(stored), "left": left})
            raise StudyStopped(
                f"{len(stored)} of {len(plan.distinct)} cases are kept in {store.folder}, {left} remain; run the same "
                "command again to go on"
            )
        if report:
            _report(result, events)
        events({"event": "done", "finished": len(stored), "failed": len(failures), "folder": str(store.folder)})
        return result


class _Interrupted(Exception):
    def __init__(self, failures: dict[str, str]) -> None:
        super().__init__()
        self.failures = failures


def _solve_all(
    waiting: list[PlannedCase],
    stored: dict[str, StoredCase],
    store: StudyStore,
    events: StudyEvents,
    count: int,
    scheduler: str | None,
    memory_mb: float | None,
    solve: Solve | None,
) -> dict[str, str]:
    def keep(outcome: Outcome, case: PlannedCase) -> None:
        stored[outcome.key] = store.put(outcome, case.name)

    failures: dict[str, str] = {}
    try:
        with crew(workers=count, scheduler=scheduler, memory_mb=memory_mb) as hands:
            events({"event": "workers", "workers": hands.workers, "scheduler": hands.address})
            engine = Engine(hands, keep, events, solve, failures=failures)
            engine.run(waiting)
    except KeyboardInterrupt as stop:
        raise _Interrupted(failures) from stop
    return failures


def _written(
    plan: StudyPlan,
    stored: Mapping[str, StoredCase],
    failures: Mapping[str, str],
    folder: Path,
    events: StudyEvents,
) -> StudyResult:
    from bemescape.study.statistics import study_statistics

    table = make_table(plan, stored, failures)
    statistics = study_statistics(plan, table)
    write_atomically(folder / TABLE_CSV, table_as_csv(table))
    write_atomically(folder / TABLE_PARQUET, table_as_parquet(table))
    write_atomically(folder / STATISTICS, (statistics.model_dump_json(indent=2) + "\n").encode())
    events({"event": "written", "files": [TABLE_CSV, TABLE_PARQUET, STATISTICS]})
    return StudyResult(folder, plan, table, statistics, stored, failures)


def _report(result: StudyResult, events: StudyEvents) -> None:
    from bemescape.viz.study_report import write_study_report

    events({"event": "drawing"})
    files = write_study_report(result, result.folder)
    events({"event": "written", "files": [path.name for path in files]})
