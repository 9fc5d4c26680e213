"""Contact patches: exact distances, areas against closed forms, and what is refused."""

import numpy as np
import pytest
import trimesh

import shapes
from bemescape.errors import SettingsError, SurfaceError, WindowError
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.nearest import NearestTriangle
from bemescape.windows.window import Window

FINE = Fineness(24.0, 6, 800.0)


def plate(top=-1.02, size=(4.0, 4.0, 1.0)):
    """A box whose upper face lies at z = top."""
    mesh = trimesh.creation.box(size)
    return Surface(mesh.vertices + np.array([0.0, 0.0, top - size[2] / 2]), mesh.faces, name="plate")


def window_areas(mesh):
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    return np.bincount(mesh.window_of + 1, weights=areas)[1:]


@pytest.mark.parametrize("count", [1, 3, 4, 7, 33, 1000])
def test_the_nearest_triangle_is_that_of_a_search_through_all(count):
    """Against trimesh's closest points on every triangle, some of them without area."""
    random = np.random.default_rng(count)
    corners = random.normal(size=(count, 3, 3))
    corners[::5, 2] = corners[::5, 1]
    points = 2.0 * random.normal(size=(100, 3))
    distance, places, triangle = NearestTriangle(corners).closest(points)
    for k, point in enumerate(points):
        all_places = trimesh.triangles.closest_point(corners, np.broadcast_to(point, (count, 3)))
        assert distance[k] == pytest.approx(np.linalg.norm(all_places - point, axis=1).min(), rel=1e-12)
        np.testing.assert_allclose(places[k], all_places[triangle[k]], atol=1e-12)


def test_a_sphere_on_a_plate_touches_it_with_a_spherical_cap():
    """Height h = d − gap of the cap; its area is 2πRh (Archimedes)."""
    ball = shapes.ball(5)
    placement = place_windows(ball, [Window.near("foot", surface=plate(-1.02), distance="70 nm")])
    mesh = graded(placement, FINE)
    solid = trimesh.Trimesh(mesh.vertices, mesh.faces, process=False)
    assert solid.is_watertight
    assert solid.volume == pytest.approx(ball.volume, rel=1e-12)
    # The rim is a polygon of about 24 edges: −2π²/(3 · 24²) at most, and the icosphere adds 3e-4.
    assert window_areas(mesh)[0] == pytest.approx(2 * np.pi * 0.05, rel=5e-3)
    assert placement.notes == (placement.notes[0],)
    assert "touches 'plate' in 1 piece of together 0.314" in placement.notes[0]


def test_the_rim_of_a_contact_lies_at_the_distance():
    ball, distance = shapes.ball(4), 0.1
    mesh = graded(place_windows(ball, [Window.near("foot", surface=plate(-1.0), distance=distance)]), FINE)
    inside = mesh.faces[mesh.window_of == 0]
    rim = np.intersect1d(inside, mesh.faces[mesh.window_of < 0])
    # Below the plate's face the distance is the height; crossings are exact, snapping moves 0.5 % of an edge.
    height = mesh.vertices[rim][:, 2] + 1.0
    edge = 2 * np.pi * np.sqrt(2 * distance) / FINE.rim_segments
    assert np.abs(height - distance).max() < 0.01 * edge
    assert np.median(np.abs(height - distance)) < 1e-9


def test_a_contact_in_the_middle_of_a_large_face_is_found():
    """Twelve faces, and a small ball 10 nm over the middle of one: no vertex of the wall is near."""
    box = shapes.box(cells=1)
    small = trimesh.creation.icosphere(3, radius=0.1)
    other = Surface(small.vertices + np.array([0.4, 0.6, 1.11]), small.faces, name="vesicle")
    mesh = graded(place_windows(box, [Window.near("dock", surface=other, distance="20 nm")]), FINE)
    # The wall at distance ρ from the foot point is 0.11 − 0.1 = 10 nm to 20 nm away: (0.12² − 0.11²)π.
    assert window_areas(mesh)[0] == pytest.approx(np.pi * (0.12**2 - 0.11**2), rel=0.03)  # icosphere and polygon


def test_pieces_are_counted_with_their_areas_and_belong_to_one_window():
    box = shapes.box(cells=4)
    blocks = [trimesh.creation.box((0.2, 0.2, 0.2)) for _ in range(2)]
    blocks[0].apply_translation((0.25, 0.5, 1.11))
    blocks[1].apply_translation((0.75, 0.5, 1.11))
    both = trimesh.util.concatenate(blocks)
    other = Surface(both.vertices, both.faces, name="feet")
    placement = place_windows(box, [Window.near("feet", surface=other, distance="20 nm")])
    assert "in 2 pieces of together" in placement.notes[0]
    mesh = graded(placement, FINE)
    # Each foot: its square, a margin of √(20² − 10²) nm along the edges and quarter discs at the corners.
    margin = np.sqrt(0.02**2 - 0.01**2)
    exact = 2 * (0.04 + 4 * 0.2 * margin + np.pi * margin**2)
    assert window_areas(mesh)[0] == pytest.approx(exact, rel=5e-3)
    sides = np.sign(mesh.vertices[mesh.faces[mesh.window_of == 0]].mean(axis=1)[:, 0] - 0.5)
    assert (sides > 0).any()
    assert (sides < 0).any()


def test_an_inner_shell_can_carry_the_contact():
    shell = shapes.shell(subdivisions=3)
    stick = trimesh.creation.box((0.2, 0.2, 1.0))
    other = Surface(stick.vertices + np.array([0.0, 0.0, 0.45]), stick.faces, name="stick")
    mesh = graded(place_windows(shell, [Window.near("site", surface=other, distance="100 nm")]), FINE)
    radius = np.linalg.norm(mesh.vertices[mesh.faces[mesh.window_of == 0]].mean(axis=1), axis=1)
    assert len(radius) > 20
    assert radius.max() < 1.05


def test_another_unit_is_suspected_where_nothing_is_near():
    ball = shapes.ball(2)
    sentence = (
        r"no closer than 1019 µm to 'plate'.*more than 10 times the distance of 20 nm; the two meshes may be in "
        "different units or frames"
    )
    with pytest.raises(WindowError, match=sentence):
        place_windows(ball, [Window.near("foot", surface=plate(-1020.0), distance="20 nm")])


def test_a_near_miss_says_how_near():
    with pytest.raises(WindowError, match=r"no closer than 2\d\.\d+ nm to 'plate' .* the distance is 20 nm; enlarge"):
        place_windows(shapes.ball(4), [Window.near("foot", surface=plate(-1.025), distance="20 nm")])


def test_contact_everywhere_is_refused():
    ball = shapes.ball(2)
    with pytest.raises(WindowError, match=r"all of the wall is closer than 20 nm to 'surface'.*is it the same mesh"):
        place_windows(ball, [Window.near("all", surface=ball, distance="20 nm")])


def test_a_contact_that_overlaps_a_disc_is_refused_with_both_names():
    ball = shapes.ball(4)
    windows = [
        Window.near("foot", surface=plate(-1.0), distance="50 nm"),
        Window.disc("pore", centre=shapes.on_ball(ball, (0.2, 0.1, -1.0)), radius="100 nm"),
    ]
    with pytest.raises(WindowError, match="'foot' and 'pore' overlap"):
        graded(place_windows(ball, windows), FINE)


def test_the_other_mesh_may_be_an_open_sheet_in_a_file_of_its_own_unit(tmp_path):
    sheet = trimesh.Trimesh([[-2e3, -2e3, -1010], [2e3, -2e3, -1010], [0, 2e3, -1010]], [[0, 1, 2]])
    sheet.export(tmp_path / "sheet.ply")
    ball = shapes.ball(4)
    window = Window.near("foot", surface=tmp_path / "sheet.ply", unit="nm", distance="40 nm")
    mesh = graded(place_windows(ball, [window]), FINE)
    assert window_areas(mesh)[0] == pytest.approx(2 * np.pi * 0.03, rel=0.02)  # icosphere of 5120 faces
    assert window.described()["mesh"] == "sheet"
    with pytest.raises(SettingsError, match="mesh files carry no unit"):
        Window.near("foot", surface=tmp_path / "sheet.ply", distance="40 nm")
    with pytest.raises(SurfaceError, match="there is no file"):
        Window.near("foot", surface=tmp_path / "lost.ply", unit="nm", distance="40 nm")
    with pytest.raises(SettingsError, match="a Surface is in µm already"):
        Window.near("foot", surface=ball, unit="nm", distance="40 nm")
