"""Lids: what is cut off, what is kept, the triangles of the lid, and what is refused."""

import numpy as np
import pytest
import trimesh

import exact
import shapes
from bemescape.errors import WindowError
from bemescape.escape import solve_escape
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.lid_mesh import triangulated_region
from bemescape.windows.window import Window

FINE = Fineness(24.0, 6, 800.0)


def two_towers():
    """A slab 3 × 1 × 1 with a tower 1 × 1 × 1 on either end, from unit cells."""
    filled = {(x, 0, 0) for x in range(3)} | {(0, 0, 1), (2, 0, 1)}
    quads = []
    for cell in filled:
        for axis in range(3):
            for side in (0, 1):
                step = tuple((1 if side else -1) * (k == axis) for k in range(3))
                if tuple(np.add(cell, step)) in filled:
                    continue
                u, v = np.eye(3)[(axis + 1) % 3], np.eye(3)[(axis + 2) % 3]
                corner = np.array(cell, float) + side * np.eye(3)[axis]
                quad = [corner, corner + u, corner + u + v, corner + v]
                quads.append(quad if side else quad[::-1])
    return shapes.from_quads(quads)


def solid(surface):
    return trimesh.Trimesh(surface.vertices, surface.faces, process=False)


def lid_on(surface, point, normal=(0, 0, 1), near=None):
    return place_windows(surface, [Window.lid("mouth", point=point, normal=normal, near=near)])


@pytest.mark.parametrize("height", [1.0, 1.25, 1.3, 1.4999])
def test_a_lid_on_a_neck_leaves_head_and_the_rest_of_the_neck(height):
    """Unit cube with a neck 0.4 × 0.4: volume 1 + 0.16 (height − 1), also in the plane of the cube's own face."""
    placement = lid_on(shapes.box_with_neck(), (0.5, 0.5, height))
    left = solid(placement.surface)
    assert left.is_watertight
    assert left.is_winding_consistent
    # Vertices within 1 % of an edge (0.1) are moved onto the plane: only in the last case, by 0.1 nm · 0.16 µm².
    assert left.volume == pytest.approx(1.0 + 0.16 * (height - 1.0), rel=1e-12, abs=2e-5 * (height == 1.4999))
    lid = placement.source_face < 0
    assert placement.surface.areas[lid].sum() == pytest.approx(0.16, rel=1e-12)
    np.testing.assert_allclose(placement.surface.normals[lid], np.tile([0.0, 0.0, 1.0], (lid.sum(), 1)), atol=1e-12)


def test_the_normal_says_which_side_is_cut_off():
    placement = lid_on(shapes.box_with_neck(), (0.5, 0.5, 1.0), normal=(0, 0, -1))
    assert placement.surface.volume == pytest.approx(0.08, rel=1e-12)
    assert "92.59% of the volume" in placement.notes[0]
    assert "should its normal point the other way?" in placement.notes[0]


def test_an_oblique_lid_on_a_ball_leaves_a_spherical_segment():
    """Cap beyond a plane at distance c from the centre: (1 − c)²(2 + c) π/3 (Archimedes)."""
    ball, normal = shapes.ball(5), np.array([0.3, 0.1, 1.0])
    point = np.array([0.1, 0.2, 0.5])
    c = point @ normal / np.linalg.norm(normal)
    placement = lid_on(ball, point, normal)
    lost = ball.volume - placement.surface.volume
    assert lost == pytest.approx(np.pi / 3 * (1 - c) ** 2 * (2 + c), rel=2e-3)  # icosphere of 20 480 faces
    assert solid(placement.surface).is_watertight
    mesh = graded(placement, FINE)
    assert solid(mesh).is_watertight
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    assert areas[mesh.window_of == 0].sum() == pytest.approx(np.pi * (1 - c * c), rel=2e-3)
    assert solid(mesh).volume == pytest.approx(placement.surface.volume, rel=1e-12)


def test_faces_keep_their_parents_and_the_lid_has_none():
    box = shapes.box_with_neck()
    placement = lid_on(box, (0.5, 0.5, 1.25))
    parent = placement.faces_given(np.arange(len(placement.surface.faces)))
    kept = parent >= 0
    heights = (
        placement.surface.vertices[placement.surface.faces[kept]] - box.vertices[box.faces[parent[kept], 0]][:, None]
    )
    assert np.abs(np.einsum("mkx,mx->mk", heights, box.normals[parent[kept]])).max() < 1e-12
    assert (placement.surface.vertices[placement.surface.faces[~kept]][:, :, 2] == 1.25).all()


def test_the_lid_has_no_needles():
    placement = lid_on(shapes.cylinder_with_neck(0.2, 0.8), (0, 0, 1.5))
    corners = placement.surface.vertices[placement.surface.faces[placement.source_face < 0]]
    angles = trimesh.triangles.angles(corners)
    # At the border a triangle has a border edge and inner points at about that distance.
    assert np.degrees(angles.min()) > 15.0


def test_a_wall_window_and_a_lid_go_together():
    labelled = shapes.box(cells=10, label=lambda c: int(c[2] < 1e-9))
    windows = [
        Window.lid("top", point=(0.5, 0.5, 0.73), normal=(0, 0, 1)),
        Window.labels("bottom", array="label", value=1),
        Window.disc("side", centre=(0.0, 0.5, 0.3), radius=0.1),
    ]
    placement = place_windows(labelled, windows)
    mesh = graded(placement, FINE)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    found = np.bincount(mesh.window_of + 1, weights=areas)[1:]
    np.testing.assert_allclose(found[:2], [1.0, 1.0], rtol=1e-12)
    assert found[2] == pytest.approx(np.pi * 0.01, rel=0.02)  # polygon of about 24 edges: −1.1 %


def test_two_lids_cut_one_after_the_other():
    tube = shapes.revolved([(0, 0), (0.5, 0), (0.5, 3), (0, 3)], 0.2)
    windows = [
        Window.lid("low", point=(0, 0, 0.5), normal=(0, 0, -1)),
        Window.lid("high", point=(0, 0, 2.5), normal=(0, 0, 1)),
    ]
    placement = place_windows(tube, windows)
    assert placement.surface.volume == pytest.approx(0.25 * np.pi * 2.0, rel=1e-12)
    mesh = graded(placement, FINE)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    np.testing.assert_allclose(np.bincount(mesh.window_of + 1, weights=areas)[1:], 0.25 * np.pi, rtol=1e-12)
    with pytest.raises(WindowError, match="'low' lies beyond another lid and is cut off"):
        place_windows(tube, [windows[0], Window.lid("both", point=(0, 0, 1.0), normal=(0, 0, -1))])


def test_an_obstacle_through_the_plane_leaves_a_hole_in_the_lid():
    outer = shapes.revolved([(0, 0), (1, 0), (1, 3), (0, 3)], 0.3)
    inner = shapes.revolved([(0, 1), (0.4, 1), (0.4, 2), (0, 2)], 0.2)
    faces = np.concatenate([outer.faces, inner.faces[:, ::-1] + len(outer.vertices)])
    both = Surface(np.concatenate([outer.vertices, inner.vertices]), faces)
    placement = lid_on(both, (0.7, 0, 1.5))
    lid = placement.source_face < 0
    assert placement.surface.areas[lid].sum() == pytest.approx(np.pi * (1 - 0.16), rel=1e-12)
    assert placement.surface.volume == pytest.approx(np.pi * (1.5 - 0.16 * 0.5), rel=1e-12)
    assert solid(placement.surface).is_watertight


def test_shells_inside_what_is_cut_off_go_with_it():
    outer, inner = shapes.box((1.0, 1.0, 3.0), 6), shapes.ball(2, radius=0.2)
    places = [(0.5, 0.5, 0.6), (0.5, 0.5, 2.4)]
    vertices, faces = [outer.vertices], [outer.faces]
    for k, place in enumerate(places):
        vertices.append(inner.vertices + place)
        faces.append(inner.faces[:, ::-1] + len(outer.vertices) + k * len(inner.vertices))
    both = Surface(np.concatenate(vertices), np.concatenate(faces))
    placement = lid_on(both, (0.5, 0.5, 1.5))
    assert placement.surface.volume == pytest.approx(1.5 - inner.volume, rel=1e-12)
    assert solid(placement.surface).body_count == 2


def test_one_of_two_openings_is_chosen_by_the_point_and_the_other_part_stays():
    towers = two_towers()
    for point, near in (((0.5, 0.5, 1.5), None), ((1.5, 0.5, 1.5), (0.2, 0.5, 1.5)), ((0.5, 0.5, 1.0), None)):
        placement = lid_on(towers, point, near=near)
        assert placement.surface.volume == pytest.approx(3.0 + 1.0 + point[2] - 1.0, rel=1e-12)
        lid = placement.source_face < 0
        assert placement.surface.vertices[placement.surface.faces[lid]][..., 0].max() <= 1.0 + 1e-12


def test_ambiguous_openings_are_named_with_their_centres():
    with pytest.raises(
        WindowError, match=r"makes 2 openings, around \([02]\.5, 0\.5, 1\.5\) µm, \([02]\.5, 0\.5, 1\.5\) µm"
    ):
        lid_on(two_towers(), (1.5, 0.5, 1.5))


def test_what_hangs_on_by_two_openings_is_refused():
    with pytest.raises(WindowError, match="hangs on by 2 openings of the plane"):
        lid_on(two_towers(), (0.5, 0.5, 1.5), normal=(0, 0, -1))


@pytest.mark.parametrize(
    ("point", "normal", "sentence"),
    [
        ((0.5, 0.5, 2.0), (0, 0, 1), r"'mouth' misses the surface, which ends before it, 500 nm away at .*, 1\.5\) µm"),
        ((0.5, 0.5, 1.5), (0, 0, 1), r"which ends before it, 0 µm away"),
        ((0.5, 0.5, -1.0), (0, 0, 1), r"lies wholly on the side that its normal points to, 1 µm away"),
        ((0.5, 0.5, 1.2), (0, 0, 0), "the normal of window 'mouth' is .0, 0, 0., which has no direction"),
        ((0.5, 0.5), (0, 0, 1), "the point of window 'mouth' is .* it must be three finite numbers"),
        ((0.5, 0.5, np.nan), (0, 0, 1), "it must be three finite numbers"),
    ],
)
def test_a_lid_that_misses_says_by_how_much(point, normal, sentence):
    with pytest.raises(WindowError, match=sentence):
        lid_on(shapes.box_with_neck(), point, normal)


def test_a_region_with_a_hole_and_uneven_edges_is_filled_exactly():
    random = np.random.default_rng(4)
    angles = np.sort(random.random(60)) * 2 * np.pi
    outer = np.column_stack([np.cos(angles), np.sin(angles)]) * (1.0 + 0.3 * np.cos(5 * angles))[:, None]
    hole = 0.3 * np.column_stack([np.cos(angles[::3]), -np.sin(angles[::3])]) + (0.1, 0.0)
    inner, triangles = triangulated_region([outer, hole])
    points = np.concatenate([outer, hole, inner])
    a, b, c = (points[triangles[:, k]] for k in range(3))
    areas = 0.5 * ((b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0])

    def shoelace(loop):
        following = np.roll(loop, -1, axis=0)
        return 0.5 * (loop[:, 0] * following[:, 1] - following[:, 0] * loop[:, 1]).sum()

    assert (areas > 0.0).all()
    assert areas.sum() == pytest.approx(shoelace(outer) + shoelace(hole), rel=1e-12)


def test_a_long_thin_region_keeps_its_border_edges():
    """Border edges ten times longer than the gap across: not Delaunay, so they must be put in."""
    x = np.linspace(0.0, 10.0, 11)
    wave = 0.1 * np.sin(x)
    border = np.concatenate([np.column_stack([x, wave]), np.column_stack([x[:-1] + 0.45, wave[:-1] + 0.05])[::-1]])
    _, triangles = triangulated_region([border])
    count = len(border)
    half = {(int(a), int(b)) for t in triangles for a, b in zip(t, np.roll(t, -1), strict=True)}
    assert all((k, (k + 1) % count) in half for k in range(count))


def test_a_border_that_crosses_itself_is_refused():
    bow = np.array([(0.0, 0.0), (1.0, 1.0), (1.0, 0.0), (0.0, 1.0)])
    with pytest.raises(WindowError, match="crosses itself or folds back"):
        triangulated_region([bow])


def test_a_lidded_prism_has_the_time_of_a_prism():
    """The box of length 1 is cut at 0.8 and open there: L²/3."""
    window = Window.lid("end", point=(0.1, 0.1, 0.8), normal=(0, 0, 1))
    result = solve_escape(shapes.box((0.4, 0.4, 1.0), 5), [window], 1.0, target=0.02)
    assert abs(result.mean_time_s / exact.prism_mean(0.8) - 1.0) < 0.005
    assert (result.parent_face[result.panel_window == 0] == -1).all()
