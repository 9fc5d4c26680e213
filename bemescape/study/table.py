"""The table of a study: one row a case, units in the names of columns, as CSV and Parquet."""

from __future__ import annotations

import io
import itertools
import re
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

from bemescape.study.plan import StudyPlan
from bemescape.study.store import StoredCase

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["COVARIATE", "MEASURES", "TIMINGS", "make_table", "share_columns", "table_as_csv", "table_as_parquet"]

#: Columns of numbers that differ from run to run.
TIMINGS = ("solve_wall_s", "case_wall_s")
#: Begins the name of a column that comes from the study's list and would hide a column of the table.
COVARIATE = "given_"
#: More windows than these do not get a column each; the shares are then in the result folders only.
MOST_SHARE_COLUMNS = 24

#: Measured columns in their order -> what they say.
MEASURES: Mapping[str, str] = {
    "mean_time_s": "mean escape time, start uniform in the volume",
    "relative_error": "estimated numerical error of mean_time_s, relative",
    "mean_time_error_s": "the same in seconds",
    "target_met": "whether that error is below the target",
    "escape_time_sd_s": "standard deviation of the escape time",
    "cv": "standard deviation / mean",
    "slowest_time_s": "largest mean time from any place of the wall",
    "slow_fraction": "part of the wall's area from where the mean time is more than 10 % above mean_time_s",
    "slow_regions": "connected parts of the slowest 10 % of the wall",
    "volume_um3": "volume",
    "area_um2": "surface area",
    "sphericity": "area of the ball of the same volume / area",
    "longest_geodesic_um": "longest of the shortest paths along the wall",
    "narrowest_neck_radius_um": "estimate: radius of a disc as large as the narrowest way to the windows",
    "window_count": "number of windows",
    "window_area_um2": "area of all windows",
    "rule_of_thumb_s": "V / (4 D Σ √(A/π))",
    "rule_of_thumb_ratio": "mean_time_s / rule_of_thumb_s",
    "balance": "outflow through all windows * D / V - 1",
    "panels": "panels of the finest mesh",
    "iterations": "iterations on it",
}
_WHOLE_NUMBERS = ("slow_regions", "window_count", "panels", "iterations")


def make_table(plan: StudyPlan, stored: Mapping[str, StoredCase], failures: Mapping[str, str]) -> pd.DataFrame:
    """One row for every planned case, in the order of the plan; a case without a result has its reason in `failure`.

    Columns: names and labels, covariates of the list, swept values, measures (`MEASURES`), `share_NAME` for each
    window, checks, `failure`, and last the timings, which alone differ between equal runs. Apart from covariates,
    which keep the names that the list gives them, columns are names in R and in Python.
    """
    import pandas as pd

    shares = share_columns(name for case in stored.values() for name in case.values.get("shares", {}))
    if len(shares) > MOST_SHARE_COLUMNS:
        shares = {}
    rows = []
    for case in plan.cases:
        done = stored.get(case.key)
        values = done.values if done is not None else {}
        row: dict[str, Any] = {
            "case": case.name,
            "shape": case.shape.name,
            "file": case.shape.file,
            "group": case.shape.group,
            "subject": case.shape.subject,
        }
        row |= dict(case.swept)
        if "diffusion_um2_s" not in row and plan.study.document.motion is not None:
            row["diffusion_um2_s"] = plan.study.document.motion.diffusion_um2_s
        row |= {name: values.get(name) for name in MEASURES}
        row |= {column: values.get("shares", {}).get(name) for name, column in shares.items()}
        row |= {
            "notes": values.get("notes", ""),
            "failure": "" if done is not None else failures.get(case.key, "not solved yet"),
            "mesh_sha256": case.mesh_sha256,
            "case_key": case.key,
            "solve_wall_s": values.get("solve_wall_s"),
            "case_wall_s": done.seconds if done is not None else None,
        }
        for name, value in case.shape.covariates.items():
            row[_column_of_covariate(name, row)] = value
        rows.append(row)
    table = pd.DataFrame(rows)
    for name in _WHOLE_NUMBERS:
        table[name] = table[name].astype("Int64")
    table["target_met"] = table["target_met"].astype("boolean")
    numbers = [name for name in (*MEASURES, *TIMINGS) if name not in (*_WHOLE_NUMBERS, "target_met")]
    numbers += shares.values()
    table[numbers] = table[numbers].astype("float64")
    # Timings last: a reader of two tables compares all before them.
    return table[[name for name in table.columns if name not in TIMINGS] + list(TIMINGS)]


def covariate_columns(plan: StudyPlan, table: pd.DataFrame) -> list[str]:
    """Columns of the table that come from the study's list."""
    names = {name for case in plan.cases for name in case.shape.covariates}
    return [column for column in table.columns if column in names or column.removeprefix(COVARIATE) in names]


def _column_of_covariate(name: str, row: Mapping[str, Any]) -> str:
    return f"{COVARIATE}{name}" if name in row or name in MEASURES else name


def share_columns(names: Iterable[str]) -> dict[str, str]:
    """Name of a window -> its column, of letters, digits and underscores; equal ones are told apart by a number.

    >>> share_columns(["neck end", "neck-end", "pore"])
    {'neck end': 'share_neck_end', 'neck-end': 'share_neck_end_2', 'pore': 'share_pore'}
    """
    columns: dict[str, str] = {}
    for name in sorted(set(names)):
        plain = "share_" + (re.sub(r"\W+", "_", name).strip("_") or "window")
        candidates = itertools.chain([plain], (f"{plain}_{number}" for number in itertools.count(2)))
        columns[name] = next(column for column in candidates if column not in columns.values())
    return columns


def table_as_csv(table: pd.DataFrame) -> bytes:
    """UTF-8, commas, points, an empty cell for a missing number; read back by pandas and by R's read.csv."""
    return str(table.to_csv(index=False, lineterminator="\n")).encode()


def table_as_parquet(table: pd.DataFrame) -> bytes:
    """The same with types."""
    stream = io.BytesIO()
    table.to_parquet(stream, index=False, engine="pyarrow")
    return stream.getvalue()
