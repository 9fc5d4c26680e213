import dataclasses

import numpy as np
import pytest
import trimesh

from bemescape.viz.shapes import (
    border_edges,
    corner_normals,
    corner_values,
    crossings,
    dashes,
    principal_axes,
    standard_view,
)


@pytest.fixture(scope="module")
def box():
    mesh = trimesh.creation.box(extents=(3.0, 2.0, 1.0)).subdivide().subdivide()
    return np.asarray(mesh.vertices), np.asarray(mesh.faces, dtype=np.int64), np.asarray(mesh.face_normals)


def test_the_rim_of_one_side_of_a_box_is_its_four_edges(box):
    vertices, faces, normals = box
    # Two subdivisions cut every edge of the box into 4: 16 pieces around a side.
    edges = border_edges(faces, np.where(normals[:, 2] > 0.5, 0, -1))
    assert len(edges) == 16
    assert np.linalg.norm(np.diff(vertices[edges], axis=1), axis=-1).sum() == pytest.approx(2 * (3.0 + 2.0))


def test_two_windows_that_share_an_edge_have_a_rim_between_them(box):
    vertices, faces, normals = box
    group = np.where(normals[:, 2] > 0.5, 0, np.where(normals[:, 0] > 0.5, 1, -1))
    length = np.linalg.norm(np.diff(vertices[border_edges(faces, group)], axis=1), axis=-1).sum()
    # Both sides' edges, 10 and 6 µm, of which the shared one (2 µm) counts once.
    assert length == pytest.approx(10.0 + 6.0 - 2.0)


def test_one_group_has_no_border(box):
    assert border_edges(box[1], np.zeros(len(box[1]), dtype=np.int64)).shape == (0, 2)


def test_averaging_to_corners_keeps_a_constant_and_does_not_leak_into_windows(box):
    _, faces, normals = box
    window = normals[:, 2] > 0.5
    areas = np.random.default_rng(1).uniform(0.5, 2.0, len(faces))
    corners = corner_values(faces, np.where(window, 0.0, 3.0), areas, window.astype(np.int64))
    assert corners[window] == pytest.approx(0.0)
    assert corners[~window] == pytest.approx(3.0)


def test_averaging_to_corners_weights_by_area():
    faces = np.array([[0, 1, 2], [0, 2, 3]])
    corners = corner_values(faces, np.array([1.0, 5.0]), np.array([3.0, 1.0]), np.zeros(2, dtype=np.int64))
    assert corners[0] == pytest.approx([2.0, 1.0, 2.0])


def test_shading_normals_of_a_ball_point_outwards_and_those_of_a_box_keep_its_edges(box):
    ball = trimesh.creation.icosphere(subdivisions=3)
    normals = corner_normals(np.asarray(ball.vertices), np.asarray(ball.faces), np.asarray(ball.face_normals))
    radial = np.asarray(ball.vertices)[ball.faces]
    # An icosphere's vertex normals are radial up to the unevenness of its triangles, under half a degree.
    assert np.einsum("ijk,ijk->ij", normals, radial).min() > np.cos(np.radians(0.5))
    vertices, faces, flat = box
    assert corner_normals(vertices, faces, flat) == pytest.approx(np.repeat(flat[:, None], 3, axis=1))


def test_the_cut_of_a_ball_is_a_great_circle():
    ball = trimesh.creation.icosphere(subdivisions=4)
    corners = np.asarray(ball.triangles)
    normal = np.array([0.3, -0.5, 0.8]) / np.linalg.norm([0.3, -0.5, 0.8])
    segments, triangles, _ = crossings(corners, corners @ normal)
    assert np.abs(segments @ normal).max() < 1e-12
    assert len(segments) == len(triangles)
    # Flat triangles of edge 0.07 lie inside the ball; their outline is shorter by about edge² / 12.
    assert np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1).sum() == pytest.approx(2 * np.pi, rel=2e-3)


def test_a_plane_through_vertices_still_gives_a_closed_outline():
    box = trimesh.creation.box().subdivide()
    corners = np.asarray(box.triangles)
    segments, _, _ = crossings(corners, corners[..., 2])
    ends, counts = np.unique(np.round(segments.reshape(-1, 3), 9), axis=0, return_counts=True)
    assert len(ends) > 3
    assert (counts % 2 == 0).all()


def test_principal_axes_of_a_box_are_its_sides_longest_first(box):
    vertices, faces, _ = box
    centre, axes = principal_axes(vertices[faces].mean(axis=1), np.ones(len(faces)))
    assert centre == pytest.approx(np.zeros(3), abs=1e-12)
    assert np.abs(axes) == pytest.approx(np.eye(3), abs=1e-9)


def test_axes_of_a_round_shape_are_the_coordinate_axes(make_ball):
    ball = make_ball()
    noise = np.random.default_rng(3).normal(scale=1e-3, size=ball.panel_centroids.shape)
    _, axes = principal_axes(ball.panel_centroids + noise, ball.panel_areas_um2)
    assert sorted(np.argmax(np.abs(axes), axis=1).tolist()) == [0, 1, 2]
    assert np.abs(axes).max(axis=1) == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("name", ["front", "side", "top"])
def test_a_view_turns_with_the_shape(spine, name):
    turn = trimesh.transformations.rotation_matrix(1.1, [0.3, 1.0, -0.4])[:3, :3]
    turned = dataclasses.replace(spine, vertices=spine.vertices @ turn.T + [3.0, -1.0, 2.0])
    before, after = standard_view(spine, name), standard_view(turned, name)
    assert after.towards == pytest.approx(turn @ before.towards, abs=1e-9)
    assert after.up == pytest.approx(turn @ before.up, abs=1e-9)


def test_views_look_along_three_axes_at_right_angles_from_the_side_of_the_windows(spine):
    views = [standard_view(spine, name) for name in ("front", "side", "top")]
    directions = np.array([view.towards for view in views])
    assert np.abs(directions @ directions.T) == pytest.approx(np.eye(3), abs=1e-12)
    for view in views:
        assert view.right @ view.up == pytest.approx(0.0, abs=1e-12)
    neck = spine.panel_window == 0
    # The long axis runs along the neck; the side view looks into its mouth.
    assert (spine.panel_normals[neck] @ views[1].towards).mean() > 0.5


def test_dashes_cover_about_half_of_a_path():
    path = np.array([[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [1.0, 2.0, 0.0]])
    pieces = dashes(path, 0.1)
    length = np.linalg.norm(pieces[:, 1] - pieces[:, 0], axis=1).sum()
    # First and last piece are dashes, so a little more than half is drawn.
    assert 0.5 * 3.0 < length < 0.56 * 3.0
    assert dashes(np.zeros((3, 3)), 0.1).shape == (0, 2, 3)
