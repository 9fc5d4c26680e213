"""Rims: exact on the old triangles, watertight, graded; and what is refused."""

import numpy as np
import pytest
import trimesh

import shapes
from bemescape.errors import WindowError
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.windows.grade import Fineness, SizeLimit, graded, place_windows, rim_edges
from bemescape.windows.window import Window

FINE = Fineness(24.0, 6, 800.0)


@pytest.fixture(scope="module")
def ball():
    return shapes.ball(3)


def disc_on(surface, direction=(0.3, 0.5, 0.8), radius=0.3, name="cap"):
    return Window.disc(name, centre=shapes.on_ball(surface, direction), radius=radius)


def as_trimesh(mesh):
    return trimesh.Trimesh(mesh.vertices, mesh.faces, process=False)


def test_new_vertices_leave_volume_area_and_planes_alone(ball):
    mesh = graded(place_windows(ball, [disc_on(ball)]), FINE)
    solid = as_trimesh(mesh)
    assert solid.is_watertight
    assert solid.is_winding_consistent
    assert solid.volume == pytest.approx(ball.volume, rel=1e-12)
    assert solid.area == pytest.approx(ball.area, rel=1e-12)
    # Every panel lies in the plane of its parent: same normal, and its corners at no height above it.
    parent_normal = ball.normals[mesh.parent]
    origin = ball.vertices[ball.faces[mesh.parent, 0]]
    heights = np.einsum("mkx,mx->mk", mesh.vertices[mesh.faces] - origin[:, None], parent_normal)
    assert np.abs(heights).max() < 1e-12


def test_parents_own_exactly_their_area(ball):
    mesh = graded(place_windows(ball, [disc_on(ball)]), FINE)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    np.testing.assert_allclose(
        np.bincount(mesh.parent, weights=areas, minlength=len(ball.faces)), ball.areas, rtol=1e-9
    )


def test_rim_vertices_lie_at_the_radius(ball):
    window = disc_on(ball)
    mesh = graded(place_windows(ball, [window]), FINE)
    rim, _ = rim_edges(mesh.faces, mesh.window_of)
    distance = np.linalg.norm(mesh.vertices[np.unique(rim)] - np.array(window.shape.centre_um), axis=1)
    # Crossings are found to rounding; a vertex within 2 % of an edge's length is used as it is.
    edge = 2 * np.pi * 0.3 / FINE.rim_segments
    assert np.abs(distance - 0.3).max() < 0.02 * edge
    assert np.median(np.abs(distance - 0.3)) < 1e-9


def test_the_rim_is_one_closed_line(ball):
    mesh = graded(place_windows(ball, [disc_on(ball)]), FINE)
    rim, _ = rim_edges(mesh.faces, mesh.window_of)
    assert (np.bincount(rim.ravel())[np.unique(rim)] == 2).all()
    assert trimesh.graph.connected_components(rim, min_len=2)[0].size == len(rim)


def test_a_cap_has_the_area_of_a_spherical_cap_and_gains_it_with_segments(ball):
    """Cap of chord radius c on the unit sphere: area π c² (Archimedes). The rim polygon is inscribed: −(2π²/3)/n²."""
    fine = shapes.ball(5)
    window = disc_on(fine)
    errors = []
    for segments in (12.0, 24.0, 48.0):
        mesh = graded(place_windows(fine, [window]), Fineness(segments, 4, 800.0))
        areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
        errors.append(areas[mesh.window_of == 0].sum() / (np.pi * 0.3**2) - 1.0)
    assert abs(errors[-1]) < 2e-3  # the icosphere itself is off by 3e-4
    assert abs(errors[0]) > abs(errors[-1])


def test_panels_thin_out_towards_the_rim(ball):
    mesh = graded(place_windows(ball, [disc_on(ball)]), FINE)
    rim, _ = rim_edges(mesh.faces, mesh.window_of)
    on_rim = np.isin(mesh.faces, np.unique(rim)).sum(axis=1) == 2
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    longest = np.linalg.norm(mesh.vertices[mesh.faces] - np.roll(mesh.vertices[mesh.faces], 1, axis=1), axis=2).max(
        axis=1
    )
    width = 2.0 * areas[on_rim] / longest[on_rim]
    band = 1.5 * 2 * np.pi * 0.3 / FINE.rim_segments
    # The innermost strip is band/layers³ wide; cuts snap to vertices within 15 % of an edge.
    assert np.median(width) < 3.0 * band / FINE.layers**3


def test_labelled_rims_are_the_label_border():
    surface = shapes.box(cells=10, label=lambda c: int(c[2] > 0.999 and max(abs(c[0] - 0.5), abs(c[1] - 0.5)) < 0.2))
    mesh = graded(place_windows(surface, [Window.labels("hole", array="label", value=1)]), FINE)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    assert areas[mesh.window_of == 0].sum() == pytest.approx(0.16, rel=1e-12)
    assert as_trimesh(mesh).is_watertight


def test_vertex_labels_take_faces_whose_three_corners_carry_them(ball):
    high = (ball.vertices[:, 2] > 0.8).astype(int)
    surface = Surface(ball.vertices, ball.faces, vertex_data={"mark": high})
    mesh = graded(place_windows(surface, [Window.labels("top", array="mark", value=1)]), FINE)
    expected = ball.areas[high[ball.faces].all(axis=1)].sum()
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    assert areas[mesh.window_of == 0].sum() == pytest.approx(expected, rel=1e-12)


def test_limits_from_a_solution_make_panels_smaller_there_only(ball):
    placement = place_windows(ball, [disc_on(ball)])
    plain = graded(placement, FINE)
    limit = SizeLimit(np.array([[0.0, 0.0, -1.0], [0.0, 0.0, 1.0]]), np.array([0.08, np.inf]))
    finer = graded(placement, FINE, limits=[limit])

    def low(mesh):
        return (mesh.vertices[mesh.faces].mean(axis=1)[:, 2] < -0.5).sum()

    assert low(finer) > 2 * low(plain)
    assert as_trimesh(finer).is_watertight


def test_a_thin_sheet_keeps_the_opposite_side_wall():
    """A plate 20 nm thick with a disc of 200 nm on one face: the ball of the disc meets the other face too."""
    plate = shapes.box((1.0, 1.0, 0.02), 12)
    placement = place_windows(plate, [Window.disc("patch", centre=(0.5, 0.5, 0.02), radius=0.2)])
    mesh = graded(placement, FINE)
    heights = mesh.vertices[mesh.faces[mesh.window_of == 0]][:, :, 2]
    assert heights.min() == pytest.approx(0.02)
    assert any("another sheet" in note for note in placement.notes)


@pytest.mark.parametrize(("windows", "message"), [
    ([], "no window is given"),
    ([("a", (0, 0, 1), 0.2), ("a", (1, 0, 0), 0.2)], "2 windows are called 'a'"),
    ([("off", (0, 0, 2.5), 0.2)], r"'off' lies 1\.\d+ µm off the wall \(limit 100 nm"),
    ([("tiny", (0, 0, 1), 1e-6)], r"'tiny' has a radius of 0\.001 nm"),
    ([("huge", (0, 0, 1), 2.5)], "'huge' with radius 2.5 µm swallows the whole wall"),
])  # fmt: skip
def test_windows_that_cannot_be_are_refused_with_name_and_distance(ball, windows, message):
    with pytest.raises(WindowError, match=message):
        place_windows(ball, [Window.disc(name, centre=centre, radius=radius) for name, centre, radius in windows])


def test_overlapping_windows_are_refused_with_both_names(ball):
    windows = [disc_on(ball, (0, 0.1, 1), 0.3, "left"), disc_on(ball, (0, 0.4, 1), 0.3, "right")]
    with pytest.raises(WindowError, match=r"'left' and 'right' overlap near .* apart"):
        graded(place_windows(ball, windows), FINE)


def test_a_centre_between_two_sheets_is_refused():
    plate = shapes.box((1.0, 1.0, 0.02), 12)
    with pytest.raises(WindowError, match="'patch' sits on two sheets"):
        place_windows(plate, [Window.disc("patch", centre=(0.5, 0.5, 0.011), radius=0.2)])


def test_missing_arrays_and_values_are_named(ball):
    surface = Surface(ball.vertices, ball.faces, {"label": np.arange(len(ball.faces)) % 3})
    with pytest.raises(WindowError, match="array 'lable', but surface has the arrays 'label'"):
        place_windows(surface, [Window.labels("w", array="lable", value=1)])
    with pytest.raises(WindowError, match="no face has the value 7 in 'label', which holds 0, 1, 2"):
        place_windows(surface, [Window.labels("w", array="label", value=7)])
    with pytest.raises(WindowError, match="has no arrays at all"):
        place_windows(ball, [Window.labels("w", array="label", value=1)])
