"""Each kind of damage is healed to the shape it was made from, and every change is reported."""

from __future__ import annotations

import numpy as np
import pytest
import trimesh

from bemescape.errors import SurfaceError
from bemescape.surface import Surface, check_surface, heal_surface, read_surface


def healed(vertices, faces) -> Surface:
    surface = heal_surface(Surface(vertices, faces))
    report = check_surface(surface.vertices, surface.faces)
    assert report.ok, report.lines()
    # The package's own verdict, confirmed by trimesh's.
    mesh = trimesh.Trimesh(surface.vertices, surface.faces, process=False)
    assert mesh.is_watertight
    assert mesh.is_winding_consistent
    assert surface.volume == pytest.approx(mesh.volume, rel=1e-9)
    return surface


def kinds(surface):
    return [change.kind for change in surface.healing.changes]


def test_a_fine_surface_is_handed_back_as_it_is(shapes):
    surface = Surface(*shapes.ball())
    same = heal_surface(surface)
    assert same.healing is None
    assert same.health.ok
    np.testing.assert_array_equal(same.faces, surface.faces)
    assert heal_surface(surface, "none").healing is None


def test_none_refuses_what_auto_would_repair(shapes):
    vertices, faces = shapes.cube()
    with pytest.raises(SurfaceError, match="heal='auto' may repair it"):
        heal_surface(Surface(vertices, faces[:, ::-1]), "none")


@pytest.mark.parametrize("noise", [0.0, 1e-10, 2e-7])
def test_loose_triangles_are_welded(noise, shapes):
    vertices, faces = shapes.ball()
    random = np.random.default_rng(1)
    loose = vertices[faces].reshape(-1, 3)
    loose = loose + noise * random.uniform(-1.0, 1.0, loose.shape)
    surface = healed(loose, np.arange(len(loose)).reshape(-1, 3))
    assert len(surface.vertices) == len(vertices)
    assert kinds(surface) == ["welded vertices"]
    expected = trimesh.Trimesh(vertices, faces).volume
    assert surface.volume == pytest.approx(expected, rel=max(1e-12, 3.0 * noise))


def test_doubled_faces_are_dropped_once(shapes):
    vertices, faces = shapes.ball()
    surface = healed(vertices, np.vstack([faces, faces[[3, 3, 40]], faces[[41]][:, ::-1]]))
    assert len(surface.faces) == len(faces)
    assert surface.healing.changes[0].count == 4
    np.testing.assert_allclose(surface.volume, Surface(vertices, faces).volume, rtol=1e-12)


def test_a_surface_given_twice_is_kept_once(shapes):
    vertices, faces = shapes.ball()
    surface = healed(vertices, np.vstack([faces, faces[:, ::-1]]))
    assert len(surface.faces) == len(faces)
    assert surface.volume == pytest.approx(Surface(vertices, faces).volume, rel=1e-12)


def test_a_wall_between_joined_cells_is_opened(shapes):
    # Two unit cubes with a common side that both have: one body of volume 2 and area 10 without the wall.
    surface = healed(*shapes.weld(*shapes.join(shapes.cube(), shapes.cube(1.0, (1.0, 0.0, 0.0)))))
    assert surface.volume == pytest.approx(2.0, rel=1e-14)
    assert surface.area == pytest.approx(10.0, rel=1e-14)
    assert len(surface.healing.after.parts) == 1


def test_a_flat_face_is_turned_away_without_a_crack(shapes):
    vertices, faces = shapes.cube()
    # A new corner in the middle of an edge, known to one side only: a T-junction closed by a flat triangle.
    a, b = faces[0][:2]
    third = faces[0][2]
    vertices = np.vstack([vertices, 0.5 * (vertices[a] + vertices[b])])
    middle = len(vertices) - 1
    faces = np.vstack([faces[1:], [[a, middle, third], [middle, b, third], [a, b, middle]]])
    assert check_surface(vertices, faces).zero_area_faces == 1
    surface = healed(vertices, faces)
    assert surface.volume == pytest.approx(1.0, rel=1e-14)
    assert surface.area == pytest.approx(6.0, rel=1e-14)
    assert kinds(surface) == ["removed flat faces"]
    change = surface.healing.changes[0]
    assert (change.count, change.faces) == (1, (len(faces) - 1,))
    assert abs(change.volume_change_um3) < 1e-14


def test_a_face_without_length_is_pulled_together(shapes):
    vertices, faces = shapes.ball()
    # One vertex becomes two at the same place, with two flat triangles between them.
    apex = int(faces[0][0])
    around = np.flatnonzero((faces == apex).any(axis=1))
    vertices = np.vstack([vertices, vertices[apex]])
    twin = len(vertices) - 1
    mesh = faces.copy()
    ring = mesh[around]
    start = ring[0][(np.flatnonzero(ring[0] == apex)[0] + 1) % 3]
    follow = {}
    for k, face in zip(around, ring, strict=True):
        place = np.flatnonzero(face == apex)[0]
        follow[int(face[(place + 1) % 3])] = (k, int(face[(place + 2) % 3]))
    at, moved = int(start), []
    for _ in range(3):
        k, at = follow[at]
        moved.append(k)
    mesh[moved] = np.where(mesh[moved] == apex, twin, mesh[moved])
    mesh = np.vstack([mesh, [[int(start), twin, apex], [at, apex, twin]]])
    report = check_surface(vertices, mesh)
    assert (report.zero_area_faces, report.open_edges) == (2, 0)
    surface = healed(vertices, mesh)
    assert len(surface.faces) == len(faces)
    assert surface.volume == pytest.approx(Surface(*shapes.ball()).volume, rel=1e-12)


@pytest.mark.parametrize(("shift", "crowded"), [((1.0, 1.0, 0.0), "1 edges"), ((1.0, 1.0, 1.0), "1 vertices")])
def test_cubes_that_touch_come_apart(shift, crowded, shapes):
    vertices, faces = shapes.weld(*shapes.join(shapes.cube(), shapes.cube(1.0, shift)))
    surface = healed(vertices, faces)
    assert surface.healing.after.part_count == 2
    assert surface.volume == pytest.approx(2.0, rel=1e-14)
    assert crowded in surface.healing.changes[0].detail
    # A second healing must not weld what the first one told apart.
    assert heal_surface(surface).healing is surface.healing


def test_balls_that_touch_at_a_vertex_come_apart(shapes):
    ball = shapes.ball(1.0)
    top = ball[0][ball[0][:, 2].argmax()]
    twin = (2.0 * top - ball[0], ball[1][:, ::-1])  # point reflection in that vertex
    vertices, faces = shapes.weld(*shapes.join(ball, twin))
    assert check_surface(vertices, faces).crowded_vertices == 1
    surface = healed(vertices, faces)
    assert surface.healing.after.part_count == 2
    assert surface.volume == pytest.approx(2.0 * Surface(*ball).volume, rel=1e-12)


def test_a_ring_of_voxels_that_touches_itself_along_an_edge_stays_one_body(shapes):
    # Two voxels meet along one edge, and the body also closes around both ends of that edge: the sheets hang
    # together there, so the vertices of the edge alone cannot tell them apart.
    cells = [(0, 0, 0), (0, 1, 0), (0, 2, 0), (1, 2, 0), (2, 2, 0), (2, 1, 0), (1, 0, 0)]
    cells += [(0, 0, -1), (1, 0, -1), (2, 0, -1), (2, 1, -1), (1, 1, -1), (0, 1, -1)]
    cells += [(0, 0, 1), (1, 0, 1), (2, 0, 1), (2, 1, 1), (1, 1, 1), (0, 1, 1)]
    surface = healed(*voxel_surface(cells))
    assert surface.volume == pytest.approx(len(set(cells)), rel=1e-12)


def voxel_surface(cells):
    """Outer faces of unit voxels, equal corners shared: crowded wherever voxels meet along an edge."""
    filled = set(cells)
    quads = []
    for cell in filled:
        for axis in range(3):
            for side in (0, 1):
                step = [0, 0, 0]
                step[axis] = 2 * side - 1
                if tuple(np.add(cell, step)) in filled:
                    continue
                u, v = (axis + 1) % 3, (axis + 2) % 3
                square = np.array([[0, 0], [1, 0], [1, 1], [0, 1]])
                corners = np.tile(np.array(cell, dtype=float), (4, 1))
                corners[:, axis] += side
                corners[:, u] += square[:, 0]
                corners[:, v] += square[:, 1]
                quads.append(corners if side else corners[::-1])
    corners = np.array(quads).reshape(-1, 3)
    vertices, number = np.unique(corners, axis=0, return_inverse=True)
    ring = number.reshape(-1, 4)
    return vertices, np.concatenate([ring[:, [0, 1, 2]], ring[:, [0, 2, 3]]])


@pytest.mark.parametrize("seed", range(6))
def test_random_voxel_bodies_keep_their_volume(seed):
    random = np.random.default_rng(seed)
    block = random.random((5, 5, 5)) < 0.55
    cells = [tuple(int(x) for x in cell) for cell in np.argwhere(block)]
    vertices, faces = voxel_surface(cells)
    assert check_surface(vertices, faces).crowded_edges > 5
    surface = healed(vertices, faces)
    # Enclosed voids are obstacles; bodies are never small enough to be debris here (1 voxel of some 65).
    assert surface.volume == pytest.approx(block.sum(), rel=1e-12)


def test_mixed_orientation_is_made_one_and_outward(shapes):
    vertices, faces = shapes.ball()
    turned = faces.copy()
    some = np.random.default_rng(2).random(len(faces)) < 0.3
    turned[some] = turned[some][:, ::-1]
    surface = healed(vertices, turned)
    assert surface.healing.changes[0].count == some.sum()
    assert surface.volume == pytest.approx(Surface(vertices, faces).volume, rel=1e-12)
    inside_out = healed(vertices, faces[:, ::-1])
    assert inside_out.volume == pytest.approx(surface.volume, rel=1e-12)
    assert inside_out.healing.changes[0].volume_change_um3 == pytest.approx(2.0 * surface.volume, rel=1e-12)


def test_a_nested_part_becomes_an_obstacle(shapes):
    outer, inner = Surface(*shapes.ball(2.0)), Surface(*shapes.ball(1.0))
    surface = healed(*shapes.join(shapes.ball(2.0), shapes.ball(1.0)))
    assert surface.volume == pytest.approx(outer.volume - inner.volume, rel=1e-12)
    # Normals leave the diffusing volume: towards the centre on the obstacle.
    centres = surface.vertices[surface.faces].mean(axis=1)
    radius = np.linalg.norm(centres, axis=1)
    assert ((np.einsum("ij,ij->i", centres, surface.normals) < 0) == (radius < 1.5)).all()


def test_debris_is_dropped_and_a_vesicle_is_not(shapes):
    body, vesicle, speck = (
        shapes.ball(1.0),
        shapes.ball(0.03, fineness=1),
        shapes.ball(0.05, fineness=1, at=(3.0, 0, 0)),
    )
    scrap = np.array([[5.0, 0.0, 0.0], [5.1, 0.0, 0.0], [5.0, 0.1, 0.0]]), np.array([[0, 1, 2]])
    inward = vesicle[0], vesicle[1][:, ::-1]
    surface = healed(*shapes.join(body, inward, speck, scrap))
    assert surface.healing.after.part_count == 2
    assert kinds(surface) == ["dropped part", "dropped part"]
    open_scrap, closed_speck = surface.healing.changes
    assert open_scrap.area_change_um2 == pytest.approx(-0.005, rel=1e-12)
    assert closed_speck.volume_change_um3 == pytest.approx(-Surface(*speck).volume, rel=1e-9)
    share = Surface(*speck).volume / (Surface(*body).volume + Surface(*vesicle).volume + Surface(*speck).volume)
    assert f"{share:.2g} of the volume" in closed_speck.detail
    # Debris beside an otherwise sound mesh goes as well.
    assert kinds(healed(*shapes.join(body, speck))) == ["dropped part"]


def test_a_small_hole_is_closed_and_reported_with_its_place(shapes):
    vertices, faces = shapes.ball(1.0, fineness=4)
    top = vertices[:, 2].argmax()
    torn = faces[~(faces == top).any(axis=1)]
    surface = healed(vertices, torn)
    hole = next(change for change in surface.healing.changes if change.kind == "closed hole")
    lid = Surface(surface.vertices, surface.faces[len(torn) :])
    assert hole.area_change_um2 == pytest.approx(lid.area, rel=1e-12)
    assert "1)" in hole.detail
    assert hole.faces
    # A flat lid lacks the cap below the vertex: about π a² h / 2 with a the rim's radius, h = a²/2.
    a = np.linalg.norm(vertices[np.unique(torn)][vertices[np.unique(torn)][:, 2].argmax(), :2])
    missing = Surface(vertices, faces).volume - surface.volume
    assert missing == pytest.approx(np.pi * a**4 / 6.0, rel=0.5)


def test_holes_that_share_a_vertex_are_closed_one_by_one(shapes):
    vertices, faces = shapes.ball(1.0, fineness=3)
    shared = int(faces[0][0])
    around = np.flatnonzero((faces == shared).any(axis=1))
    first = around[0]
    apart = [k for k in around if len(np.intersect1d(faces[k], faces[first])) == 1]
    keep = np.ones(len(faces), dtype=bool)
    keep[[first, apart[0]]] = False
    surface = healed(vertices, faces[keep])
    assert surface.volume == pytest.approx(Surface(vertices, faces).volume, rel=1e-12)
    assert kinds(surface).count("closed hole") == 2


def test_a_fin_is_cut_off(shapes):
    vertices, faces = shapes.ball(1.0)
    a, b = faces[0][:2]
    fin = np.vstack([vertices, 1.05 * 0.5 * (vertices[a] + vertices[b])])
    surface = healed(fin, np.vstack([faces, [[a, b, len(vertices)]]]))
    assert surface.volume == pytest.approx(Surface(vertices, faces).volume, rel=1e-12)


def test_the_changes_of_volume_add_up(shapes):
    body, speck = shapes.ball(1.0), shapes.ball(0.05, fineness=1, at=(3.0, 0.0, 0.0))
    vertices, faces = shapes.join(body, speck)
    damaged = np.vstack([faces, faces[:2]])[:, ::-1]
    surface = healed(vertices, damaged)
    before = Surface(vertices, faces[:, ::-1]).volume
    doubled = Surface(vertices, damaged).volume - before
    changes = sum(change.volume_change_um3 for change in surface.healing.changes)
    assert before + doubled + changes == pytest.approx(surface.volume, abs=2.0 * abs(doubled) + 1e-12)


def test_read_heals_by_default_and_lists_what_it_did(shapes, write):
    path = write("a.ply", shapes.ply_bytes(*shapes.cube(100.0), "binary_little_endian"))
    assert read_surface(path, unit="nm").healing is None
    vertices, faces = shapes.cube(100.0)
    path = write("b.ply", shapes.ply_bytes(vertices, faces[:, ::-1]))
    surface = read_surface(path, unit="nm")
    assert surface.volume == pytest.approx(1e-3, rel=1e-12)
    assert not surface.health.ok  # as it was read
    assert surface.healing.after.ok
    assert "turned parts" in surface.healing.lines()[0]
