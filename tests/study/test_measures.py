"""Measures of shape against closed forms; no case is solved."""

import numpy as np
import pytest

import shapes
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.study.measures import longest_geodesic_um, narrowest_neck_radius_um, sphericity


def result_on(surface, time, *, window):
    """A result with given times (m,) and one window of the faces `window` (m,)."""
    area = float(surface.areas[window].sum())
    return EscapeResult(
        name="drawn",
        vertices=surface.vertices,
        faces=surface.faces,
        parent_face=np.arange(len(surface.faces)),
        panel_window=np.where(window, 0, -1),
        panel_time_s=np.where(window, 0.0, time),
        panel_exit_density_per_um2=np.where(window, 1.0 / area, 0.0),
        windows=(WindowResult("end", area, 1.0),),
        diffusion_um2_s=1.0,
        mean_time_s=1.0,
        relative_error=0.01,
        target=0.01,
        target_met=True,
        balance=0.0,
        residuals=(1e-6,),
        levels=(),
        wall_s=0.0,
    )


def test_sphericity_of_a_ball_is_one_and_of_a_tetrahedron_its_closed_form():
    assert sphericity(4.0 / 3.0 * np.pi, 4.0 * np.pi) == pytest.approx(1.0, rel=1e-12)
    # Regular tetrahedron of edge 1: V = √2/12, A = √3, so that Ψ = π^(1/3) (6 V)^(2/3) / A = 0.6711 (Wadell's ratio).
    assert sphericity(np.sqrt(2.0) / 12.0, np.sqrt(3.0)) == pytest.approx(0.67114, abs=1e-5)


def test_the_longest_way_along_a_ball_is_half_its_girth():
    """π R; paths across pairs of faces are up to a few per cent longer than the true ones (measured here: +2 %)."""
    ball = shapes.ball(4, radius=2.0)
    assert longest_geodesic_um(ball.vertices, ball.faces) == pytest.approx(2.0 * np.pi, rel=0.04)


def test_the_longest_way_along_a_box_with_a_neck_runs_from_a_far_corner_to_the_end_of_the_neck():
    """Unfolded, at least the straight line through the air, and at most down the edge and along the neck."""
    surface = shapes.box_with_neck(side=0.4, length=2.0)
    far = np.linalg.norm(np.array([0.7, 0.7, 3.0]))
    assert far < longest_geodesic_um(surface.vertices, surface.faces) < 1.0 + np.hypot(0.7, 0.7) + 2.0 + 0.4


def test_the_neck_of_a_box_is_found_behind_a_wider_mouth():
    """A cube with a square neck of side 0.4: √(0.16 / π). The time grows with the distance from the neck's end."""
    surface = shapes.box_with_neck(side=0.4, length=0.5)
    centroids = surface.vertices[surface.faces].mean(axis=1)
    window = np.asarray(surface.face_data["label"]) == 1
    found = narrowest_neck_radius_um(result_on(surface, 1.5 - centroids[:, 2], window=window))
    assert found == pytest.approx(np.sqrt(0.16 / np.pi), rel=1e-6)


def test_a_waist_between_the_bulk_and_a_wide_window_is_the_neck():
    """A tube along z whose radius is 0.2 in the middle and 0.5 at the window: rings of 32-gons of equal areas."""
    heights = np.linspace(0.0, 4.0, 81)
    radii = np.where(heights < 1.0, 0.5 - 0.3 * heights, np.minimum(0.2 + 0.6 * (heights - 1.0), 1.2))
    around = 32
    outwards = np.sqrt(2.0 * np.pi / around / np.sin(2.0 * np.pi / around))
    phi = 2.0 * np.pi * np.arange(around) / around
    vertices = [
        outwards * radius * np.array([np.cos(p), np.sin(p), 0.0]) + [0.0, 0.0, height]
        for height, radius in zip(heights, radii, strict=True)
        for p in phi
    ]
    vertices += [np.array([0.0, 0.0, 0.0]), np.array([0.0, 0.0, 4.0])]
    faces, labels = [], []
    for k in range(around):
        after = (k + 1) % around
        for ring in range(len(heights) - 1):
            a, b, c, d = ring * around + k, ring * around + after, (ring + 1) * around + after, (ring + 1) * around + k
            faces += [(a, b, c), (a, c, d)]
            labels += [0, 0]
        faces.append((len(vertices) - 2, after, k))
        labels.append(1)
        faces.append((len(vertices) - 1, (len(heights) - 1) * around + k, (len(heights) - 1) * around + after))
        labels.append(0)
    from bemescape.surface.surface import Surface

    surface = Surface(np.array(vertices), np.array(faces))
    centroids = surface.vertices[surface.faces].mean(axis=1)
    result = result_on(surface, centroids[:, 2], window=np.array(labels) == 1)
    # The waist lies on a ring; levels of time may pass up to half a ring beside it, where the radius is 4 % larger.
    assert narrowest_neck_radius_um(result) == pytest.approx(0.2, rel=0.05)
