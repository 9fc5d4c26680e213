"""What the shapes say together: groups compared, time against shape, numerical error beside the spread of the shapes.

Everything is computed by scipy.stats and statsmodels; this module chooses what may be compared with what, and says so.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field
from scipy import stats

from bemescape.study.plan import StudyPlan
from bemescape.study.table import covariate_columns
from bemescape.units import format_time

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "Excluded",
    "GroupSummary",
    "MixedModel",
    "Overall",
    "PairComparison",
    "Setting",
    "StudyStatistics",
    "Trend",
    "smallest_p",
    "study_statistics",
]

Floats = NDArray[np.float64]

#: Measures of shape that the mean time is held against.
SHAPE_MEASURES = (
    "volume_um3",
    "area_um2",
    "sphericity",
    "longest_geodesic_um",
    "narrowest_neck_radius_um",
    "window_area_um2",
)
#: The usual level; a comparison whose p could not fall below it at any data is not tested (common practice).
LEVEL = 0.05
FEWEST_FOR_A_TREND = 5


class _Model(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Excluded(_Model):
    """A case that takes no part, and why."""

    case: str
    reason: str


class GroupSummary(_Model):
    """One group: the shapes behind it and, with a subject column, the subjects."""

    group: str
    shapes: int
    units: int = Field(description="what is compared: shapes, or subjects where the study names them")
    median_s: float = Field(description="median of the units")
    lower_quartile_s: float
    upper_quartile_s: float


class Overall(_Model):
    """Kruskal–Wallis test over three or more groups."""

    statistic: float
    p: float


class PairComparison(_Model):
    """Two groups compared by Mann–Whitney; difference = first − second."""

    first: str
    second: str
    median_difference_s: float
    interval_s: tuple[float, float] | None = Field(description="95 %, bootstrap; null: too few units")
    effect: float = Field(description="P(first > second) − P(first < second), −1 to 1 (Cliff's delta)")
    p: float | None = Field(description="null: no test is meaningful")
    p_holm: float | None = Field(description="corrected for all pairs of this setting")
    statement: str


class Trend(_Model):
    """Mean time against one measure, over all shapes of a setting."""

    column: str
    shapes: int
    spearman: float
    p: float | None = Field(description="null where shapes share subjects and so are not independent")
    slope: float | None = Field(description="of log time over log measure; null where a value is not positive")
    slope_interval: tuple[float, float] | None = Field(description="95 %, least squares")


class MixedModel(_Model):
    """Log time by group with a random offset for each subject (statsmodels MixedLM, REML)."""

    reference: str
    ratios: dict[str, float] = Field(description="group -> time relative to the reference group")
    intervals: dict[str, tuple[float, float]]
    p: dict[str, float] = Field(description="Wald test; too small with few subjects")
    converged: bool
    notes: list[str]


class Setting(_Model):
    """All of this for one combination of swept values."""

    swept: dict[str, float | None]
    groups: list[GroupSummary]
    overall: Overall | None
    pairs: list[PairComparison]
    mixed: MixedModel | None
    trends: list[Trend]
    excluded: list[Excluded]
    target_not_met: int
    median_relative_error: float | None
    spread: float | None = Field(description="interquartile range / median of the shapes, mean over the groups")
    statements: list[str]


class StudyStatistics(_Model):
    """`statistics.json`."""

    unit: Literal["shape", "subject"]
    method: str
    settings: list[Setting]
    statements: list[str]


def smallest_p(first: int, second: int) -> float:
    """The smallest p that a two-sided rank test of two groups of these sizes can give.

    >>> smallest_p(3, 3), round(smallest_p(4, 4), 4)
    (0.1, 0.0286)
    """
    return min(1.0, 2.0 / math.comb(first + second, first))


def study_statistics(plan: StudyPlan, table: pd.DataFrame) -> StudyStatistics:
    """Compare the groups and find the trends, for each combination of swept values apart.

    Cases of one shape at several swept values are not independent, so that they are never pooled.
    """
    wanted = plan.study.document.statistics
    by_subject = bool((table["subject"] != "").any())
    columns = [*SHAPE_MEASURES, *_numeric(table, covariate_columns(plan, table))]
    swept = list(plan.swept_columns)
    parts: list[tuple[dict[str, float], pd.DataFrame]]
    if swept:
        grouped = table.groupby(swept, sort=False, dropna=False)
        parts = [(dict(zip(swept, _as_tuple(values), strict=True)), part) for values, part in grouped]
    else:
        parts = [({}, table)]
    chosen = _Chosen(by_subject, wanted.subjects == "mixed model", wanted.resamples, wanted.seed, tuple(columns))
    settings = [_setting(values, part, chosen) for values, part in parts]
    statements = []
    if by_subject:
        how = "a mixed model with a random offset for each subject" if chosen.mixed else "the medians of subjects"
        statements.append(
            f"Subjects, not shapes, are the unit of comparison: {how} are compared, since shapes of one subject are "
            "not independent samples."
        )
    if len(settings) > 1:
        statements.append(
            "Each combination of swept values is compared by itself; the same shapes stand behind all of them."
        )
    method = (
        "Difference of medians with a percentile bootstrap interval; Mann–Whitney U (two-sided) for pairs, "
        "Kruskal–Wallis for three or more groups, Holm's correction over the pairs of a setting; effect size: Cliff's "
        "delta; Spearman's rank correlation; least squares on logarithms for slopes. scipy.stats and statsmodels."
    )
    return StudyStatistics(
        unit="subject" if by_subject else "shape", method=method, settings=settings, statements=statements
    )


@dataclass(frozen=True)
class _Chosen:
    by_subject: bool
    mixed: bool
    resamples: int
    seed: int
    columns: tuple[str, ...]


def _as_tuple(values: Any) -> tuple[Any, ...]:
    return values if isinstance(values, tuple) else (values,)


def _numeric(table: pd.DataFrame, columns: Sequence[str]) -> list[str]:
    from pandas.api.types import is_bool_dtype, is_numeric_dtype

    return [name for name in columns if is_numeric_dtype(table[name]) and not is_bool_dtype(table[name])]


def _setting(swept: dict[str, float], part: pd.DataFrame, chosen: _Chosen) -> Setting:
    excluded = [
        Excluded(case=row["case"], reason=row["failure"] or "no mean time")
        for _, row in part[part["mean_time_s"].isna()].iterrows()
    ]
    used = part[part["mean_time_s"].notna()]
    if chosen.by_subject:
        nameless = used["subject"] == ""
        excluded += [Excluded(case=case, reason="no subject is named") for case in used.loc[nameless, "case"]]
        used = used[~nameless]
    statements = []
    values: dict[str, Floats] = {}
    groups = []
    names = [name for name in dict.fromkeys(part["group"]) if (used["group"] == name).any()]
    for name in names:
        members = used[used["group"] == name]
        units = members.groupby("subject")["mean_time_s"].median() if chosen.by_subject else members["mean_time_s"]
        values[name] = np.asarray(units, dtype=np.float64)
        low, middle, high = np.quantile(values[name], [0.25, 0.5, 0.75])
        groups.append(
            GroupSummary(
                group=name,
                shapes=len(members),
                units=len(values[name]),
                median_s=float(middle),
                lower_quartile_s=float(low),
                upper_quartile_s=float(high),
            )
        )
        if len(values[name]) == 1:
            unit = "subject" if chosen.by_subject else "shape"
            statements.append(f"Group {name or '(none)'} has one {unit}; it is shown and not tested.")
    if chosen.by_subject:
        statements += _subject_statements(used)
    pairs = _pairs(values, chosen)
    statements += [pair.statement for pair in pairs]
    mixed = _mixed_model(used, names) if chosen.by_subject and chosen.mixed and len(names) > 1 else None
    if mixed is not None:
        statements += _mixed_statements(mixed)
    if len(names) < 2:
        statements.append("There is one group, so nothing is compared." if names else "No case has a result.")
    unmet = int((~used["target_met"].astype("boolean").fillna(value=True)).sum())
    if unmet:
        statements.append(f"{unmet} of {len(used)} cases ended above the target for their numerical error.")
    if excluded:
        statements.append(f"{len(excluded)} of {len(part)} cases are excluded; the reasons stand beside them.")
    error = float(used["relative_error"].median()) if len(used) else None
    spread = _spread(used, names)
    if error is not None and spread is not None and spread > 0.0:
        statements.append(
            f"Numerical error against biological spread: the stated error is {100 * error:.2g} % (median of the "
            f"cases), the interquartile range within groups is {100 * spread:.2g} % of the median"
            + (f", {spread / error:.0f} times as much." if spread > error else ": the shapes differ less than that.")
        )
    return Setting(
        swept={key: float(value) if math.isfinite(value) else None for key, value in swept.items()},
        groups=groups,
        overall=_overall(values),
        pairs=pairs,
        mixed=mixed,
        trends=_trends(used, chosen),
        excluded=excluded,
        target_not_met=unmet,
        median_relative_error=error,
        spread=spread,
        statements=statements,
    )


def _subject_statements(used: pd.DataFrame) -> list[str]:
    counts = used.groupby("group", sort=False)["subject"].agg(["size", "nunique"])
    lines = [
        f"{row['size']} shapes of group {name or '(none)'} come from {row['nunique']} "
        f"subject{'' if row['nunique'] == 1 else 's'}: n = {row['nunique']}."
        for name, row in counts.iterrows()
    ]
    homes = used.groupby("subject")["group"].nunique()
    shared = list(homes[homes > 1].index)
    if shared:
        lines.append(
            f"{len(shared)} subject{'s' * (len(shared) > 1)} ({shared[0]!r}, for one) belong to several groups; rank "
            'tests take them for independent, so prefer subjects = "mixed model".'
        )
    return lines


def _overall(values: dict[str, Floats]) -> Overall | None:
    samples = [sample for sample in values.values() if len(sample) > 1]
    if len(samples) < 3 or len(np.unique(np.concatenate(samples))) < 2:
        return None
    found = stats.kruskal(*samples)
    return Overall(statistic=float(found.statistic), p=float(found.pvalue))


def _pairs(values: dict[str, Floats], chosen: _Chosen) -> list[PairComparison]:
    from statsmodels.stats.multitest import multipletests

    rows: list[dict[str, Any]] = []
    for first, second in combinations(values, 2):
        a, b = values[first], values[second]
        tested = stats.mannwhitneyu(a, b, alternative="two-sided")
        meaningful = smallest_p(len(a), len(b)) <= LEVEL and len(np.unique(np.concatenate([a, b]))) > 1
        rows.append(
            {
                "first": first,
                "second": second,
                "median_difference_s": float(np.median(a) - np.median(b)),
                "interval_s": _interval(a, b, chosen),
                "effect": 2.0 * float(tested.statistic) / (len(a) * len(b)) - 1.0,
                "p": float(tested.pvalue) if meaningful else None,
                "sizes": (len(a), len(b)),
            }
        )
    known = [row["p"] for row in rows if row["p"] is not None]
    corrected = iter(multipletests(known, method="holm")[1]) if known else iter(())
    for row in rows:
        row["p_holm"] = None if row["p"] is None else float(next(corrected))
    return [
        PairComparison(statement=_pair_statement(row, chosen), **{k: v for k, v in row.items() if k != "sizes"})
        for row in rows
    ]


def _interval(a: Floats, b: Floats, chosen: _Chosen) -> tuple[float, float] | None:
    if min(len(a), len(b)) < 3:
        return None

    def difference(x: Floats, y: Floats, axis: int = -1) -> Any:
        return np.median(x, axis=axis) - np.median(y, axis=axis)

    found = stats.bootstrap(
        (a, b),
        difference,
        n_resamples=chosen.resamples,
        vectorized=True,
        method="percentile",
        rng=np.random.default_rng(chosen.seed),
    ).confidence_interval
    return float(found.low), float(found.high)


def _pair_statement(row: dict[str, Any], chosen: _Chosen) -> str:
    first, second = (row[key] or "(none)" for key in ("first", "second"))
    unit = "subjects" if chosen.by_subject else "shapes"
    sizes = f"n = {row['sizes'][0]} and {row['sizes'][1]} {unit}"
    apart = row["median_difference_s"]
    more = "longer" if apart > 0 else "shorter"
    interval = row["interval_s"]
    between = (
        ""
        if interval is None
        else f" (95 % interval of the difference {format_time(interval[0], 3)} to {format_time(interval[1], 3)})"
    )
    line = f"Median in {first} is {format_time(abs(apart), 3)} {more} than in {second}{between}; {sizes}"
    if row["p"] is None:
        least = smallest_p(*row["sizes"])
        why = f"no p below {least:.2g} could come out" if least > LEVEL else "all values are equal"
        return f"{line}. With so few no test is meaningful ({why})."
    return (
        f"{line}; Mann–Whitney p = {row['p']:.2g}, after Holm {row['p_holm']:.2g}; Cliff's delta {row['effect']:+.2f}."
    )


def _mixed_model(used: pd.DataFrame, names: Sequence[str]) -> MixedModel | None:
    from statsmodels.regression.mixed_linear_model import MixedLM

    subjects = used["subject"].to_numpy()
    if len(set(subjects)) < 3 or len(used) <= len(names) + 1:
        return None
    others = list(names[1:])
    design = np.column_stack([np.ones(len(used)), *((used["group"] == name).to_numpy(float) for name in others)])
    times = np.log(used["mean_time_s"].to_numpy(float))
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        try:
            fit: Any = MixedLM(times, design, groups=subjects).fit(reml=True)
        except (ValueError, np.linalg.LinAlgError) as error:
            return MixedModel(
                reference=names[0], ratios={}, intervals={}, p={}, converged=False, notes=[f"not fitted: {error}"]
            )
        limits = np.asarray(fit.conf_int())
    notes = list(dict.fromkeys(" ".join(str(item.message).split())[:160] for item in heard))
    if len(set(subjects)) < 10:
        notes.append(f"{len(set(subjects))} subjects: the Wald p is too small (common practice: ten or more)")
    places = list(enumerate(others, start=1))
    return MixedModel(
        reference=names[0],
        ratios={name: float(np.exp(fit.fe_params[k])) for k, name in places},
        intervals={name: (float(np.exp(limits[k, 0])), float(np.exp(limits[k, 1]))) for k, name in places},
        p={name: float(fit.pvalues[k]) for k, name in places},
        converged=bool(fit.converged),
        notes=notes,
    )


def _mixed_statements(mixed: MixedModel) -> list[str]:
    lines = [
        f"Mixed model: times in {name or '(none)'} are {ratio:.3g} times those in {mixed.reference or '(none)'} "
        f"(95 % interval {mixed.intervals[name][0]:.3g} to {mixed.intervals[name][1]:.3g}; Wald p = "
        f"{mixed.p[name]:.2g})."
        for name, ratio in mixed.ratios.items()
    ]
    if not mixed.converged:
        lines.append("The mixed model did not converge; do not use its numbers.")
    return lines


def _trends(used: pd.DataFrame, chosen: _Chosen) -> list[Trend]:
    trends = []
    for column in chosen.columns:
        rows = used[used[column].notna()]
        x, y = rows[column].to_numpy(float), rows["mean_time_s"].to_numpy(float)
        if len(x) < FEWEST_FOR_A_TREND or np.ptp(x) <= 1e-9 * np.abs(x).max() or np.ptp(y) == 0.0:
            continue
        ranks = stats.spearmanr(x, y)
        slope, interval = None, None
        if (x > 0.0).all():
            line = stats.linregress(np.log(x), np.log(y))
            half = float(stats.t.ppf(0.975, len(x) - 2)) * float(line.stderr)
            slope, interval = float(line.slope), (float(line.slope) - half, float(line.slope) + half)
        trends.append(
            Trend(
                column=column,
                shapes=len(x),
                spearman=float(ranks.statistic),
                p=None if chosen.by_subject else float(ranks.pvalue),
                slope=slope,
                slope_interval=interval,
            )
        )
    return trends


def _spread(used: pd.DataFrame, names: Sequence[str]) -> float | None:
    parts = []
    for name in names:
        times = used.loc[used["group"] == name, "mean_time_s"].to_numpy(float)
        if len(times) >= 4:
            low, middle, high = np.quantile(times, [0.25, 0.5, 0.75])
            parts.append(float((high - low) / middle))
    return float(np.mean(parts)) if parts else None
