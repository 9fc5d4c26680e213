"""Pores at positions and scattered: one window each, spaced, and what is refused."""

import numpy as np
import pytest
import trimesh
from scipy.spatial import cKDTree
from scipy.spatial.distance import pdist

import shapes
from bemescape.errors import SettingsError, WindowError
from bemescape.surface.surface import triangle_areas_normals
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.pores import MOST_COMPACT_PORES, MOST_MESHED_PORES
from bemescape.windows.window import Window
from shapes import platonic

FINE = Fineness(24.0, 4, 800.0)


@pytest.fixture(scope="module")
def ball():
    return shapes.ball(4)


def centres(placement):
    return np.array([window.shape.centre_um for window in placement.windows])


def test_each_position_becomes_a_round_window_of_its_own(ball):
    window = Window.points("pore", positions=1.02 * platonic(12), radius=0.15, permeability="2 um/s")
    placement = place_windows(ball, [window])
    assert [pore.name for pore in placement.windows] == [f"pore[{k}]" for k in range(1, 13)]
    assert {pore.permeability_um_s for pore in placement.windows} == {2.0}
    mesh = graded(placement, FINE)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    found = np.bincount(mesh.window_of + 1, weights=areas)[1:]
    # Chord radius a on the sphere: π a² (Archimedes); polygons of about 24 edges are 1.1 % smaller.
    np.testing.assert_allclose(found, np.pi * 0.15**2, rtol=0.02)
    solid = trimesh.Trimesh(mesh.vertices, mesh.faces, process=False)
    assert solid.is_watertight
    assert solid.volume == pytest.approx(ball.volume, rel=1e-12)


def test_positions_are_moved_to_the_nearest_wall_point_and_the_distances_are_told(ball):
    wanted = platonic(6) * np.array([1.05, 1.1, 1.0, 1.0, 1.0, 0.9])[:, None]
    placement = place_windows(ball, [Window.points("pore", positions=wanted, radius=0.1)])
    mesh = trimesh.Trimesh(ball.vertices, ball.faces, process=False)
    places, distance, _ = trimesh.proximity.closest_point(mesh, wanted)
    np.testing.assert_allclose(centres(placement), places, atol=1e-12)
    assert f"at most {1e3 * distance.max():.3g} nm" in placement.notes[0]
    assert f"{1e3 * np.median(distance):.3g} nm (median)" in placement.notes[0]


def test_many_pores_cut_in_one_pass_are_those_cut_one_by_one(ball):
    window = Window.points("pore", positions=platonic(8), radius=0.2)
    together = graded(place_windows(ball, [window]), FINE)
    for number, place in enumerate(platonic(8)[:2]):
        alone = graded(place_windows(ball, [Window.points("pore", positions=[place], radius=0.2)]), FINE)
        areas, _ = triangle_areas_normals(alone.vertices, alone.faces)
        both, _ = triangle_areas_normals(together.vertices, together.faces)
        # The meshes around them differ, so that snapping moves the rims by 0.5 % of an edge at most.
        assert areas[alone.window_of == 0].sum() == pytest.approx(both[together.window_of == number].sum(), rel=1e-3)


def test_pores_on_both_sides_of_a_thin_plate_have_rims_of_their_own():
    """The plate is thinner than the panels, and each pore's rim runs over the other's inside."""
    plate = shapes.box((1.0, 1.0, 0.005), 12)
    positions = np.array([(0.5, 0.5, 0.005), (0.56, 0.5, 0.0), (0.2, 0.2, 0.0)])
    mesh = graded(place_windows(plate, [Window.points("pore", positions=positions, radius=0.1)]), FINE)
    for number, centre in enumerate(positions):
        own = np.unique(mesh.faces[mesh.window_of == number])
        assert (mesh.vertices[own][:, 2] == centre[2]).all()
        rim = np.intersect1d(own, mesh.faces[mesh.window_of < 0])
        distance = np.linalg.norm(mesh.vertices[rim] - centre, axis=1)
        # A vertex within 0.5 % of an edge (2π · 0.1 / 24) from the rim is taken as it is.
        assert np.abs(distance - 0.1).max() < 0.01 * 0.026
        assert len(rim) >= 24


def test_an_inner_shell_can_carry_pores():
    shell = shapes.shell(subdivisions=3)
    placement = place_windows(shell, [Window.points("pore", positions=platonic(6), radius=0.2)])
    np.testing.assert_allclose(np.linalg.norm(centres(placement), axis=1), 1.0, atol=0.02)
    assert graded(placement, FINE).window_of.max() == 5


def test_a_position_off_the_wall_is_refused_with_its_row_and_distance(ball):
    positions = [*platonic(6)[:3], (0.0, 0.0, 3.0)]
    with pytest.raises(WindowError, match=r"'pore\[4\]' at \(0, 0, 3\) µm lies 2 µm off the wall \(limit 200 nm\)"):
        place_windows(ball, [Window.points("pore", positions=positions, radius=0.1)])
    window = Window.points("pore", positions=positions, radius=0.1, farthest="3 um")
    assert len(place_windows(ball, [window]).windows) == 4


def test_equal_and_overlapping_positions_are_named_by_their_rows(ball):
    twice = [*platonic(6), platonic(6)[1]]
    with pytest.raises(WindowError, match=r"'pore\[2\]' and 'pore\[7\]' are the same position"):
        place_windows(ball, [Window.points("pore", positions=twice, radius=0.1)])
    close = [*platonic(6), platonic(6)[3] + 0.05]
    with pytest.raises(
        WindowError, match=r"'pore\[4\]' and 'pore\[7\]' overlap: they are \d+(\.\d)? nm apart .* 100 nm"
    ):
        place_windows(ball, [Window.points("pore", positions=close, radius=0.1)])


def test_rows_of_a_file_are_named_with_their_lines(ball, tmp_path):
    (tmp_path / "pores.csv").write_text("id,x,y,z\nnm,nm,nm,nm\n1,1000,0,0\n# removed\n2,0,1000,0\n3,0,0,5000\n")
    window = Window.points("pore", positions=tmp_path / "pores.csv", radius="50 nm")
    with pytest.raises(WindowError, match=r"'pore\[3\]' \(line 6\) at \(0, 0, 5\) µm lies 4"):
        place_windows(ball, [window])


def test_a_hundred_thousand_pores_are_refused_at_once_with_the_panels_they_take(ball):
    many = np.random.default_rng(0).normal(size=(100_000, 3))
    for window in (
        Window.points("pore", positions=many, radius=0.001),
        Window.scatter("pore", count=100_000, radius=0.001),
    ):
        with pytest.raises(WindowError, match=rf"'pore' brings the pores to 100000 \(limit {MOST_COMPACT_PORES}, "):
            place_windows(ball, [window])


def test_more_pores_with_panels_than_there_are_panels_for_are_refused(ball):
    window = Window.scatter("pore", count=300, radius=0.001, compact=False)
    with pytest.raises(WindowError, match=rf"panels of their own to 300 \(limit {MOST_MESHED_PORES}\).* 300000 panels"):
        place_windows(ball, [window])


def test_scattered_pores_keep_their_distance_from_one_another_and_from_other_windows(ball):
    other = Window.disc("neck", centre=shapes.on_ball(ball, (0, 0.2, 1)), radius=0.4)
    group = Window.scatter("pore", count=60, radius=0.05, gap="100 nm", seed=7)
    placement = place_windows(ball, [group, other])
    assert [window.name for window in placement.windows][-1] == "neck"
    places = centres(placement)[:-1]
    assert pdist(places).min() >= 0.2
    assert np.linalg.norm(places - other.shape.centre_um, axis=1).min() >= 0.4 + 0.05 + 0.1
    gap = trimesh.proximity.closest_point(trimesh.Trimesh(ball.vertices, ball.faces, process=False), places)[1]
    assert gap.max() < 1e-12


def test_scattered_pores_keep_clear_of_labelled_faces_and_lids():
    labelled = shapes.box(cells=10, label=lambda c: int(c[2] < 1e-9))
    windows = [
        Window.labels("floor", array="label", value=1),
        Window.lid("top", point=(0.5, 0.5, 0.85), normal=(0, 0, 1)),
        Window.scatter("pore", count=30, radius=0.04, gap=0.02),
    ]
    heights = centres_of_discs(place_windows(labelled, windows))[:, 2]
    assert heights.min() >= 0.06 - 1e-12
    assert heights.max() <= 0.85 - 0.06 + 1e-12


def centres_of_discs(placement):
    return np.array([window.shape.centre_um for window in placement.windows if "[" in window.name])


def test_the_seed_decides_the_places_and_density_the_number(ball):
    def places(**options):
        return centres(place_windows(ball, [Window.scatter("pore", radius=0.02, **options)]))

    first = places(density="8 /um^2", seed=3)
    assert len(first) == round(8 * ball.area)
    np.testing.assert_array_equal(first, places(density="8 /um^2", seed=3))
    assert not np.allclose(first, places(density="8 /um^2", seed=4))


def test_scattered_pores_are_spread_evenly_over_the_area():
    """A box 1 × 1 × 9 with faces of very unequal size: each end holds 1/38 of the wall, the middle third a third."""
    box = shapes.box((1.0, 1.0, 9.0), 3)
    heights = np.concatenate(
        [
            centres(place_windows(box, [Window.scatter("pore", count=150, radius=0.01, seed=seed)]))[:, 2]
            for seed in range(4)
        ]
    )
    # 600 places: three standard deviations of a count of 600 p are 3 √(600 p (1 − p)).
    for p, found in ((12 / 38, (abs(heights - 4.5) < 1.5).sum()), (2 / 38, (abs(heights - 4.5) > 4.5 - 1e-9).sum())):
        assert abs(found - 600 * p) < 3 * np.sqrt(600 * p * (1 - p))


def test_what_does_not_fit_is_refused_with_the_number_reached(ball):
    with pytest.raises(WindowError, match=r"only \d+ of 60 pores fit with a radius of 300 nm and 300 nm between rims"):
        place_windows(ball, [Window.scatter("pore", count=60, radius=0.3)])


@pytest.mark.parametrize(
    ("options", "sentence"),
    [
        ({}, "has neither of count and density"),
        ({"count": 3, "density": "1 /um^2"}, "has both of count and density"),
        ({"count": 0}, "count of window 'pore' is 0; it must be a whole number, 1 or more"),
        ({"count": 2.5}, "count of window 'pore' is 2.5"),
        ({"count": True}, "count of window 'pore' is True"),
        ({"count": 3, "seed": -1}, "seed of window 'pore' is -1"),
        ({"density": "3 um"}, "density of window 'pore' '3 um' is not a quantity in um"),
        ({"count": 3, "gap": "-1 nm"}, "gap of window 'pore' is -0.001 µm"),
    ],
)
def test_scatter_options_that_cannot_be_are_refused(options, sentence):
    with pytest.raises(SettingsError, match=sentence):
        Window.scatter("pore", radius="20 nm", **options)


@pytest.mark.parametrize(
    ("positions", "sentence"),
    [
        ([], r"have the shape \(0,\)"),
        ([(1, 2)], r"have the shape \(1, 2\)"),
        ([(0, 0, 1), (0, np.nan, 0)], "position 2 of window 'pore' is .*nan.*finite"),
        ([("a", 0, 0)], "are not rows of three numbers"),
    ],
)
def test_positions_that_cannot_be_are_refused(positions, sentence):
    with pytest.raises(WindowError, match=sentence):
        Window.points("pore", positions=positions, radius="20 nm")


def test_a_density_of_less_than_one_pore_is_refused(ball):
    with pytest.raises(WindowError, match=r"0\.01 per µm² on 12\.\d+ µm² of wall is less than one pore"):
        place_windows(ball, [Window.scatter("pore", density="0.01 /um^2", radius=0.1)])


def test_a_name_that_a_pore_has_already_is_refused(ball):
    windows = [
        Window.points("pore", positions=platonic(6), radius=0.1),
        Window.disc("pore[2]", centre=shapes.on_ball(ball, (1, 2, 3)), radius=0.1),
    ]
    with pytest.raises(WindowError, match=r"2 windows are called 'pore\[2\]'"):
        place_windows(ball, windows)


def test_no_two_scattered_pores_of_a_crowd_are_closer_than_the_spacing():
    """Near the densest that random placing reaches, where a missed neighbour would show."""
    box = shapes.box(cells=4)
    placement = place_windows(box, [Window.scatter("pore", count=190, radius=0.04, gap=0.01, seed=2)])
    assert cKDTree(centres(placement)).query(centres(placement), k=2)[0][:, 1].min() >= 0.09
