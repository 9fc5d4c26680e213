"""Coarser meshes with the same rims."""

import numpy as np
import pytest
import trimesh

import shapes
from bemescape.windows.coarsen import coarsened
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.rims import rim_edges
from bemescape.windows.window import Window


@pytest.fixture(scope="module")
def fine():
    body = shapes.ball(3)
    return graded(place_windows(body, [Window.disc("cap", centre=(0, 0, 1), radius=0.5)]), Fineness(24.0, 5, 3000.0))


def rim_length(vertices, faces, window_of):
    edges, _ = rim_edges(faces, window_of)
    return np.linalg.norm(vertices[edges[:, 0]] - vertices[edges[:, 1]], axis=1).sum()


def test_the_coarse_mesh_has_the_count_the_volume_and_the_rim_and_is_closed(fine):
    coarse = coarsened(fine.vertices, fine.faces, fine.window_of, 1000)
    assert len(fine.faces) > 3000 >= 3 * len(coarse.faces) > 2700
    mesh = trimesh.Trimesh(coarse.vertices, coarse.faces, process=False)
    assert mesh.is_watertight
    assert mesh.is_winding_consistent
    assert mesh.euler_number == 2
    assert coarse.is_closed
    # The lost volume is given back to the rounding of a few Newton steps.
    assert mesh.volume == pytest.approx(shapes.BALL_VOLUME, rel=1e-9)
    assert abs(coarse.volume_change) < 1e-9
    # Untouched, not merely close.
    assert rim_length(coarse.vertices, coarse.faces, coarse.window_of) == pytest.approx(
        rim_length(fine.vertices, fine.faces, fine.window_of), rel=1e-12
    )
    # What is left of a curved cap between its rim and fewer vertices.
    assert coarse.window_change < 0.03


def test_panels_stay_small_at_the_rim(fine):
    coarse = coarsened(fine.vertices, fine.faces, fine.window_of, 1000)
    corners = coarse.vertices[coarse.faces]
    longest = np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max(axis=1)
    middle = corners.mean(axis=1)
    away = np.abs(np.linalg.norm(middle - (0, 0, 1), axis=1) - 0.5)
    assert 3.0 * np.median(longest[away < 0.1]) < np.median(longest[away > 1.0])


def test_a_box_keeps_its_shape_exactly():
    body = shapes.box(cells=10, label=lambda centre: int(centre[2] > 0.999))
    coarse = coarsened(body.vertices, body.faces, np.where(body.face_data["label"] == 1, 0, -1), 300)
    assert len(coarse.faces) <= 300
    # All collapses within the faces cost nothing: none that would cut a corner is ever needed.
    assert trimesh.Trimesh(coarse.vertices, coarse.faces, process=False).area == pytest.approx(6.0, rel=1e-12)


def test_rims_give_way_only_when_nothing_else_is_left():
    body = shapes.box(cells=10, label=lambda centre: int(centre[2] > 0.999 and np.abs(centre[:2] - 0.5).max() < 0.2))
    window_of = np.where(body.face_data["label"] == 1, 0, -1)
    few = coarsened(body.vertices, body.faces, window_of, 36)
    many = coarsened(body.vertices, body.faces, window_of, 400)
    assert len(few.faces) <= 36
    assert len(rim_edges(few.faces, few.window_of)[0]) < len(rim_edges(many.faces, many.window_of)[0]) == 16
