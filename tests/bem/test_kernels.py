"""Closed-form panel integrals against adaptive quadrature (scipy) and identities."""

import numpy as np
import pytest
import trimesh
from scipy.integrate import dblquad

from bemescape.bem.kernels import (
    panel_integrals,
    self_mean_inverse_distance,
    spread_dipole,
    spread_inverse,
    spread_lifted,
)

TRIANGLE = np.array([[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.3, 0.7, 0.0]])
NORMAL = np.array([0.0, 0.0, 1.0])


def seen_from(point, triangle=TRIANGLE, normal=NORMAL):
    return panel_integrals(*(triangle - point).ravel(), *normal)


def by_quadrature(point):
    """∫ 1/r and ∫ h/r³ over TRIANGLE with scipy's adaptive dblquad, on the unit square mapped to it."""
    a, b, c = TRIANGLE
    double_area = np.linalg.norm(np.cross(b - a, c - a))

    def integrand(power, s, t):
        y = a + t * ((1 - s) * (b - a) + s * (c - a))
        r = np.linalg.norm(y - point)
        return double_area * t * ((y - point)[2] if power == 3 else 1.0) / r**power

    return tuple(
        dblquad(lambda s, t, power=power: integrand(power, s, t), 0, 1, 0, 1, epsabs=1e-12)[0] for power in (1, 3)
    )


@pytest.mark.parametrize("point", [(0.2, 0.3, 0.5), (0.4, 0.2, -0.3), (2.0, 1.0, 0.1), (0.4, 0.2, 0.02)])
def test_panel_integrals_match_adaptive_quadrature(point):
    # dblquad converges to about 1e-9 close to the panel.
    np.testing.assert_allclose(seen_from(np.array(point)), by_quadrature(np.array(point)), rtol=1e-8)


def test_the_potential_on_an_edge_and_on_a_corner_is_the_limit_from_outside():
    for place in (TRIANGLE[0], 0.5 * (TRIANGLE[0] + TRIANGLE[1])):
        on, beside = seen_from(place)[0], seen_from(place + 1e-7 * NORMAL)[0]
        assert on == pytest.approx(beside, rel=1e-5)  # the slope towards an edge is logarithmic: 1e-7·ln(1e7)


def test_the_solid_angle_in_the_panels_plane_is_the_mean_of_its_two_limits():
    inside = TRIANGLE.mean(axis=0)
    assert seen_from(inside)[1] == 0.0
    assert seen_from(inside - 1e-9 * NORMAL)[1] == pytest.approx(2 * np.pi, rel=1e-6)
    assert seen_from(inside + 1e-9 * NORMAL)[1] == pytest.approx(-2 * np.pi, rel=1e-6)


def test_solid_angles_of_a_closed_surface_sum_to_4_pi_inside_and_0_outside():
    mesh = trimesh.creation.box((1.0, 2.0, 0.5))
    for point, expected in (((0.1, 0.3, 0.2), 4 * np.pi), ((0.1, 0.3, 0.9), 0.0)):
        total = sum(
            seen_from(np.array(point), triangle, normal)[1]
            for triangle, normal in zip(mesh.triangles, mesh.face_normals, strict=True)
        )
        assert total == pytest.approx(expected, abs=1e-12)  # rounding of twelve arctangents


def test_the_self_term_matches_the_average_of_the_potential():
    a, b, c = TRIANGLE
    sides = np.linalg.norm([b - a, c - b, a - c], axis=1)
    area = 0.5 * np.linalg.norm(np.cross(b - a, c - a))
    # Average of the closed-form potential over the panel by a graded product rule (Duffy: t toward each corner).
    nodes, weights = np.polynomial.legendre.leggauss(40)
    nodes, weights = 0.5 * (nodes + 1.0), 0.5 * weights
    middle = TRIANGLE.mean(axis=0)
    total = 0.0
    for first, second in ((a, b), (b, c), (c, a)):
        part = 0.5 * np.linalg.norm(np.cross(first - middle, second - middle))
        for t, wt in zip(nodes, weights, strict=True):
            radius, jacobian = 1.0 - t**3, 3.0 * t**2 * (1.0 - t**3)  # points crowd towards the edge
            for s, ws in zip(nodes, weights, strict=True):
                point = middle + radius * ((1 - s) * first + s * second - middle)
                total += 2.0 * part * wt * ws * jacobian * seen_from(point)[0]
    assert self_mean_inverse_distance(*sides, area) == pytest.approx(total / area, rel=1e-6)


@pytest.mark.parametrize(("kernel", "function"), [
    (spread_inverse, lambda n, d: 1.0 / np.linalg.norm(d)),
    (spread_lifted, lambda n, d: n @ d / np.linalg.norm(d)),
    (spread_dipole, lambda n, d: n @ d / np.linalg.norm(d) ** 3),
])  # fmt: skip
def test_second_moments_leave_a_third_order_error_in_the_panel_size(kernel, function):
    """Means over two tilted equilateral panels by a fine rule: halving the panels divides the rest by 8."""
    rng = np.random.default_rng(1)
    frames = [np.linalg.qr(rng.normal(size=(3, 3)))[0] for _ in range(2)]
    offset = np.array([1.0, 0.4, -0.7])
    corners = np.array([[np.cos(a), np.sin(a), 0.0] for a in (0.3, 0.3 + 2 * np.pi / 3, 0.3 + 4 * np.pi / 3)])
    # Degree-4 symmetric rule with 6 points: Dunavant (1985), doi:10.1002/nme.1620210612.
    g1, g2 = 0.445948490915965, 0.091576213509771
    w1, w2 = 0.223381589678011, 0.109951743655322
    rows = [(1 - 2 * g, g, g) for g in (g1, g2)]
    barycentric = np.array([np.roll(row, k) for row in rows for k in range(3)])
    weights = np.array([w1] * 3 + [w2] * 3)
    errors = []
    for size in (0.02, 0.01):
        targets = offset + barycentric @ (size * corners @ frames[0].T)
        sources = barycentric @ (size * corners @ frames[1].T)
        n_target, n_source = frames[0][:, 2], frames[1][:, 2]
        mean = sum(
            wt * ws * function(n_source, t - s)
            for t, wt in zip(targets, weights, strict=True)
            for s, ws in zip(sources, weights, strict=True)
        )
        spread = size**2 * 3.0 / 24.0  # three corners at distance `size`
        inverse = 1.0 / np.sqrt(offset @ offset + spread)
        value = kernel_value(kernel, n_target @ offset, n_source @ offset, n_target @ n_source, spread, inverse)
        errors.append(abs(value - mean))
    assert errors[0] / errors[1] == pytest.approx(8.0, rel=0.15)  # the next order adds a few per cent at this size


def kernel_value(kernel, ht, hs, tilt, spread, inverse):
    if kernel is spread_inverse:
        return kernel(ht, hs, spread, spread, inverse)
    return kernel(ht, hs, tilt, spread, spread, inverse)
