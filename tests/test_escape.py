"""The main job against exact and published values, at the default target of 0.5 %.

Cases and values stand in `verification_cases` and `exact`; `verification.md` shows what came out. Every case asks two
things: the true error is below the target, and below the error that the result states. The stated error is that of the
polyhedron; where a curved body is meshed, its own error is given beside the case: balls are icospheres scaled to the
exact volume, which leaves second-order deviations of the shape only.
"""

import numpy as np
import pytest

import exact
import shapes
import verification_cases as cases
from bemescape import (
    AccuracyError,
    ConvergenceError,
    SettingsError,
    SolverSettings,
    Surface,
    SurfaceError,
    WindowError,
    solve_escape,
)
from bemescape.bem.averages import volume_integral
from bemescape.results.prepared import prepare_mesh
from verification_cases import AXIS, cap, corner_square, labelled


def slow(*values):
    return pytest.param(*values, marks=pytest.mark.slow)


def assert_within_both_errors(check, results, *, mesh=0.0):
    true, stated = check.true_error(*results), check.stated_error(*results)
    assert true <= check.limit, f"{check.quantity}: true {true:.2e}"
    if stated is not None:
        assert true <= stated + mesh + check.mesh, f"{check.quantity}: true {true:.2e}, stated {stated:.2e}"


def marks(case):
    known = [pytest.mark.xfail(reason=case.defect)] if case.defect else []
    return known + ([] if case.quick else [pytest.mark.slow])


@pytest.mark.parametrize("case", [pytest.param(case, id=case.name, marks=marks(case)) for case in cases.CASES])
def test_exact_and_published_values_are_within_the_target_and_the_stated_error(case):
    result = case.solve()
    assert result.target_met
    for check in case.checks:
        assert_within_both_errors(check, (result,), mesh=case.mesh)


@pytest.mark.slow
@pytest.mark.parametrize("comparison", cases.COMPARISONS, ids=str)
def test_what_is_known_of_several_cases_together(comparison):
    results = tuple(case.solve() for case in comparison.cases)
    assert_within_both_errors(comparison.check, results, mesh=sum(case.mesh for case in comparison.cases))


def test_the_dual_series_solution_reproduces_the_table():
    for eps, value in exact.CAP_MEAN.items():
        # Nyström with a logarithm: 1e-5 up to eps = 1, 2e-4 at eps = 2
        assert exact.cap_mean(eps) == pytest.approx(value, rel=2e-5 if eps <= 1.0 else 3e-4)


@pytest.mark.parametrize(
    ("open_wall", "value"),
    [(1, exact.shell_mean_inner_open(1.0, 2.0)), slow(2, exact.shell_mean_outer_open(1.0, 2.0))],
)
def test_a_closed_shell_with_its_inner_wall_as_target_or_as_obstacle(open_wall, value):
    # The inner sphere has 320 and 1 280 faces; its capacity is off by a second-order amount, removed by the sequence.
    coarse, fine = (solve_escape(shapes.shell(subdivisions=n), [labelled(open_wall)], 1.0) for n in (3, 4))
    extrapolated = (4.0 * fine.mean_time_s - coarse.mean_time_s) / 3.0
    assert abs(fine.mean_time_s / value - 1.0) <= 0.005
    assert abs(extrapolated / value - 1.0) <= fine.relative_error


@pytest.fixture(scope="module")
def capped_ball():
    surface = shapes.ball(3)
    return solve_escape(surface, [cap(surface, 0.5)], 1.0)


def test_centre_minus_mean_of_a_ball_is_a_tenth_of_its_radius_squared(capped_ball):
    centre = capped_ball.time_at([[0.0, 0.0, 0.0]])[0]
    last_mean = capped_ball.levels[-1]["mean_time_s"]
    # u + r²/6 is harmonic whatever the window: the difference does not feel the rims. Shape error 3e-4 of the radius².
    assert centre - last_mean == pytest.approx(exact.ball_centre_minus_mean(1.0), rel=2e-3)


def test_times_inside_and_on_the_wall_match_the_dual_series(capped_ball):
    heights = np.array(sorted(exact.CAP_AXIS_05))
    values = capped_ball.time_at(heights[:, None] * AXIS)
    expected = np.array([exact.CAP_AXIS_05[z] for z in heights])
    # The stated error is of the mean (1.97); near the window the time itself is small.
    np.testing.assert_allclose(values, expected, atol=0.005 * exact.CAP_MEAN[0.5])
    opposite = capped_ball.time_at(-0.999 * AXIS[None] * np.linalg.norm(capped_ball.vertices, axis=1).mean())
    assert opposite[0] == pytest.approx(exact.CAP_ANTIPODE[0.5], rel=0.005)
    wall = capped_ball.panel_centroids[np.argmin(capped_ball.panel_centroids @ AXIS)]
    assert capped_ball.time_at([wall])[0] == pytest.approx(exact.CAP_ANTIPODE[0.5], rel=0.005)


def test_points_outside_are_named_or_nan(capped_ball):
    with pytest.raises(
        SettingsError, match=r"point 2 of 2 at \(0, 0, 1\.5\) µm lies outside the volume, about 0\.[45]"
    ):
        capped_ball.time_at([[0, 0, 0], [0, 0, 1.5]])
    values = capped_ball.time_at([[0, 0, 0], [0, 0, 1.5]], outside="nan")
    assert np.isfinite(values[0])
    assert np.isnan(values[1])


def test_outflow_balances_the_volume_at_the_default_target(capped_ball):
    # Nothing imposes it: V/D must leave (divergence theorem).
    assert abs(capped_ball.balance) < 1e-4
    density = capped_ball.panel_exit_density_per_um2 @ capped_ball.panel_areas_um2
    assert density == pytest.approx(1.0 + capped_ball.balance, rel=1e-12)


def test_doubling_d_halves_every_time_and_lengths_scale_with_their_square():
    surface = shapes.box(cells=6, label=corner_square(0.34))
    one = solve_escape(surface, [labelled()], 1.0)
    fast = solve_escape(surface, [labelled()], 2.0)
    large = solve_escape(Surface(3.0 * surface.vertices, surface.faces, surface.face_data), [labelled()], 1.0)
    # Same panels, same equations: only rounding differs (single-precision sums).
    np.testing.assert_allclose(fast.panel_time_s, one.panel_time_s / 2.0, rtol=1e-5, atol=1e-6)
    assert large.mean_time_s == pytest.approx(9.0 * one.mean_time_s, rel=1e-4)


def test_the_error_falls_nearly_in_proportion_to_the_panels():
    """Even panels on a prism, no grading: piecewise constants beside right-angled edges, order 0.8 in panels."""
    panels, errors = [], []
    for cells in (6, 12, 24):
        surface = shapes.box(cells=cells, label=lambda c: int(c[2] < 1e-9))
        window_of = surface.face_data["label"] - 1
        prepared = prepare_mesh(surface.vertices, surface.faces, window_of, np.zeros(1), tolerance=1e-6)
        solution = prepared.solve(prepared.solver.operator.volume_potential, "iterating")
        mean = volume_integral(prepared.panels, solution.u, solution.q, 1.0) / prepared.volume
        panels.append(len(surface.faces))
        errors.append(abs(mean / exact.prism_mean(1.0) - 1.0))
    orders = -np.diff(np.log(errors)) / np.diff(np.log(panels))
    # Measured 0.80 and 0.86; 1 is second order in the panel size, 0.5 would be first.
    assert orders.min() > 0.7
    assert errors[-1] < 2.5e-3


def test_the_slow_region_of_a_capped_ball_lies_opposite_and_knows_its_way(capped_ball):
    regions = capped_ball.slow_regions()
    assert len(regions) == 1
    region = regions.regions[0]
    wall = capped_ball.panel_areas_um2[capped_ball.panel_window < 0].sum()
    assert region.area_um2 == pytest.approx(0.1 * wall, rel=0.02)
    centre = np.array(region.centre_um)
    assert centre @ AXIS / np.linalg.norm(centre) < -0.98
    # Great-circle distance from the antipode to the rim: π − 0.5. Paths along mesh edges are a few per cent longer.
    assert region.distance_to_window_um == pytest.approx(np.pi - 0.5, rel=0.06)
    assert region.nearest_window == "cap"


def test_the_rule_of_thumb_is_near_for_a_small_window(capped_ball):
    thumb = capped_ball.summary.rule_of_thumb.mean_time_s
    area = capped_ball.windows[0].area_um2
    assert thumb == pytest.approx(shapes.BALL_VOLUME / (4.0 * np.sqrt(area / np.pi)), rel=1e-3)
    assert 0.9 < thumb / capped_ball.mean_time_s < 1.1  # −3.5 % at 0.2, +6 % at 0.5: exact.CAP_MEAN


def test_the_same_input_gives_the_same_answer():
    surface = shapes.box(cells=6, label=corner_square(0.34))
    first, second = (solve_escape(surface, [labelled()], 1.0, target=0.05).mean_time_s for _ in range(2))
    assert first == pytest.approx(second, rel=1e-10)


def test_start_points_get_their_own_times():
    surface = shapes.box((1.0, 0.7, 2.0), 6, label=lambda c: int(c[2] < 1e-9))
    result = solve_escape(surface, [labelled()], 1.0, start={"middle": (0.5, 0.35, 1.0), "end": (0.5, 0.35, 1.95)})
    # u = z (2L − z)/2, elementary.
    assert result.start["middle"] == pytest.approx(1.0 * 3.0 / 2.0, rel=0.005)
    assert result.start["end"] == pytest.approx(1.95 * 2.05 / 2.0, rel=0.005)


def test_the_panel_budget_ends_the_refinement_and_is_said():
    surface = shapes.ball(3)
    result = solve_escape(surface, [cap(surface, 0.3)], 1.0, target=1e-3, settings=SolverSettings(max_panels=7000))
    assert not result.target_met
    assert result.relative_error > 1e-3
    assert any("panel budget of 7000" in note for note in result.notes)


def test_a_body_without_a_window_is_named():
    one, other = shapes.box(cells=2, label=corner_square(0.5)), shapes.box(cells=2)
    both = Surface(
        np.concatenate([one.vertices, other.vertices + np.array([5.0, 0.0, 0.0])]),
        np.concatenate([one.faces, other.faces + len(one.vertices)]),
        {"label": np.concatenate([one.face_data["label"], np.zeros(len(other.faces))])},
    )
    with pytest.raises(WindowError, match=r"separate body around \(5\.5, 0\.5, 0\.5\) µm .* has no window"):
        solve_escape(both, [labelled()], 1.0)


@pytest.mark.parametrize(("change", "error", "message"), [
    ({"diffusion": "-1 um^2/s"}, SettingsError, "diffusion coefficient is -1"),
    ({"diffusion": "fast"}, SettingsError, "'fast'"),
    ({"target": 0.0}, SettingsError, "target error is 0"),
    ({"start": {"far": (9.0, 0.0, 0.0)}}, SettingsError, r"start point 'far' at \(9, 0, 0\) µm lies outside"),
    ({"start": {"odd": (0.0, np.nan, 0.0)}}, SettingsError, "start point 'odd'"),
    ({"windows": []}, WindowError, "no window is given"),
])  # fmt: skip
def test_wrong_input_is_refused_before_anything_is_solved(change, error, message):
    arguments = {"windows": [labelled()], "diffusion": 1.0, **change}
    with pytest.raises(error, match=message):
        solve_escape(shapes.box(cells=4, label=corner_square(0.5)), **arguments)


def test_an_open_surface_is_refused():
    box = shapes.box(cells=4, label=corner_square(0.5))
    torn = Surface(box.vertices, box.faces[:-1], {"label": box.face_data["label"][:-1]})
    with pytest.raises(SurfaceError, match=r"cannot be solved: .*open"):
        solve_escape(torn, [labelled()], 1.0)


def test_a_result_that_fails_its_balance_is_not_handed_out():
    surface = shapes.box(cells=4, label=corner_square(0.5))
    with pytest.raises(AccuracyError, match=r"the windows drain [01][.\d]* of V/D \(limit 1 ± 1e-09\)"):
        solve_escape(surface, [labelled()], 1.0, settings=SolverSettings(balance_limit=1e-9))


def test_an_unreachable_tolerance_raises_with_its_residuals():
    surface = shapes.box(cells=4, label=corner_square(0.5))
    with pytest.raises(ConvergenceError, match="limit 1e-30") as caught:
        solve_escape(surface, [labelled()], 1.0, settings=SolverSettings(tolerance=1e-30))
    assert len(caught.value.residuals) > 10
