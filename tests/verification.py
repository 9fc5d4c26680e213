"""Write `verification.md`: every exact or published case, what was computed, and both errors.

    python tests/verification.py                 # all cases: a quarter of an hour
    python tests/verification.py --fast-sums     # the same with the fast multipole sums forced on: another page
    python tests/verification.py --only ball     # only cases whose name holds a word; the page keeps its other rows
    python tests/verification.py --missing       # only cases without all their rows, as after an interruption

Exit 1 if a row is above the error it states, or above its target.
"""

from __future__ import annotations

import argparse
import gc
import math
import platform
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE), str(HERE.parent)]  # run as a script, from anywhere

import verification_cases as cases  # noqa: E402
from bemescape import EscapeError, EscapeResult, __version__  # noqa: E402
from bemescape.bem import sums  # noqa: E402
from verification_cases import Case, Check, Comparison  # noqa: E402


@dataclass(frozen=True)
class Row:
    """One line of the table.

    Attributes
    ----------
    stated, true : float or None, float
        Relative errors; nothing is stated for some quantities.
    mesh : float
        What the mesh may be off the true body; it comes on top of `stated`.
    """

    case: str
    quantity: str
    source: str
    exact: float
    computed: float
    stated: float | None
    true: float
    mesh: float
    limit: float
    panels: int
    seconds: float

    @property
    def remark(self) -> str:
        """What is wrong with the row; empty if nothing is."""
        if not math.isfinite(self.true):
            return "NOT A NUMBER"
        if self.true > self.limit:
            return "ABOVE TARGET"
        if self.stated is not None and self.true > self.stated + self.mesh:
            return "ABOVE STATED"
        return ""


def row_of(case: Case | Comparison, check: Check, results: tuple[EscapeResult, ...], seconds: float) -> Row:
    """What one check makes of its results; not a number where there are none or it cannot be read off them."""
    mesh = case.mesh if isinstance(case, Case) else sum(part.mesh for part in case.cases)
    computed, stated, true = math.nan, None, math.nan
    if results:
        try:
            computed, stated, true = check.of(*results), check.stated_error(*results), check.true_error(*results)
        except EscapeError as error:
            print(f"{case.name}, {check.quantity}: {error}", file=sys.stderr)
    return Row(
        case.name,
        check.quantity,
        check.source,
        check.exact,
        computed,
        stated,
        true,
        mesh + check.mesh,
        check.limit,
        sum(len(result.faces) for result in results),
        seconds,
    )


def computed_rows(wanted: Callable[[Case | Comparison], bool]) -> Iterator[Row]:
    """Solve case by case; comparisons take up what was solved and solve what was not."""
    comparisons = [comparison for comparison in cases.COMPARISONS if wanted(comparison)]
    compared = {id(case) for comparison in comparisons for case in comparison.cases}
    kept: dict[int, tuple[EscapeResult | None, float]] = {}

    def solved(case: Case) -> tuple[EscapeResult | None, float]:
        if id(case) in kept:
            return kept[id(case)]
        began = time.process_time()
        result = None
        try:
            result = case.solve()
        except EscapeError as error:
            print(f"{case.name}: {error}", file=sys.stderr)
        answer = result, time.process_time() - began
        if id(case) in compared:
            kept[id(case)] = answer
        return answer

    for case in cases.CASES:
        if not wanted(case):
            continue
        result, seconds = solved(case)
        for number, check in enumerate(case.checks):
            yield row_of(case, check, () if result is None else (result,), seconds if number == 0 else 0.0)
        del result
        gc.collect()
    for comparison in comparisons:
        answers = [solved(case) for case in comparison.cases]
        results = tuple(result for result, _ in answers if result is not None)
        complete = results if len(results) == len(answers) else ()
        yield row_of(comparison, comparison.check, complete, sum(seconds for _, seconds in answers))


def force_fast_sums() -> None:
    """For every mesh, also for sums taken once and for few sources: only near fields are summed pair by pair."""
    for limit in ("FAST_FROM", "FAST_ONCE_FROM", "_FEW"):
        if not hasattr(sums, limit):
            raise AttributeError(f"bemescape.bem.sums has no {limit} any more; nothing would be forced by setting it")
        setattr(sums, limit, 0)


def percent(value: float) -> str:
    return f"{100.0 * value:.3f} %"


HEAD = ("case", "quantity", "exact", "computed", "stated error", "true error", "", "panels", "seconds", "source")
#: The cells of a line by its case and quantity.
Lines = dict[tuple[str, str], tuple[str, ...]]


def cells(row: Row) -> tuple[str, ...]:
    """What stands under HEAD."""
    stated = "" if row.stated is None else percent(row.stated)
    if row.stated is not None and row.mesh:
        stated += f" + {percent(row.mesh)}"
    remark = f"**{row.remark}** (limit {percent(row.limit)})" if row.remark else ""
    seconds = f"{row.seconds:.1f}" if row.seconds else ""
    numbers = (f"{row.exact:.7g}", f"{row.computed:.7g}", stated, percent(row.true), remark, str(row.panels), seconds)
    return (row.case, row.quantity, *numbers, row.source)


def lines_of(text: str) -> Lines:
    """The lines of a page written before."""
    rows = [tuple(cell.strip() for cell in line.split("|")[1:-1]) for line in text.splitlines() if line[:2] == "| "]
    return {row[:2]: row for row in rows if row != HEAD}


def in_order(lines: Lines) -> list[tuple[str, ...]]:
    """As in the table of cases; what is no longer there is left out."""
    wanted = [(case.name, check.quantity) for case in cases.CASES for check in case.checks]
    wanted += [(comparison.name, comparison.check.quantity) for comparison in cases.COMPARISONS]
    return [lines[key] for key in wanted if key in lines]


def page(rows: list[tuple[str, ...]], *, fast_sums: bool) -> str:
    """The whole text of `verification.md`."""
    flagged = sum(bool(row[6]) for row in rows)
    worst = max((float(row[5].split()[0]) for row in rows if row[5] != percent(math.nan)), default=math.nan)
    seconds = sum(float(row[8] or 0.0) for row in rows)
    command = "python tests/verification.py" + (" --fast-sums" if fast_sums else "")
    with_sums = "the fast multipole sums forced on for every mesh" if fast_sums else "the sums that the size calls for"
    return "\n".join(
        [
            "# Verification" + (", fast sums" if fast_sums else ""),
            "",
            f"Written by `{command}`, bemescape {__version__}, with {with_sums}. Exact and published values with their",
            "derivations and references: `tests/exact.py`; bodies and windows: `tests/verification_cases.py`.",
            "D = 1 µm²/s, lengths in µm, times in s.",
            "",
            f"**{len(rows)} rows, {flagged} flagged.** Largest true error {worst:.3f} %.",
            "",
            "- *Stated error*: what the result says of itself, for its polyhedron; after a + what the mesh may differ",
            "  from the curved body (or the reference from the truth). Empty where a result states none: then only the",
            "  target is asked.",
            "- *True error*: relative to the exact value; of times at points to the mean time, of splitting",
            "  probabilities to 1.",
            "- Flagged are rows whose true error is above what is stated, or above the target: 0.5 %, 1 % for platonic",
            "  arrangements, compact pores, corner discs and the inner cap, 0.05 for the funnel's exponent of −1.5.",
            "- *Seconds* of processor time, all resolutions of the case, on its first row; in comparisons the sum over",
            f"  their cases. All: {seconds:.0f} s, {platform.machine()}.",
            "",
            "| " + " | ".join(HEAD) + " |",
            "|---|---|--:|--:|--:|--:|---|--:|--:|---|",
            *("| " + " | ".join(row) + " |" for row in rows),
            "",
        ]
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--fast-sums", action="store_true", help="force the fast multipole sums on")
    parser.add_argument("--only", default="", metavar="WORD", help="solve the cases whose name holds this")
    parser.add_argument("--missing", action="store_true", help="solve the cases that lack a row on the page")
    options = parser.parse_args()
    file = HERE / ("verification_fast_sums.md" if options.fast_sums else "verification.md")
    if options.fast_sums:
        force_fast_sums()
    cases.SLABS[0].solved_once(rim=0, ways_out=True)  # compiles: the seconds below are without that
    keep = (options.only or options.missing) and file.exists()
    lines = lines_of(file.read_text(encoding="utf-8")) if keep else {}

    def wanted(case: Case | Comparison) -> bool:
        checks = case.checks if isinstance(case, Case) else (case.check,)
        complete = all((case.name, check.quantity) in lines for check in checks)
        return options.only in case.name and not (options.missing and complete)

    sound = True
    for row in computed_rows(wanted):
        stated = "" if row.stated is None else percent(row.stated + row.mesh)
        print(
            f"{row.case[:60]:60} {row.quantity[:34]:34} {row.exact:14.8g} {row.computed:14.8g} {stated:>8} "
            f"{percent(row.true):>8} {row.panels:7d} {row.seconds:6.1f} s  {row.remark}",
            flush=True,
        )
        sound &= not row.remark
        lines[row.case, row.quantity] = cells(row)
        # Row by row: what was solved is not lost with what fails later.
        file.write_text(page(in_order(lines), fast_sums=options.fast_sums), encoding="utf-8")
    return 0 if sound else 1


if __name__ == "__main__":
    sys.exit(main())
