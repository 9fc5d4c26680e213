"""The operator against identities that hold on any closed polyhedron, and against its own dense form."""

import numpy as np
import pytest

import shapes
from bemescape.bem.averages import enclosed_volume, volume_integral
from bemescape.bem.operator import assemble
from bemescape.bem.panels import make_panels
from bemescape.bem.solve import solve_boundary
from bemescape.errors import ConvergenceError
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.window import Window


@pytest.fixture(scope="module")
def operator():
    """A ball with one graded cap: panels of very different size and shape."""
    surface = shapes.ball(3)
    window = Window.disc("cap", centre=shapes.on_ball(surface, (0.3, 0.5, 0.8)), radius=0.4)
    mesh = graded(place_windows(surface, [window]), Fineness(16.0, 4, 800.0))
    panels = make_panels(mesh.vertices[mesh.faces])
    return assemble(panels, mesh.window_of[panels.order], np.zeros(len(panels)))


def test_a_constant_is_in_the_null_space_of_half_plus_k(operator):
    image = operator.half_plus_double(np.ones(len(operator.panels)))
    # The diagonal is set so; what is left is single-precision rounding of the same sums.
    assert np.abs(image).max() < 2e-6


def test_row_sums_before_the_correction_are_already_minus_one_half(operator):
    # Σ solid angles: exact −½. The correction on the diagonal only repairs quadrature of far and touching pairs.
    row_error = np.abs(operator.diagonal - operator.near_double.diagonal() * 0.0 - 0.5)
    assert np.average(row_error, weights=operator.panels.areas) < 2e-4


def test_green_s_identity_holds_for_a_linear_function(operator):
    """u = x is harmonic: ½u + K u = V ∂u/∂n. Piecewise constants leave an error of second order."""
    panels = operator.panels
    everything = assemble(panels, np.zeros(len(panels), np.int64), np.zeros(len(panels)))
    for axis in range(3):
        u, q = panels.centroids[:, axis], panels.normals[:, axis]
        gap = everything.half_plus_double(u) - everything.single(q)
        error = np.sqrt(panels.areas @ gap**2 / panels.areas.sum())
        assert error < 2.5e-3  # measured 1.5e-3 at 2 000 panels, against |u| ~ 0.6


def test_the_volume_potential_of_a_ball_is_one_third_minus_r_squared_over_six(operator):
    # ∫_ball G dy = R²/2 − r²/6 (elementary). The polyhedron's own deviation from the ball is about 1e-3.
    r2 = (operator.panels.three_points**2).sum(axis=2).mean(axis=1)
    np.testing.assert_allclose(operator.volume_potential, 0.5 - r2 / 6.0, rtol=1.5e-3)


def test_clusters_in_one_pass_equal_one_pass_each(operator):
    wall = np.flatnonzero(~operator.is_window)
    cluster_of = np.full(len(operator.panels), -1)
    cluster_of[wall] = np.arange(len(wall)) % 5
    together = operator.half_plus_double_of_clusters(cluster_of, 5)
    for cluster in range(5):
        alone = operator.half_plus_double((cluster_of == cluster).astype(float))
        np.testing.assert_allclose(together[:, cluster], alone, atol=2e-6)  # single precision


def test_deflation_changes_the_iterations_but_not_the_solution(operator):
    wall = ~operator.is_window
    clusters = np.where(wall, (operator.panels.centroids[:, 2] > 0).astype(int), -1)
    plain = solve_boundary(operator, operator.volume_potential, tolerance=1e-8)
    deflated = solve_boundary(operator, operator.volume_potential, tolerance=1e-8, cluster_of=clusters)
    scale = np.abs(plain.u).max()
    assert np.abs(plain.u - deflated.u).max() < 1e-5 * scale
    assert plain.residuals != deflated.residuals


def test_residuals_reported_are_residuals_of_the_equation(operator):
    solution = solve_boundary(operator, operator.volume_potential, tolerance=1e-6)
    window = operator.is_window
    gap = operator.half_plus_double(solution.u) - operator.single(solution.q[window]) - operator.volume_potential
    areas = operator.panels.areas
    true = np.sqrt(areas @ gap**2) / np.sqrt(areas @ operator.volume_potential**2)
    # Single-precision products leave a floor of about 1e-6 between the recurrence and the true residual.
    assert true < 3e-6
    assert np.all(np.diff(solution.residuals) < 0)


def test_too_few_iterations_raise_with_the_residuals(operator):
    with pytest.raises(ConvergenceError, match="after 2 iterations") as caught:
        solve_boundary(operator, operator.volume_potential, tolerance=1e-12, most_iterations=2)
    assert len(caught.value.residuals) == 2


def test_volume_integrals_are_exact_for_a_quadratic():
    """∫ u over a box for u = −z²/2 (Δu = −1), from boundary values averaged over each panel."""
    panels = make_panels((lambda s: s.vertices[s.faces])(shapes.box((1.0, 0.8, 1.5), 4)))
    u = -0.5 * (panels.three_points[:, :, 2] ** 2).mean(axis=1)
    q = -panels.normals[:, 2] * panels.centroids[:, 2]
    assert enclosed_volume(panels) == pytest.approx(1.2, rel=1e-12)
    # On flat faces ∂φ/∂n is constant, so panel averages are all the formula needs: exact but for rounding.
    assert volume_integral(panels, u, q, 1.0) == pytest.approx(-0.5 * 1.2 * 1.5**2 / 3.0, rel=1e-10)
