"""Cases per minute of a study with one and two workers, and what a case costs beyond its solve.

    python tests/bench/study.py [--shapes 12] [--target "5 %"] [--json FILE]

The same small spines are solved by one worker and by two, each after a first case per worker that compiles. Overhead of
a case: the time of all workers for all cases, less the solves, over the number of cases; it holds reading, measuring,
saving, travel, writing and waiting at the end. Numbers are comparable within one run on a quiet machine only. The
processors' seconds, of workers and of the study's own process, are given too: they say on a busy machine too whether
two workers do more work than one, and what the study itself takes.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
from pathlib import Path
from time import perf_counter, process_time
from typing import Any

import psutil

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT)]

from bemescape.study.document import read_study
from bemescape.study.engine import Engine, crew
from bemescape.study.plan import plan_study
from bemescape.study.store import StudyStore

STUDY = """
[[shapes]]
files = "{meshes}/spines/spine_*.ply"
unit = "nm"
[motion]
diffusion = "{diffusion} um^2/s"
[[window]]
name = "neck end"
labels = {{ array = "label", value = 1 }}
[accuracy]
target = "{target}"
"""


def worker_cpu_s() -> float:
    """Seconds of the processors that the processes started by this one have taken."""
    return sum(
        sum(child.cpu_times()[:2])
        for child in psutil.Process().children(recursive=True)
        if child.status() != psutil.STATUS_ZOMBIE
    )


def throughput(workers: int, shapes: int, target: str) -> dict[str, Any]:
    """Seconds for the cases on so many workers, without the start of the workers and their first case."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)

        def cases_at(diffusion: int) -> Any:
            path = folder / f"{diffusion}.study.toml"
            path.write_text(STUDY.format(meshes=ROOT / "meshes", diffusion=diffusion, target=target))
            return plan_study(read_study(path)).cases[:shapes]

        solves: list[float] = []
        with StudyStore(folder / "out") as store, crew(workers=workers) as hands:

            def keep(outcome: Any, case: Any) -> None:
                store.put(outcome, case.name)
                solves.append(outcome.values["solve_wall_s"])

            Engine(hands, keep).run(cases_at(1)[: 2 * workers])
            solves.clear()
            cases = cases_at(2)
            own, of_workers = process_time(), worker_cpu_s()
            started = perf_counter()
            Engine(hands, keep).run(cases)
            seconds = perf_counter() - started
            own, of_workers = process_time() - own, worker_cpu_s() - of_workers
    return {
        "workers": workers,
        "cases": len(solves),
        "seconds": seconds,
        "cases_per_minute": 60.0 * len(solves) / seconds,
        "solve_s": sum(solves),
        "worker_cpu_per_case_s": of_workers / len(solves),
        "own_cpu_per_case_s": own / len(solves),
        "overhead_per_case_s": (seconds * workers - sum(solves)) / len(solves),
    }


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--shapes", type=int, default=12)
    parser.add_argument("--target", default="5 %")
    parser.add_argument("--json", type=Path)
    chosen = parser.parse_args()
    rows = [throughput(workers, chosen.shapes, chosen.target) for workers in (1, 2)]
    for row in rows:
        print(
            f"{row['workers']} worker(s): {row['cases']} cases in {row['seconds']:.1f} s, "
            f"{row['cases_per_minute']:.1f} per minute, {row['overhead_per_case_s']:.2f} s a case beyond the solve; "
            f"processor seconds a case: {row['worker_cpu_per_case_s']:.2f} of workers, "
            f"{row['own_cpu_per_case_s']:.2f} of the study itself"
        )
    print(f"two workers give {rows[1]['cases_per_minute'] / rows[0]['cases_per_minute']:.2f} times as many (aim: 1.7)")
    if chosen.json:
        chosen.json.write_text(json.dumps(rows, indent=2))


if __name__ == "__main__":
    main()
