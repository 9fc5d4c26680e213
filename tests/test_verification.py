"""The table of cases holds every reference value, and `verification.md` shows what the table says now."""

import ast
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import exact
import verification
import verification_cases as cases
from bemescape.bem import sums
from bemescape.bem.panels import make_panels

HERE = Path(__file__).parent
#: Reference values that are no answer of a solve, and where they are used.
USED_ELSEWHERE = {
    "CAP_UNIFORM_FLUX": "limit κ → 0, tests/test_robin.py",
    "ROBIN_DISC": "flat wall, tests/test_robin.py",
    "ROBIN_DISC_IN_SERIES": "flat wall, tests/test_robin.py",
    "EXTERIOR_CAP_RATE": "enters cap_on_inner_shell_mean",
    "NECK_HEAD": "below: NECK_ALL follows from it",
    "caps_by_matrix": "less exact than FIBONACCI_CAPS_50, tests/test_compact.py",
    "ROBIN_DISC_TABLE": "resistance of one disc, tests/bem/test_disc.py",
    "LEAST_CAPS_INTERACTION": "search for arrangements, tests/arrangements",
    "caps_interaction": "search for arrangements, tests/arrangements",
}


def table_rows():
    return [(case, check) for case in cases.CASES for check in case.checks] + [
        (comparison, comparison.check) for comparison in cases.COMPARISONS
    ]


def test_every_reference_value_is_in_the_table():
    tree = ast.parse((HERE / "exact.py").read_text(encoding="utf-8"))
    names = {node.name for node in tree.body if isinstance(node, ast.FunctionDef)}
    for node in tree.body:
        if isinstance(node, ast.Assign):
            names |= {name.id for target in node.targets for name in ast.walk(target) if isinstance(name, ast.Name)}
    table = (HERE / "verification_cases.py").read_text(encoding="utf-8")
    missing = {name for name in names if f"exact.{name}" not in table}
    assert missing == set(USED_ELSEWHERE)


def test_names_are_distinct():
    names = [(case.name, check.quantity) for case, check in table_rows()]
    assert len(set(names)) == len(names)


@pytest.mark.slow  # the page takes a quarter of an hour to write: between two writings it lags behind the table
def test_the_page_shows_every_row_of_the_table_and_flags_only_known_defects():
    lines = verification.lines_of((HERE / "verification.md").read_text(encoding="utf-8")).values()
    wanted = [(case.name, check.quantity, f"{check.exact:.7g}") for case, check in table_rows()]
    assert [line[:3] for line in lines] == wanted, "run tests/verification.py"
    assert {line[0] for line in lines if line[6]} == {case.name for case in cases.CASES if case.defect}


ROW = verification.Row("ball", "mean time", "by hand", 1.0, 1.001, 0.002, 0.001, 0.0, 0.005, 100, 1.0)


@pytest.mark.parametrize(
    ("change", "remark"),
    [
        ({}, ""),
        ({"true": 0.003}, "ABOVE STATED"),
        ({"true": 0.003, "mesh": 0.0015}, ""),
        ({"true": 0.003, "stated": None}, ""),
        ({"true": 0.006, "stated": None}, "ABOVE TARGET"),
        ({"true": 0.006, "stated": 0.01}, "ABOVE TARGET"),
        ({"true": float("nan")}, "NOT A NUMBER"),
    ],
)
def test_rows_above_what_is_stated_or_wanted_are_flagged(change, remark):
    row = replace(ROW, **change)
    assert row.remark == remark
    text = verification.page([verification.cells(row)], fast_sums=False)
    assert f"1 rows, {int(bool(remark))} flagged" in text
    assert (f"**{remark}**" in text) == bool(remark)
    assert verification.lines_of(text) == {("ball", "mean time"): verification.cells(row)}


def test_forcing_the_fast_sums_leaves_nothing_to_the_direct_ones(monkeypatch):
    class Fast:
        def __init__(self, panels, tolerance):
            self.double = self.lifted = self.single = self.double_many = lambda *arguments: "fast"

    for limit in ("FAST_FROM", "FAST_ONCE_FROM", "_FEW"):
        monkeypatch.setattr(sums, limit, getattr(sums, limit))  # put back after the test
    monkeypatch.setattr("bemescape.bem.fmm.FastSums", Fast)
    verification.force_fast_sums()
    corners = np.random.default_rng(0).random((4, 3, 3))
    chosen = sums.far_sums(make_panels(corners))
    used = np.arange(4)
    assert chosen.single(used, used) == chosen.double(used, used) == chosen.lifted(used, used) == "fast"
    assert chosen.double_of_clusters(used, 4) == "fast"


def test_the_average_over_a_head_and_its_neck_follows_from_that_over_the_head():
    """∫u over the neck: A L³/3 + V L²/2, by hand. Both numbers come from the same outside solution, to 1e-5."""
    volume, area, length = 1.0, 0.16, 0.5
    whole = volume * exact.NECK_HEAD + area * length**3 / 3.0 + volume * length**2 / 2.0
    assert whole / (volume + area * length) == pytest.approx(exact.NECK_ALL, rel=1e-5)


def test_disc_windows_in_a_cylinder_follow_foks_function():
    """Fok (1941), coefficients from memory; for a head as long as wide its end adds 3e-4."""
    for a, value in exact.CYLINDER_DISC.items():
        resistance = 4.0 * a * (value - 1.0 / 3.0) / np.pi
        series = 1.0 - 1.40925 * a + 0.33818 * a**3 + 0.06793 * a**5 - 0.02287 * a**6 + 0.03015 * a**7 - 0.01641 * a**8
        assert resistance == pytest.approx(series, abs=5e-4)
