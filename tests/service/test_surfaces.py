"""Uploads: health, buffers and true windows, against the library and against trimesh."""

import io

import numpy as np
import pytest
import trimesh

import bemescape as be
from bemescape.service.buffers import packed, unpacked
from service.helpers import CAP, ball, ply_bytes, upload


def raw_buffers(client, path, **options):
    answer = client.request(options.pop("method", "GET"), path, **options)
    assert answer.status_code == 200, answer.text
    assert answer.headers["content-encoding"] == "gzip"
    return unpacked_plain(answer.content)


def unpacked_plain(data):
    import gzip

    return unpacked(gzip.compress(data))  # httpx has taken the compression off


def test_an_upload_answers_with_the_volume_that_trimesh_finds(surface):
    vertices, faces, _ = ball()
    expected = trimesh.Trimesh(vertices, faces, process=False)
    assert surface["solvable"] is True
    assert surface["health"]["closed"] is True
    np.testing.assert_allclose(surface["volume_um3"], expected.volume, rtol=1e-12)  # both sum the same tetrahedra
    np.testing.assert_allclose(surface["area_um2"], expected.area, rtol=1e-12)
    assert surface["label_arrays"][0]["name"] == "label"


def test_the_buffers_of_a_surface_are_its_mesh(client, surface):
    vertices, faces, _ = ball()
    header, arrays = raw_buffers(client, f"/api/surfaces/{surface['id']}/mesh")
    found = trimesh.Trimesh(arrays["vertices"] + header["offset_um"], arrays["faces"], process=False)
    np.testing.assert_allclose(found.volume, trimesh.Trimesh(vertices, faces).volume, rtol=1e-6)  # float32
    assert len(arrays["faces"]) == len(faces)


def test_the_mask_of_a_window_is_the_one_of_the_library(client, surface, tmp_path):
    """A cap of a ball within the straight-line distance r has the area π r² (Archimedes), less the flat facets."""
    disc = {"name": "pore", "disc": {"centre": [0.0, -1.0, 0.0], "radius": "300 nm"}}
    header, arrays = raw_buffers(
        client, f"/api/surfaces/{surface['id']}/windows", method="POST", json={"window": [disc, CAP]}
    )
    assert [window["name"] for window in header["windows"]] == ["pore", "cap"]
    np.testing.assert_allclose(header["windows"][0]["area_um2"], np.pi * 0.3**2, rtol=0.06)  # 320 flat faces
    corners = arrays["corners"][arrays["window"] == 0] + header["offset_um"]
    assert np.linalg.norm(corners - [0, -1, 0], axis=-1).max() < 0.3 * 1.001

    path = tmp_path / "ball.ply"
    path.write_bytes(ply_bytes(*ball()))
    cell = be.read_surface(path, unit="um")
    from bemescape.windows.placement import place_windows

    patch = place_windows(cell, [be.Window.labels("cap", array="label", value=1)]).patches[0]
    np.testing.assert_allclose(header["windows"][1]["area_um2"], cell.areas[patch.faces].sum(), rtol=1e-9)


def test_a_window_near_another_surface_names_that_surface(client, surface):
    """Two unit balls a gap g apart: what lies within d of the other is a cap, of the area 2 π (1 − z) on the sphere."""
    vertices, faces, _ = ball()
    other = upload(client, ply_bytes(vertices + np.array([0.0, 0.0, 2.02]), faces), name="next cell.ply").json()
    near = {"name": "contact", "near": {"file": other["id"], "distance": "150 nm"}}
    header, _ = raw_buffers(client, f"/api/surfaces/{surface['id']}/windows", method="POST", json={"window": [near]})
    # On the unit sphere, at the distance 1 + d from the other centre, which lies at c = 2.02.
    z = (1.0 + 2.02**2 - 1.15**2) / (2.0 * 2.02)
    np.testing.assert_allclose(header["windows"][0]["area_um2"], 2.0 * np.pi * (1.0 - z), rtol=0.25)  # 320 flat faces
    assert "'next_cell'" in " ".join(header["notes"])


def test_a_window_off_the_wall_is_refused_with_its_distance(client, surface):
    disc = {"name": "pore", "disc": {"centre": [0.0, 0.0, 3.0], "radius": "100 nm"}}
    answer = client.post(f"/api/surfaces/{surface['id']}/windows", json={"window": [disc]})
    assert answer.status_code == 422
    assert "'pore' lies 2 µm off the wall" in answer.json()["detail"]


def test_an_open_surface_is_kept_with_its_bad_places_but_not_solved(client):
    vertices, faces, _ = ball()
    answer = upload(client, ply_bytes(vertices, faces[:-40]), name="open.ply", heal="none")
    record = answer.json()
    assert answer.status_code == 201
    assert record["solvable"] is False
    finding = next(entry for entry in record["health"]["findings"] if entry["severity"] == "error")
    assert finding["places_um"]
    answer = client.post(f"/api/surfaces/{record['id']}/windows", json={"window": [CAP]})
    assert answer.status_code == 422
    assert "cannot be solved" in answer.json()["detail"]


def test_the_healed_copy_is_in_units_of_the_file(client):
    vertices, faces, _ = ball()
    record = upload(client, ply_bytes(vertices * 1000, faces), unit="nm").json()
    data = client.get(f"/api/surfaces/{record['id']}/healed.vtp").content
    import pyvista

    assert data.startswith(b"<?xml") or b"<VTKFile" in data[:200]
    reader = pyvista.PolyData()
    assert reader.n_points == 0
    import tempfile
    from pathlib import Path

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "healed.vtp"
        path.write_bytes(data)
        bounds = pyvista.read(path).bounds
    np.testing.assert_allclose(bounds[5], 1000.0, rtol=1e-6)


def test_voxel_units_stretch_the_axes(client):
    record = upload(client, unit="4 nm, 4 nm, 40 nm").json()
    low, high = record["bounds_um"]
    np.testing.assert_allclose(np.subtract(high, low)[2] / np.subtract(high, low)[0], 10.0, rtol=1e-9)


def test_demos_are_made_once_and_their_case_places(client):
    found = client.get("/api/demos").json()
    assert {demo["name"] for demo in found} == {"bouton", "spine", "nucleus", "mitochondrion"}
    first = client.post("/api/demos/spine").json()
    assert client.post("/api/demos/spine").json()["id"] == first["id"]
    case = next(demo["case"] for demo in found if demo["name"] == "spine")
    answer = client.post(f"/api/surfaces/{first['id']}/windows", json={"window": case["window"]})
    assert answer.status_code == 200, answer.text
    assert client.post("/api/demos/../../etc/passwd").status_code in (404, 405)


def test_positions_become_pores(client, surface):
    rows = "x,y,z\n1,0,0\n0,1,0\n-1,0,0\n"
    answer = client.post("/api/positions", files={"file": ("pores.csv", rows.encode())})
    assert answer.json()["rows"] == 3
    window = {"name": "pores", "points": {"file": answer.json()["id"], "radius": "150 nm"}}
    header, _ = raw_buffers(client, f"/api/surfaces/{surface['id']}/windows", method="POST", json={"window": [window]})
    assert [entry["name"] for entry in header["windows"]] == ["pores[1]", "pores[2]", "pores[3]"]
    wrong = client.post("/api/positions", files={"file": ("pores.csv", b"x,y,z\n1,nan,0\n")})
    assert wrong.status_code == 422
    assert "line 2" in wrong.json()["detail"]


def test_a_surface_with_runs_is_deleted_only_when_that_is_said(client, solved, surface):
    answer = client.delete(f"/api/surfaces/{surface['id']}")
    assert answer.status_code == 409
    assert solved["id"] in answer.json()["runs"]
    other = upload(client).json()
    assert client.delete(f"/api/surfaces/{other['id']}").status_code == 204
    assert client.get(f"/api/surfaces/{other['id']}").status_code == 404
    # Its bytes are those of the first surface, which still has them.
    assert client.get(f"/api/surfaces/{surface['id']}/mesh").status_code == 200


@pytest.mark.parametrize("kind", ["float32", "int32", "uint32"])
def test_packed_arrays_come_back(kind):
    values = np.arange(6).reshape(3, 2).astype(kind) - (3 if kind == "int32" else 0)
    header, arrays = unpacked(packed({"a": 1}, {"values": values}))
    assert header == {"a": 1}
    assert arrays["values"].dtype == np.dtype(kind)
    np.testing.assert_array_equal(arrays["values"], values)


def test_a_form_of_any_size_is_read_as_it_was_sent(client):
    data = ply_bytes(*ball(3))
    record = upload(client, io.BytesIO(data).read()).json()
    import hashlib

    assert record["sha256"] == hashlib.sha256(data).hexdigest()
