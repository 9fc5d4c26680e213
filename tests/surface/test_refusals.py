"""Broken files are refused in one sentence that says what is wrong, soon and without filling the memory."""

from __future__ import annotations

import base64
import io
import json
import pickle
import struct
import time
import tracemalloc
import zipfile

import numpy as np
import pytest
import pyvista
import trimesh

from bemescape.errors import SettingsError, SurfaceError
from bemescape.surface import heal_surface, read_surface, read_unhealed

TETRAHEDRON = (
    np.array([[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]]),
    np.array([[0, 2, 1], [0, 1, 3], [1, 2, 3], [0, 3, 2]]),
)
OBJ = "v 0 0 0\nv 1 0 0\nv 0 1 0\nv 0 0 1\nf 1 3 2\nf 1 2 4\nf 2 3 4\nf 1 4 3\n"
OFF = "OFF\n4 4 6\n0 0 0\n1 0 0\n0 1 0\n0 0 1\n3 0 2 1\n3 0 1 3\n3 1 2 3\n3 0 3 2\n"
STL_TEXT = trimesh.Trimesh(*TETRAHEDRON, process=False).export(file_type="stl_ascii")
STL = trimesh.Trimesh(*TETRAHEDRON, process=False).export(file_type="stl")
GLB = trimesh.Trimesh(*TETRAHEDRON, process=False).export(file_type="glb")


def ply(shapes, layout="ascii"):
    return shapes.ply_bytes(*TETRAHEDRON, layout)


def zipped() -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w") as archive:
        archive.writestr("a.ply", "ply")
    return stream.getvalue()


def gltf(change) -> bytes:
    document = json.loads(GLB[20 : 20 + int.from_bytes(GLB[12:16], "little")])
    document["buffers"][0]["uri"] = "data:application/octet-stream;base64," + (
        base64.b64encode(GLB[28 + int.from_bytes(GLB[12:16], "little") :]).decode()
    )
    change(document)
    return json.dumps(document).encode()


PLAIN = {
    "empty.ply": (b"", "is empty"),
    "blank.obj": (b" \n\n", "is empty"),
    "points.obj": (b"v 0 0 0\nv 1 0 0\nv 0 1 0\n", "3 vertices and 0 faces"),
    "zip.ply": (zipped(), "looks like a zip archive"),
    "pickle.stl": (pickle.dumps([1, 2, 3]), "looks like a Python pickle"),
    "really_stl.ply": (STL, "looks like STL"),
    "really_off.obj": (OFF.encode(), "looks like OFF"),
    "really_glb.stl": (GLB, "looks like GLB"),
    "mesh.xyz": (OFF.encode(), "does not end in one of"),
    "page.ply": (b"<!DOCTYPE html><html>not found</html>", "looks like a web page"),
    "noise.ply": (bytes(range(1, 255)) * 9, "does not begin as a PLY file does"),
    "utf16.obj": (OBJ.encode("utf-16"), "UTF-16"),
    "zero_byte.obj": (OBJ.encode() + b"\0", "zero byte at position"),
    "nan.obj": (OBJ.replace("v 0 1 0", "v 0 nan 0").encode(), "not finite positions, the first is number 2"),
    "inf.off": (OFF.replace("0 1 0", "0 1 inf").encode(), "not finite positions"),
    "nan.stl": (STL_TEXT.replace("1.", "nan").encode(), "whole facet of finite numbers"),
    "nan_binary.stl": (STL[:96] + struct.pack("<f", float("nan")) + STL[100:], "not finite positions"),
    "zero_index.obj": (OBJ.replace("f 1 3 2", "f 0 3 2").encode(), "count from 1"),
    "too_negative.obj": (OBJ.replace("f 1 3 2", "f -9 3 2").encode(), "names vertex -5"),
    "out_of_range.obj": (OBJ.replace("f 1 3 2", "f 1 3 7").encode(), "names vertex 6, but .* 0 to 3"),
    "words.obj": (OBJ.replace("f 1 3 2", "f 1 3 x").encode(), "whole numbers"),
    "two_corners.obj": (OBJ.replace("f 1 3 2", "f 1 3").encode(), "face 0 has 2 corners"),
    "garbled.obj": (OBJ.replace("v 0 1 0", "vv 0 1 0").encode(), "line 3"),
    "short_vertex.obj": (OBJ.replace("v 0 1 0", "v 0 1").encode(), "cannot be read as numbers"),
    "negative.off": (OFF.replace("3 0 2 1", "3 0 -2 1").encode(), "names vertex -2"),
    "cut.off": (OFF[:50].encode(), "announces 4 vertices and 4 faces, but"),
    "huge.off": (OFF.replace("4 4 6", "99999999999 4 6").encode(), "announces 99999999999 vertices"),
    "no_counts.off": (b"OFF\nabc\n", "should be the counts"),
    "cut.stl": (STL[:-20], "announces 4 triangles, which take 284 bytes"),
    "huge.stl": (STL[:80] + b"\xff\xff\xff\xff" + STL[84:], "announces 4294967295 triangles"),
    "cut_text.stl": (STL_TEXT[: len(STL_TEXT) // 2].encode(), "cut short"),
    "cut.glb": (GLB[:-30], "cut short"),
    "no_faces.stl": (b"x" * 80 + bytes(4), "announces 0 triangles"),
}


@pytest.mark.parametrize("name", PLAIN)
def test_a_broken_file_is_refused_with_its_reason(name, write):
    data, reason = PLAIN[name]
    started = time.perf_counter()
    with pytest.raises(SurfaceError, match=reason) as caught:
        read_surface(write(name, data), unit="um")
    assert time.perf_counter() - started < 10.0
    assert "\n" not in str(caught.value)


PLY_DAMAGE = {
    "huge vertex count": (b"vertex 4", b"vertex 400000000000", "announces 400000000000 vertex"),
    "huge face count": (b"face 4", b"face 4000000000", "announces 4000000000 face"),
    "too few faces announced": (b"face 4", b"face 3", "follow"),
    "negative count": (b"face 4", b"face -4", "means nothing"),
    "unknown type": (b"double x", b"complex x", "is not a PLY property"),
    "twice the same property": (b"double y", b"double x", "declared twice"),
    "no y": (b"property double y\n", b"", "x, y, z|follow|left for them|does not hold"),
    "unknown format": (b"1.0\n", b"1.0\nformat odd 1.0\n", "the PLY format is 'odd'"),
    "no end of header": (b"end_header", b"end_of_head", "no end_header"),
    "fractional corners": (b"uchar int", b"uchar float", "fractional|cut short"),
}


@pytest.mark.parametrize("layout", ["ascii", "binary_little_endian", "binary_big_endian"])
@pytest.mark.parametrize("damage", PLY_DAMAGE)
def test_a_broken_ply_is_refused_before_anything_is_allocated(layout, damage, shapes, write):
    before, after, reason = PLY_DAMAGE[damage]
    path = write("a.ply", ply(shapes, layout).replace(before, after, 1))
    tracemalloc.start()
    try:
        with pytest.raises(SurfaceError, match=reason):
            read_surface(path, unit="um")
        assert tracemalloc.get_traced_memory()[1] < 50e6
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize("layout", ["ascii", "binary_little_endian", "binary_big_endian"])
def test_a_ply_cut_anywhere_is_refused(layout, shapes, write):
    data = ply(shapes, layout)
    lines = data.rstrip(b"\n")
    for end in range(1, len(lines) - 1, 7):
        if layout == "ascii" and lines[end:].isdigit():
            continue
        with pytest.raises(SurfaceError):
            read_surface(write("a.ply", data[:end]), unit="um")


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda d: d["accessors"][0].update(count=10**12), "announces 1000000000000 entries"),
        (lambda d: d["bufferViews"][0].update(byteLength=10**12), "cut short"),
        (lambda d: d["meshes"][0]["primitives"][0].update(mode=1), "points, lines or strips"),
        (lambda d: d["nodes"][0].update(children=[0]), "do not form a tree"),
        (lambda d: d["buffers"][0].update(uri="../secret.bin"), "only files in the same folder"),
        (lambda d: d["buffers"][0].update(uri="missing.bin"), "is missing"),
        (lambda d: d.update(extensionsRequired=["KHR_draco_mesh_compression"]), "without compression"),
        (lambda d: d["meshes"][0]["primitives"][0]["attributes"].update(POSITION=99), "does not hold"),
        (lambda d: d.update(scene=7), "scene number 7"),
    ],
)
def test_a_gltf_that_contradicts_itself_is_refused(change, reason, write):
    assert read_surface(write("a.gltf", gltf(lambda _: None)), unit="um").volume == pytest.approx(1 / 6, rel=1e-6)
    with pytest.raises(SurfaceError, match=reason):
        read_surface(write("a.gltf", gltf(change)), unit="um")


def test_broken_vtk_files_are_refused(write, tmp_path):
    mesh = pyvista.PolyData(TETRAHEDRON[0], np.column_stack([np.full(4, 3), TETRAHEDRON[1]]).reshape(-1))
    mesh.save(tmp_path / "t.vtk", binary=False)
    mesh.save(tmp_path / "t.vtp")
    text, xml = (tmp_path / "t.vtk").read_bytes(), (tmp_path / "t.vtp").read_bytes()
    cases = {
        "huge.vtk": (text.replace(b"POINTS 4", b"POINTS 400000000000"), "announces 400000000000 entries"),
        "cut.vtk": (text[: len(text) // 2], "cannot be read|4 vertices and 0 faces"),
        "grid.vtk": (text.replace(b"POLYDATA", b"UNSTRUCTURED_GRID"), "not a surface"),
        "cut.vtp": (xml[: len(xml) // 2], "cut short"),
        "torn.vtp": (xml[: len(xml) // 2] + b"</VTKFile>", "cannot be read"),
        "huge.vtp": (
            xml.replace(b'NumberOfPoints="4"', b'NumberOfPoints="4000000000000"'),
            "more than the file",
        ),
        "entities.vtp": (xml.replace(b"<VTKFile", b'<!DOCTYPE x [<!ENTITY a "b">]><VTKFile', 1), "entities"),
    }
    for name, (data, reason) in cases.items():
        with pytest.raises(SurfaceError, match=reason):
            read_surface(write(name, data), unit="um")


def test_folders_and_missing_files_are_named(tmp_path):
    with pytest.raises(SurfaceError, match="is a folder"):
        read_surface(tmp_path, unit="um")
    with pytest.raises(SurfaceError, match="there is no file"):
        read_surface(tmp_path / "a.ply", unit="um")
    with pytest.raises(SurfaceError, match="cannot be read"):
        read_surface("a\0b.ply", unit="um")


def test_an_open_sheet_is_refused_with_the_place_of_its_rim(shapes, write):
    vertices, faces = shapes.ball(2.0)
    upper = vertices[faces].mean(axis=1)[:, 2] > 0.3
    path = write("bowl.ply", shapes.ply_bytes(vertices, faces[upper]))
    for mode in ("none", "auto"):
        with pytest.raises(SurfaceError, match=r"open edges around 1 holes.*µm.*open sheet") as caught:
            read_surface(path, unit="um", heal=mode)
        assert caught.value.faces


def test_a_mobius_strip_is_refused_as_one_sided(shapes, write):
    path = write("strip.ply", shapes.ply_bytes(*shapes.mobius()))
    health = read_unhealed(path, unit="um").health
    assert health.one_sided_parts == 1
    with pytest.raises(SurfaceError, match="only one side"):
        read_surface(path, unit="um")


def test_a_cloud_of_loose_triangles_is_refused(shapes, write):
    vertices, faces = shapes.ball()
    random = np.random.default_rng(0)
    loose = vertices[faces].reshape(-1, 3) + random.normal(scale=0.05, size=(3 * len(faces), 3))
    path = write("soup.ply", shapes.ply_bytes(loose, np.arange(len(loose)).reshape(-1, 3)))
    with pytest.raises(SurfaceError, match="not a closed surface"):
        read_surface(path, unit="um")


def test_overlapping_parts_are_refused_and_sent_to_rebuild(shapes, write):
    path = write("two.ply", shapes.ply_bytes(*shapes.join(shapes.cube(), shapes.cube(1.0, (0.51, 0.52, 0.53)))))
    with pytest.raises(SurfaceError, match=r"these parts overlap.*heal='rebuild'"):
        read_surface(path, unit="um")


def test_an_unknown_mode_or_a_voxel_without_rebuild_is_refused(shapes, write):
    surface = read_unhealed(write("a.ply", shapes.ply_bytes(*shapes.cube())), unit="um")
    with pytest.raises(SettingsError, match="'none', 'auto' or 'rebuild'"):
        heal_surface(surface, "gently")
    with pytest.raises(SettingsError, match="voxel"):
        heal_surface(surface, "auto", voxel="20 nm")


def test_files_beyond_the_limits_are_refused_with_a_way_out(shapes, write, monkeypatch):
    path = write("a.ply", shapes.ply_bytes(*shapes.ball()))
    for limit, reason in (
        ("bemescape.surface.read.FILE_LIMIT_BYTES", r"limit 0 MB.*binary PLY"),
        ("bemescape.surface.polygons.TEXT_LIMIT_BYTES", r"MB of text.*binary PLY"),
        ("bemescape.surface.polygons.FACES_LIMIT", r"makes 1280 triangles \(limit 1000\)"),
    ):
        with monkeypatch.context() as patch:
            patch.setattr(limit, 1000)
            with pytest.raises(SurfaceError, match=reason):
                read_surface(path, unit="um")


def test_refusing_prints_nothing(shapes, write, capfd):
    for name in ("nan.stl", "cut.glb", "garbled.obj"):
        with pytest.raises(SurfaceError):
            read_surface(write(name, PLAIN[name][0]), unit="um")
    torn = b"# vtk DataFile Version 3.0\na\nASCII\nDATASET POLYDATA\nPOINTS 9 float\n1"
    with pytest.raises(SurfaceError):
        read_surface(write("a.vtk", torn), unit="um")
    assert capfd.readouterr() == ("", "")
