"""Potentials of solutions by surface integrals, and one solver for many right-hand sides."""

import numpy as np
import pytest

import shapes
from bemescape.bem.averages import enclosed_volume
from bemescape.bem.kernels import spread_distance, spread_lifted_distance
from bemescape.bem.moments import SourcePotential, source_potential_at, volume_integral_of_chain
from bemescape.bem.operator import assemble
from bemescape.bem.panels import make_panels
from bemescape.bem.solve import BoundarySolver, solve_boundary


def ball_operator(subdivisions=3, *, share=1.0, resistance=0.0):
    """Ball whose faces above a height are a window: all of them for share = 1."""
    surface = shapes.ball(subdivisions)
    panels = make_panels(surface.vertices[surface.faces])
    window_of = np.where(panels.centroids[:, 2] > 1.0 - 2.0 * share, 0, -1)
    return assemble(panels, window_of, np.where(window_of == 0, resistance, 0.0))


@pytest.fixture(scope="module")
def open_ball():
    return ball_operator()


def square_and_slope(panels):
    """f = |x|² (mean over each panel) and its slope 2x·n, constant on a flat panel; Δf = 6."""
    f = (panels.three_points**2).sum(axis=2).mean(axis=1)
    return f, 2.0 * np.einsum("ij,ij->i", panels.centroids, panels.normals)


def test_the_potential_of_one_is_the_volume_potential(open_ball):
    # Two evaluations of ½ Σ h_j ∫_j G that share only the far field: closed forms at three points against the finer
    # rule for touching panels, 2e-4 apart at most.
    ones = np.ones(len(open_ball.panels))
    potential = SourcePotential(open_ball).of(ones, 0.0 * ones, 0.0)
    np.testing.assert_allclose(potential, open_ball.volume_potential, rtol=3e-4)


def test_the_potential_of_the_squared_radius_on_the_ball(open_ball):
    # ΔP = −r² inside, no source outside: P = 1/4 − r⁴/20, by hand. On the wall 1/5.
    panels = open_ball.panels
    f, slope = square_and_slope(panels)
    points = np.array([[0.0, 0.0, 0.0], [0.5, 0.0, 0.0], [0.0, -0.6, 0.7]])
    exact = 0.25 - (points**2).sum(axis=1) ** 2 / 20.0
    # The icosphere of 1 280 faces differs from the ball by 4e-3 in radius at its corners.
    np.testing.assert_allclose(source_potential_at(panels, f, slope, -6.0, points), exact, rtol=2e-3)
    np.testing.assert_allclose(SourcePotential(open_ball).of(f, slope, -6.0), 0.2, rtol=1e-2)
    mean = panels.areas @ SourcePotential(open_ball).of(f, slope, -6.0) / panels.areas.sum()
    assert mean == pytest.approx(0.2, rel=2e-3)


def test_the_constant_source_enters_the_potential(open_ball):
    # The same f with the wrong Laplacian gives another answer: the term is not idle.
    f, slope = square_and_slope(open_ball.panels)
    centre = np.zeros((1, 3))
    assert source_potential_at(open_ball.panels, f, slope, 0.0, centre)[0] != pytest.approx(0.25, rel=0.1)


def test_the_volume_integral_of_a_chain_of_polynomials():
    # f = |x|², Δf = 6; m = −|x|⁴/20, Δm = −f: ∫m over the ball is −(1/20)·4π/7. Both are nearly constant on the
    # panels of a ball, so that what is left is its mesh.
    panels = ball_operator(4).panels
    f, slope = square_and_slope(panels)
    m, m_slope = -(f**2) / 20.0, -f * slope / 10.0
    found = volume_integral_of_chain(panels, m, m_slope, 1.0, f, slope, -6.0)
    assert found == pytest.approx(-4.0 * np.pi / 140.0, rel=2e-3)


@pytest.mark.parametrize("tilt", [0.0, 0.7, 2.0])
def test_mean_distances_of_far_panels_are_right_to_second_order(tilt):
    """Against 400 × 400 points on two triangles about five sizes apart: a hundred times better than the centroids."""
    turn = np.array([[1.0, 0.0, 0.0], [0.0, np.cos(tilt), -np.sin(tilt)], [0.0, np.sin(tilt), np.cos(tilt)]])
    angles = 2.0 * np.pi * np.arange(3) / 3.0
    corners = np.column_stack([np.cos(angles), np.sin(angles), np.zeros(3)])
    source = make_panels((corners @ turn.T)[None])
    target = make_panels((corners + np.array([3.0, 5.0, 4.0]))[None])
    n = 20
    s, t = np.meshgrid((np.arange(n) + 0.5) / n, (np.arange(n) + 0.5) / n)
    s = np.sqrt(s.ravel())
    weights = np.column_stack([1.0 - s, s * (1.0 - t.ravel()), s * t.ravel()])
    x, y = weights @ target.corners[0], weights @ source.corners[0]
    gap = x[:, None] - y[None]
    distance = np.linalg.norm(gap, axis=2)
    lifted = gap @ source.normals[0]
    between = target.centroids[0] - source.centroids[0]
    ht, hs = float(target.normals[0] @ between), float(source.normals[0] @ between)
    cosine = float(target.normals[0] @ source.normals[0])
    inverse = 1.0 / np.sqrt(between @ between + source.spread[0])
    spreads = float(target.spread[0]), float(source.spread[0])
    mean = spread_distance(ht, hs, *spreads, inverse)
    mean_lifted = spread_lifted_distance(ht, hs, cosine, *spreads, inverse)
    assert abs(mean - distance.mean()) < 0.02 * abs(np.linalg.norm(between) - distance.mean())
    exact = (lifted * distance).mean()
    assert abs(mean_lifted - exact) < 0.02 * abs(hs * np.linalg.norm(between) - exact)


def test_second_moment_of_the_open_ball(open_ball):
    # 4/315, by hand; discretisation error 1.2e-3 at 1 280 panels, falling with their size.
    panels = open_ball.panels
    solver = BoundarySolver(open_ball)
    u = solver.solve(open_ball.volume_potential)
    m = solver.solve(2.0 * SourcePotential(open_ball).of(u.u, u.q, 1.0))
    mean = volume_integral_of_chain(panels, m.u, m.q, 2.0, u.u, u.q, 1.0) / enclosed_volume(panels)
    assert mean == pytest.approx(4.0 / 315.0, rel=2.5e-3)


def test_a_prepared_solver_answers_as_one_made_for_the_question():
    operator = ball_operator(2, share=0.2)
    solver = BoundarySolver(operator, tolerance=1e-8)
    solver.solve(np.ones(len(operator.panels)))
    again = solver.solve(operator.volume_potential)
    alone = solve_boundary(operator, operator.volume_potential, tolerance=1e-8)
    np.testing.assert_array_equal(again.u, alone.u)
    np.testing.assert_array_equal(again.q, alone.q)


@pytest.mark.parametrize("resistance", [0.0, 0.7])
def test_one_given_on_every_window_is_one_everywhere(resistance):
    # Constants are in the null space of ½ + K to rounding, so the solution is exact up to the iteration.
    operator = ball_operator(2, share=0.2, resistance=resistance)
    solution = BoundarySolver(operator, tolerance=1e-8).solve(
        np.zeros(len(operator.panels)), given=operator.is_window.astype(float)
    )
    np.testing.assert_allclose(solution.u, 1.0, atol=1e-6)
    np.testing.assert_allclose(solution.q, 0.0, atol=1e-5)
