"""Every format comes in with its shape, its arrays and its unit; trimesh is the reference for shapes."""

from __future__ import annotations

import hashlib
import json

import numpy as np
import pytest
import pyvista
import trimesh

from bemescape.errors import SettingsError
from bemescape.surface import read_surface, read_unhealed

LAYOUTS = ["ascii", "binary_little_endian", "binary_big_endian"]


def labelled_ball(shapes):
    vertices, faces = shapes.ball(2.0, fineness=2)
    label = (vertices[faces].mean(axis=1)[:, 2] > 1.0).astype(np.int32) + 3
    return vertices, faces, label, vertices[:, 0].astype(np.float32)


def poly(vertices, faces, label, zone):
    mesh = pyvista.PolyData(vertices, np.column_stack([np.full(len(faces), 3), faces]).reshape(-1))
    mesh.cell_data["label"] = label
    mesh.point_data["zone"] = zone
    return mesh


@pytest.mark.parametrize(
    "name",
    [
        "a.ply",
        "text.ply",
        "big.ply",
        "a.stl",
        "text.stl",
        "a.obj",
        "a.off",
        "a.glb",
        "a.gltf",
        "a.vtp",
        "a.vtk",
        "text.vtk",
    ],
)
def test_every_format_gives_the_shape_that_was_written(name, shapes, tmp_path):
    vertices, faces, label, zone = labelled_ball(shapes)
    mesh = trimesh.Trimesh(vertices, faces, process=False)
    path = tmp_path / name
    if name == "a.gltf":
        for part, data in trimesh.exchange.gltf.export_gltf(trimesh.Scene(mesh)).items():
            (tmp_path / part).write_bytes(data)
        path = tmp_path / "model.gltf"
    elif name == "text.stl":
        mesh.export(path, file_type="stl_ascii")
    elif name == "text.ply":
        path.write_bytes(trimesh.exchange.ply.export_ply(mesh, encoding="ascii"))
    elif name == "big.ply":
        path.write_bytes(shapes.ply_bytes(vertices, faces, "binary_big_endian"))
    elif name.endswith((".vtp", ".vtk")):
        poly(vertices, faces, label, zone).save(path, binary=not name.startswith("text"))
    else:
        mesh.export(path)
    surface = read_surface(path, unit="um")
    assert len(surface.faces) == len(faces)
    assert len(surface.vertices) == len(vertices)
    assert surface.health.ok
    assert surface.healing is None
    # Single precision in most of these files: 6e-8 of the radius in each coordinate.
    assert surface.volume == pytest.approx(mesh.volume, rel=1e-6)
    assert surface.area == pytest.approx(mesh.area, rel=1e-6)
    assert surface.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


@pytest.mark.parametrize("name", [*LAYOUTS, "a.vtp", "a.vtk"])
def test_labels_of_faces_and_vertices_survive_healing(name, shapes, tmp_path):
    vertices, faces, label, zone = labelled_ball(shapes)
    keep = np.ones(len(faces), dtype=bool)
    keep[[5, 17]] = False  # two holes of one face each, far apart
    order = np.random.default_rng(4).permutation(int(keep.sum()))
    faces, label = faces[keep][order], label[keep][order]
    vertices, zone = np.vstack([vertices, [[9.0, 9.0, 9.0]]]), np.append(zone, np.float32(77.0))
    if name in LAYOUTS:
        path = tmp_path / "a.ply"
        path.write_bytes(shapes.ply_bytes(vertices, faces, name, label, zone))
    else:
        path = tmp_path / name
        poly(vertices, faces, label, zone).save(path)
    surface = read_surface(path, unit="um")
    assert {change.kind for change in surface.healing.changes} == {"closed hole", "dropped unused vertices"}
    height = surface.vertices[surface.faces].mean(axis=1)[:, 2]
    np.testing.assert_array_equal(surface.face_data["label"][: len(faces)], (height > 1.0)[: len(faces)] + 3)
    assert surface.face_data["label"].dtype.kind in "iu"
    # Zones repeat the x coordinate in single precision.
    np.testing.assert_allclose(surface.vertex_data["zone"], surface.vertices[:, 0], rtol=1e-6, atol=1e-7)


@pytest.mark.parametrize("kind", [*LAYOUTS, "obj", "off"])
def test_polygons_are_cut_and_their_labels_go_to_each_triangle(kind, shapes, write):
    vertices, quads = shapes.cube_quads()
    # One side as two triangles, so that sizes are mixed.
    polygons = [*quads[:5].tolist(), quads[5][:3].tolist(), quads[5][[0, 2, 3]].tolist()]
    label = np.array([10, 11, 12, 13, 14, 15, 15])
    if kind == "obj":
        rows = ["v " + " ".join(map(str, v)) for v in vertices] + [
            "f " + " ".join(str(c + 1) for c in p) for p in polygons
        ]
        path = write("a.obj", "\n".join(rows).encode())
    elif kind == "off":
        rows = ["OFF", f"{len(vertices)} {len(polygons)} 0", *(" ".join(map(str, v)) for v in vertices)]
        rows += [f"{len(p)} " + " ".join(map(str, p)) for p in polygons]
        path = write("a.off", "\n".join(rows).encode())
    else:
        path = write("a.ply", shapes.ply_bytes(vertices, polygons, kind, label))
    surface = read_surface(path, unit="um")
    assert surface.volume == pytest.approx(1.0, rel=1e-14)
    assert len(surface.faces) == 12
    if kind in LAYOUTS:
        for value in range(10, 16):
            assert surface.areas[surface.face_data["label"] == value].sum() == pytest.approx(1.0, rel=1e-14)


def test_a_concave_polygon_is_cut_without_overlap(shapes, write):
    # An L of area 3 as one polygon, extruded by 1. A fan from its first corner would leave the L.
    ring = np.array([[2.0, 0.0], [2.0, 1.0], [1.0, 1.0], [1.0, 2.0], [0.0, 2.0], [0.0, 0.0]])
    count = len(ring)
    vertices = np.vstack([np.c_[ring, np.zeros(count)], np.c_[ring, np.ones(count)]])
    polygons = [list(range(count))[::-1], list(range(count, 2 * count))]
    polygons += [[k, (k + 1) % count, count + (k + 1) % count, count + k] for k in range(count)]
    surface = read_surface(write("a.ply", shapes.ply_bytes(vertices, polygons)), unit="um")
    assert surface.volume == pytest.approx(3.0, rel=1e-14)
    assert surface.area == pytest.approx(2 * 3.0 + 8.0, rel=1e-14)  # area counts a fan's overlaps twice


def test_three_units_stretch_the_axes(shapes, write):
    path = write("a.ply", shapes.ply_bytes(*shapes.cube(100.0)))
    surface = read_surface(path, unit=["4 nm", "5 nm", "40 nm"])
    np.testing.assert_allclose(np.ptp(surface.bounds, axis=0), [0.4, 0.5, 4.0], rtol=1e-14)
    assert surface.volume == pytest.approx(0.4 * 0.5 * 4.0, rel=1e-13)
    np.testing.assert_allclose(surface.unit_um, [0.004, 0.005, 0.04], rtol=1e-14)


def test_a_unit_is_mandatory(shapes, write):
    path = write("a.ply", shapes.ply_bytes(*shapes.cube()))
    for missing in ({}, {"unit": None}, {"unit": " "}):
        with pytest.raises(SettingsError, match="say what one unit of the file is"):
            read_surface(path, **missing)
    with pytest.raises(SettingsError, match="2 entries"):
        read_surface(path, unit=["nm", "nm"])
    with pytest.raises(SettingsError):
        read_surface(path, unit="parsec/s")


@pytest.mark.parametrize(("unit", "words"), [("mm", "over 1 mm"), ("pm", "under 10 nm")])
def test_an_unlikely_size_asks_whether_the_unit_is_right(unit, words, shapes, write):
    health = read_unhealed(write("a.ply", shapes.ply_bytes(*shapes.cube(2.0))), unit=unit).health
    (finding,) = [finding for finding in health.findings if finding.kind == "unit"]
    assert finding.severity == "warning"
    assert words in finding.message
    assert "unit" in finding.message
    assert health.ok


def test_obj_with_normals_groups_materials_and_relative_numbers(write):
    text = """# a tetrahedron
mtllib none.mtl
v 0 0 0
v 1 0 0
vn 0 0 1
vt 0.5 0.5
usemtl red
v 0 1 0 0.5 0.5 0.5
v 0 0 1
f 1//1 3//1 2//1
usemtl blue
g lid
f 1/1/1 2/1/1 4/1/1
usemtl red
f -3 -2 \\
 -1
f 1 4 3
"""
    surface = read_surface(write("a.obj", text.encode()), unit="um")
    assert surface.volume == pytest.approx(1.0 / 6.0, rel=1e-14)
    np.testing.assert_array_equal(surface.faces[0], [0, 2, 1])  # the order of the file, whatever the material


def test_transformations_of_a_gltf_scene_are_applied(shapes, tmp_path):
    mesh = trimesh.Trimesh(*shapes.cube(), process=False)
    scene = trimesh.Scene()
    scene.add_geometry(mesh, transform=np.diag([2.0, 2.0, 2.0, 1.0]))
    scene.export(tmp_path / "a.glb")
    assert read_surface(tmp_path / "a.glb", unit="um").volume == pytest.approx(8.0, rel=1e-6)


def test_reports_are_ready_for_json(shapes, write):
    vertices, faces = shapes.join(shapes.ball(), shapes.ball(0.01, fineness=1, at=(3.0, 0.0, 0.0)))
    surface = read_surface(write("a.ply", shapes.ply_bytes(vertices, faces[1:])), unit="um")
    for report in (surface.health, surface.healing):
        assert json.loads(json.dumps(report.to_dict()))
        assert all(isinstance(line, str) and line for line in report.lines())
