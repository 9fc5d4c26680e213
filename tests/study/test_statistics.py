"""What the statistics say, against published worked examples and against scipy called directly."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from bemescape.study.document import StatisticsSection
from bemescape.study.statistics import smallest_p, study_statistics


def statistics_of(groups, *, subjects=None, how="medians", failures=(), keep_table=False, **columns):
    """`groups`: name -> mean times; `columns`: name -> values in the same order."""
    rows = [
        {"case": f"{name}{number}", "shape": f"{name}{number}", "group": name, "mean_time_s": float(time)}
        for name, times in groups.items()
        for number, time in enumerate(times)
    ]
    table = pd.DataFrame(rows)
    table["subject"] = "" if subjects is None else subjects
    table["relative_error"] = 0.005
    table["target_met"] = True
    table["failure"] = ""
    for column in ("volume_um3", "area_um2", "sphericity", "longest_geodesic_um", "narrowest_neck_radius_um"):
        table[column] = columns.get(column, np.nan)
    table["window_area_um2"] = columns.get("window_area_um2", np.nan)
    for row, reason in failures:
        table.loc[row, ["mean_time_s", "failure"]] = [np.nan, reason]
    document = SimpleNamespace(statistics=StatisticsSection(subjects=how))
    plan = SimpleNamespace(study=SimpleNamespace(document=document), swept_columns=(), cases=())
    found = study_statistics(plan, table)
    return (found, table) if keep_table else found


def test_ranks_of_a_published_example_give_its_u_and_p():
    """Conover's example as scipy's documentation of mannwhitneyu works it: ages at diagnosis of diabetes.

    Males 19, 22, 16, 29, 24 and females 20, 11, 17, 12: U = 17 and exact p = 0.1111 (scipy's reference page).
    """
    (pair,) = statistics_of({"male": [19, 22, 16, 29, 24], "female": [20, 11, 17, 12]}).settings[0].pairs
    assert pair.p == pytest.approx(0.1111111, abs=1e-6)
    assert pair.effect == pytest.approx(2.0 * 17.0 / 20.0 - 1.0)
    assert pair.median_difference_s == pytest.approx(22.0 - 14.5)


def test_three_groups_of_a_published_example_give_its_kruskal_wallis_statistic():
    """Hollander & Wolfe (1973), mucociliary efficiency: H = 0.77143, 2 degrees of freedom, p = 0.68.

    Rates of removal of dust in normal subjects, in obstructive airway disease and in asbestosis; data and result as
    R's reference page of kruskal.test gives them (from memory; H follows from the ranks by hand).
    """
    groups = {
        "normal": [2.9, 3.0, 2.5, 2.6, 3.2],
        "obstructive": [3.8, 2.7, 4.0, 2.4],
        "asbestosis": [2.8, 3.4, 3.7, 2.2, 2.0],
    }
    overall = statistics_of(groups).settings[0].overall
    assert overall.statistic == pytest.approx(0.77143, abs=5e-6)
    assert overall.p == pytest.approx(0.6800, abs=5e-5)


def test_ranks_of_a_published_example_give_its_spearman_correlation():
    """Hollander & Wolfe (1973), lightness of tuna against a panel's scores: ρ = 0.6 (R's page of cor.test)."""
    lightness = [44.4, 45.9, 41.9, 53.3, 44.7, 44.1, 50.7, 45.2, 60.1]
    scores = [2.6, 3.1, 2.5, 5.0, 3.6, 4.0, 5.2, 2.8, 3.8]
    setting = statistics_of({"tuna": scores}, volume_um3=lightness).settings[0]
    assert next(trend for trend in setting.trends if trend.column == "volume_um3").spearman == pytest.approx(0.6)


#: NIST Statistical Reference Datasets, linear regression, "Norris": y, x (public domain).
NORRIS = """
0.1 0.2  338.8 337.4  118.1 118.2  888.0 884.6  9.2 10.1  228.1 226.5  668.5 666.3  998.5 996.3  449.1 448.6
778.9 777.0  559.2 558.2  0.3 0.4  0.1 0.6  778.1 775.5  668.8 666.9  339.3 338.0  448.9 447.5  10.8 11.6
557.7 556.0  228.3 228.1  998.0 995.8  888.8 887.6  119.6 120.2  0.3 0.3  0.6 0.3  557.6 556.8  339.3 339.1
888.0 887.2  998.5 999.0  778.9 779.0  10.2 11.1  117.6 118.3  228.9 229.2  668.4 669.1  449.2 448.9  0.2 0.5
"""


def test_slope_and_interval_on_logarithms_are_those_that_nist_certifies():
    """Norris: slope 1.00211681802045, its standard deviation 0.429796848199937E-03, 34 degrees of freedom.

    Both logarithms are a hundredth of the data, which leaves the slope; the 97.5 % point of Student's t with 34
    degrees of freedom is 2.0322 (tables).
    """
    y, x = np.array(NORRIS.split(), dtype=float).reshape(-1, 2).T
    setting = statistics_of({"norris": np.exp(0.01 * y)}, volume_um3=np.exp(0.01 * x)).settings[0]
    trend = next(trend for trend in setting.trends if trend.column == "volume_um3")
    assert trend.slope == pytest.approx(1.00211681802045, rel=1e-10)
    low, high = trend.slope_interval
    assert 0.5 * (high - low) == pytest.approx(2.0322 * 0.429796848199937e-3, rel=1e-4)
    assert 0.5 * (high + low) == pytest.approx(trend.slope)


def test_a_balanced_mixed_model_gives_the_closed_form_of_its_subjects_means():
    """With m shapes in every subject, REML's contrast is that of the subjects' means and its z is their t.

    Searle, Casella & McCulloch (1992), Variance Components, ch. 4: F = MS(groups) / MS(subjects) in a balanced nested
    layout, so that the Wald z equals Student's t of the subjects' mean logarithms (scipy.stats.ttest_ind).
    """
    rng = np.random.default_rng(21)
    subjects, times, means = [], {}, {}
    for group, level in (("a", 0.0), ("b", 0.3)):
        logs = level + rng.normal(0.0, 0.2, (8, 1)) + rng.normal(0.0, 0.1, (8, 5))
        times[group], means[group] = np.exp(logs).ravel(), logs.mean(axis=1)
        subjects += [f"{group}{k}" for k in range(8) for _ in range(5)]
    mixed = statistics_of(times, subjects=subjects, how="mixed model").settings[0].mixed
    student = stats.ttest_ind(means["b"], means["a"])
    assert mixed.ratios["b"] == pytest.approx(np.exp(means["b"].mean() - means["a"].mean()), rel=1e-6)
    # REML stops at its own tolerance; the p follows the normal law, Student's own is larger with 14 degrees of freedom.
    assert mixed.p["b"] == pytest.approx(2.0 * stats.norm.sf(abs(student.statistic)), rel=1e-3)
    assert mixed.p["b"] < student.pvalue


def test_holm_corrects_for_all_pairs_of_a_setting():
    """Step-down as Holm (1979) defines it: p sorted, times the number left, never falling."""
    rng = np.random.default_rng(5)
    groups = {name: rng.normal(mean, 1.0, 12) + 10.0 for name, mean in (("a", 0.0), ("b", 1.0), ("c", 2.5))}
    setting = statistics_of(groups).settings[0]
    raw = sorted(pair.p for pair in setting.pairs)
    wanted = np.minimum(np.maximum.accumulate([raw[0] * 3, raw[1] * 2, raw[2]]), 1.0)
    assert sorted(pair.p_holm for pair in setting.pairs) == pytest.approx(list(wanted))
    assert setting.overall.p == pytest.approx(stats.kruskal(*groups.values()).pvalue)


def test_too_few_shapes_are_compared_without_a_test_and_it_says_why():
    assert smallest_p(3, 3) == pytest.approx(0.1)
    setting = statistics_of({"a": [1.0, 1.1, 1.2], "b": [2.0, 2.1, 2.2]}).settings[0]
    (pair,) = setting.pairs
    assert pair.p is None
    assert pair.p_holm is None
    assert "no test is meaningful (no p below 0.1 could come out)" in pair.statement


def test_a_group_with_one_member_is_shown_and_not_tested():
    setting = statistics_of({"a": [1.0, 1.2, 1.4, 1.3, 1.1], "b": [2.0]}).settings[0]
    assert "Group b has one shape; it is shown and not tested." in setting.statements
    (pair,) = setting.pairs
    assert pair.p is None
    assert pair.interval_s is None


def test_the_bootstrap_interval_covers_the_true_difference_of_medians_as_often_as_it_says():
    """Two normal samples whose medians differ by 1: of 200 intervals of 95 %, 178 or more must hold it.

    178 is the 0.1 % point of a binomial law with n = 200, p = 0.95 less 3 % for the percentile method's known shortfall
    at n = 20 (common practice: it is a little short for medians).
    """
    rng, held = np.random.default_rng(11), 0
    document = StatisticsSection(resamples=299)
    for _ in range(200):
        a, b = rng.normal(11.0, 1.0, 20), rng.normal(10.0, 1.0, 20)
        from bemescape.study.statistics import _Chosen, _interval

        low, high = _interval(a, b, _Chosen(False, False, document.resamples, 0, ()))
        held += low <= 1.0 <= high
    assert held >= 178


def test_two_hundred_shapes_of_three_subjects_are_three_samples():
    rng = np.random.default_rng(3)
    subjects, times = [], {}
    for group in "ab":
        offsets = rng.normal(0.0, 1.0, 3)
        times[group] = np.concatenate([10.0 + offset + rng.normal(0.0, 0.1, 100) for offset in offsets])
        subjects += [f"{group} mouse {k}" for k in range(3) for _ in range(100)]
    found = statistics_of(times, subjects=subjects)
    setting = found.settings[0]
    assert found.unit == "subject"
    assert [group.units for group in setting.groups] == [3, 3]
    assert setting.pairs[0].p is None
    assert "300 shapes of group a come from 3 subjects: n = 3." in setting.statements
    assert any("not independent samples" in line for line in found.statements)
    # What 600 independent shapes would have claimed:
    assert stats.mannwhitneyu(times["a"], times["b"]).pvalue < 1e-6


def test_a_mixed_model_finds_a_known_ratio_and_subjects_without_a_name_are_left_out():
    """Times of group b are 1.5 times those of a, subjects differ by 10 %: the interval must hold 1.5."""
    rng = np.random.default_rng(8)
    subjects, times = [], {}
    for group, factor in (("a", 1.0), ("b", 1.5)):
        values = []
        for k in range(12):
            offset = rng.normal(0.0, 0.1)
            values += list(factor * np.exp(offset + rng.normal(0.0, 0.05, 6)))
            subjects += [f"{group}{k}"] * 6
        times[group] = values
    subjects[0] = ""
    setting = statistics_of(times, subjects=subjects, how="mixed model").settings[0]
    low, high = setting.mixed.intervals["b"]
    assert low < 1.5 < high
    assert high / low < 1.4
    assert setting.mixed.converged
    assert [entry.reason for entry in setting.excluded] == ["no subject is named"]


def test_a_group_whose_shapes_name_no_subject_is_left_out_and_can_still_be_drawn():
    from bemescape.viz.study_plots import figure_as, study_figure

    found = statistics_of(
        {"a": [1.0, 2.0, 3.0], "b": [2.0, 3.0, 4.0]}, subjects=["m1", "m2", "m3", "", "", ""], keep_table=True
    )
    statistics, table = found
    setting = statistics.settings[0]
    assert [group.group for group in setting.groups] == ["a"]
    assert [entry.reason for entry in setting.excluded] == ["no subject is named"] * 3
    table["mean_time_error_s"] = 0.01
    figure = study_figure(table, setting, groups=["a", "b"])
    labels = [label.get_text() for label in figure.axes[0].get_xticklabels()]
    assert labels == ["a\nn = 3 subjects", "b\nn = 0 subjects"]
    assert "open: subjects" in figure.axes[0].get_title(loc="left")
    assert figure_as(figure, "png").startswith(b"\x89PNG")


def test_failed_cases_are_excluded_with_their_reason():
    setting = statistics_of({"a": [1, 2, 3, 4, 5], "b": [2, 3, 4, 5, 6]}, failures=[(1, "no window")]).settings[0]
    assert [(entry.case, entry.reason) for entry in setting.excluded] == [("a1", "no window")]
    assert setting.groups[0].shapes == 4
    assert "1 of 10 cases are excluded; the reasons stand beside them." in setting.statements


def test_a_power_law_is_found_with_its_exponent():
    volume = np.geomspace(0.1, 3.0, 12)
    setting = statistics_of({"a": 7.0 * volume**1.25}, volume_um3=volume).settings[0]
    trend = next(trend for trend in setting.trends if trend.column == "volume_um3")
    assert trend.slope == pytest.approx(1.25, rel=1e-9)
    assert trend.spearman == pytest.approx(1.0)


def test_numerical_error_is_held_against_the_spread_of_the_shapes():
    setting = statistics_of({"a": [1.0, 1.1, 1.2, 1.3, 1.4]}).settings[0]
    assert setting.spread == pytest.approx(0.2 / 1.2)
    assert any("33 times as much" in line for line in setting.statements)


def test_the_same_table_gives_the_same_statistics():
    groups = {"a": [1.0, 1.1, 1.3, 1.6], "b": [1.2, 1.5, 1.9, 2.0]}
    assert statistics_of(groups).model_dump_json() == statistics_of(groups).model_dump_json()
