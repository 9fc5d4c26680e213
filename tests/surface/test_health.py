"""The health report counts what was put in; closed forms and trimesh are the references."""

from __future__ import annotations

import numpy as np
import pytest
import trimesh

from bemescape.surface import check_surface
from bemescape.surface.crossings import find_crossings


def kinds(report, severity=None):
    return {finding.kind for finding in report.findings if severity in (None, finding.severity)}


def test_a_ball_is_healthy_and_measured_as_trimesh_does(shapes):
    vertices, faces = shapes.ball(2.0)
    report = check_surface(vertices, faces)
    mesh = trimesh.Trimesh(vertices, faces, process=False)
    assert report.ok
    assert report.closed
    assert (report.part_count, report.handles, report.crossing_faces) == (1, 0, 0)
    assert report.volume_um3 == pytest.approx(mesh.volume, rel=1e-12)
    assert report.area_um2 == pytest.approx(mesh.area, rel=1e-12)
    assert report.edge_length_um.median == pytest.approx(np.median(mesh.edges_unique_length), rel=0.02)
    # 2r/R is 1 for an equilateral triangle; an icosphere's are close to it.
    assert 0.9 < report.triangle_quality.smallest < report.triangle_quality.median <= 1.0


def test_quality_of_a_right_triangle_is_its_closed_form():
    # Legs 3 and 4: r = 1, R = 2.5, so 2r/R = 0.8.
    report = check_surface(np.array([[0.0, 0.0, 0.0], [3.0, 0.0, 0.0], [0.0, 4.0, 0.0]]), np.array([[0, 1, 2]]))
    assert report.triangle_quality.median == pytest.approx(0.8, rel=1e-14)


@pytest.mark.parametrize("count", [1, 2, 3])
def test_handles_are_counted(count, shapes):
    rings = []
    for k in range(count):
        ring = trimesh.creation.torus(1.0, 0.3, major_sections=24, minor_sections=12)
        rings.append((np.array(ring.vertices) + np.array([4.0 * k, 0.0, 0.0]), np.array(ring.faces)))
    report = check_surface(*shapes.join(*rings))
    assert report.handles == count
    assert [part.handles for part in report.parts] == [1] * count


def test_holes_are_counted_with_rim_and_place(shapes):
    vertices, faces = shapes.ball(2.0)
    top, bottom = vertices[:, 2].argmax(), vertices[:, 2].argmin()
    report = check_surface(vertices, faces[~(np.isin(faces, [top, bottom]).any(axis=1))])
    assert not report.ok
    assert report.loop_count == 2
    for loop in report.loops:
        assert loop.edges in (5, 6)  # an icosphere's vertices have 5 or 6 neighbours
        assert abs(loop.centre_um[2]) == pytest.approx(2.0, abs=0.1)
    (finding,) = [finding for finding in report.findings if finding.kind == "open edges"]
    assert finding.count == report.open_edges == sum(loop.edges for loop in report.loops)
    assert finding.faces
    assert finding.places_um


def test_each_damage_is_found(shapes):
    vertices, faces = shapes.ball(1.0, fineness=2)
    assert "doubled faces" in kinds(check_surface(vertices, np.vstack([faces, faces[7]])), "error")
    turned = faces.copy()
    turned[11] = turned[11][::-1]
    mixed = check_surface(vertices, turned)
    assert mixed.disagreeing_edges == 3
    assert "disagreeing faces" in kinds(mixed, "error")
    inside_out = check_surface(vertices, faces[:, ::-1])
    assert inside_out.inverted_parts == 1
    assert not inside_out.ok
    unused = check_surface(np.vstack([vertices, [[9.0, 9.0, 9.0]]]), faces)
    assert unused.unused_vertices == 1
    assert unused.ok
    assert unused.highest_um[0] < 2.0  # a vertex that nothing uses is not part of the box


def test_touching_bodies_are_crowded_edges_or_vertices(shapes):
    edge = check_surface(*shapes.weld(*shapes.join(shapes.cube(), shapes.cube(1.0, (1.0, 1.0, 0.0)))))
    assert edge.crowded_edges == 1
    vertex = check_surface(*shapes.weld(*shapes.join(shapes.cube(), shapes.cube(1.0, (1.0, 1.0, 1.0)))))
    assert (vertex.crowded_edges, vertex.crowded_vertices) == (0, 1)
    assert not vertex.ok


def test_nesting_makes_obstacles_and_bodies_in_them(shapes):
    mesh = shapes.join(shapes.ball(3.0), shapes.ball(2.0), shapes.ball(1.0), shapes.ball(1.0, at=(9.0, 0.0, 0.0)))
    report = check_surface(*mesh)
    assert sorted(part.depth for part in report.parts) == [0, 0, 1, 2]
    assert report.inverted_parts == 1  # the middle one must look into the obstacle
    assert {"obstacles", "separate bodies"} <= kinds(report, "note")


def test_many_small_parts_inside_are_placed_right(shapes):
    centres = np.stack(np.meshgrid(*[np.linspace(-1.5, 1.5, 4)] * 3), axis=-1).reshape(-1, 3)
    # A box aligned with the grid of obstacles: rays along an axis would run into its edges.
    box = shapes.cube(6.0, (-3.0, -3.0, -3.0))
    report = check_surface(*shapes.join(box, *(shapes.cube(0.2, tuple(c - 0.1)) for c in centres)))
    assert sorted(part.depth for part in report.parts) == [0] + [1] * len(centres)


def test_crossings_are_found_by_comparing_all_pairs(shapes):
    random = np.random.default_rng(3)
    corners = random.random((60, 1, 3)) * 2.0 + random.normal(scale=0.4, size=(60, 3, 3))
    vertices, faces = corners.reshape(-1, 3), np.arange(180).reshape(-1, 3)
    expected = set()
    for i in range(60):
        for j in range(i):
            if _segment_hits(corners[i], corners[j]) or _segment_hits(corners[j], corners[i]):
                expected.add((j, i))
    found = find_crossings(vertices, faces)
    assert found.complete
    assert len(found.pairs) == len(expected) > 20
    assert {tuple(sorted(pair)) for pair in found.pairs.tolist()} == expected


def _segment_hits(edges, triangle):
    """Whether an edge of one triangle passes through the other: solves p + t d = a + u e + v f."""
    a, b, c = triangle
    for k in range(3):
        p, q = edges[k], edges[(k + 1) % 3]
        t, u, v = np.linalg.solve(np.stack([p - q, b - a, c - a], axis=1), p - a)
        if 0 <= t <= 1 and u >= 0 and v >= 0 and u + v <= 1:
            return True
    return False


def test_a_fold_within_one_part_is_a_warning(shapes):
    vertices, faces = shapes.ball(1.0)
    vertices = vertices.copy()
    top = vertices[:, 2].argmax()
    vertices[top] = [0.0, 0.0, -1.5]  # pulled through the whole ball
    report = check_surface(vertices, faces)
    assert "crossing faces" in kinds(report, "warning")
    assert report.crossing_faces > 0
