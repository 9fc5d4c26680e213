"""Hostile and broken uploads: each is answered 4xx with a sentence, and nothing of it is kept."""

import gzip
import io
import pickle
import struct
import zipfile

import numpy as np
import pytest

from service.helpers import ball, ply_bytes, upload


def zipped():
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("ball.ply", b"0" * 10_000_000)
    return stream.getvalue()


def ply_header(vertices, faces, body=b""):
    return (
        f"ply\nformat binary_little_endian 1.0\nelement vertex {vertices}\nproperty float x\nproperty float y\n"
        f"property float z\nelement face {faces}\nproperty list uchar int vertex_indices\nend_header\n"
    ).encode() + body


def with_nan():
    vertices, faces, _ = ball()
    vertices = vertices.copy()
    vertices[7, 1] = np.nan
    return ply_bytes(vertices, faces)


def with_wild_corner():
    vertices, faces, _ = ball()
    faces = faces.copy()
    faces[3, 0] = 2_000_000_000
    return ply_bytes(vertices, faces)


WHOLE = ply_bytes(*ball())
CASES = {
    "empty": ("ball.ply", b"", 422),
    "cut short": ("ball.ply", WHOLE[: len(WHOLE) // 2], 422),
    "header only": ("ball.ply", WHOLE[:120], 422),
    "ten million faces announced": ("ball.ply", ply_header(10_000_000, 10_000_000), 422),
    "a number of vertices beyond memory": ("ball.ply", ply_header(10**15, 4, b"x" * 100), 422),
    "not a number": ("ball.ply", with_nan(), 422),
    "a corner that does not exist": ("ball.ply", with_wild_corner(), 422),
    "zip archive": ("ball.ply", zipped(), 422),
    "zip by name": ("ball.zip", zipped(), 415),
    "gzip bomb": ("ball.stl", gzip.compress(b"0" * 30_000_000), 422),
    "pickle": ("ball.ply", pickle.dumps({"a": 1}), 422),
    "pickle by name": ("ball.pkl", pickle.dumps({"a": 1}), 415),
    "no ending": ("ball", WHOLE, 415),
    "another format": ("ball.stl", WHOLE, 422),
    "stl with a wild count": ("ball.stl", b"\0" * 80 + struct.pack("<I", 2**32 - 1) + b"\0" * 50, 422),
    "xml that includes itself": (
        "ball.vtp",
        b'<?xml version="1.0"?><!DOCTYPE d [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;&a;&a;">'
        b'<!ENTITY c "&b;&b;&b;&b;&b;&b;&b;&b;&b;&b;">]><VTKFile type="PolyData">&c;</VTKFile>',
        422,
    ),
    "a file from the disk": ("ball.gltf", b'{"asset":{"version":"2.0"},"buffers":[{"uri":"/etc/passwd"}]}', 415),
    "points without faces": ("ball.obj", b"v 0 0 0\nv 1 0 0\nv 0 1 0\n", 422),
}


@pytest.mark.parametrize("case", CASES)
def test_a_bad_file_is_refused_with_a_sentence(client, case):
    name, data, status = CASES[case]
    before = len(client.get("/api/surfaces").json())
    answer = upload(client, data, name=name)
    assert answer.status_code == status, answer.text
    detail = answer.json()["detail"]
    assert 20 < len(detail) < 600
    assert "Traceback" not in detail
    assert "/tmp" not in detail
    assert "bemescape-" not in detail
    assert len(client.get("/api/surfaces").json()) == before


def test_too_many_faces_for_this_service(client):
    answer = upload(client, ply_bytes(*ball(6)))  # 81 920 faces, limit here 50 000
    assert answer.status_code in (413, 422)


def test_a_file_over_the_limit_is_refused_by_its_declared_length(live):
    assert _declared(live, 900_000_000).startswith(b"HTTP/1.1 413")


def _declared(live, length):
    """Only the head of the request is sent: the answer must not wait for a body."""
    import socket

    with socket.create_connection(("127.0.0.1", live.port), timeout=10) as line:
        line.sendall(
            b"POST /api/surfaces HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: multipart/form-data; boundary=b\r\n"
            + f"Content-Length: {length}\r\n\r\n".encode()
        )
        return line.recv(4000)


def test_a_body_without_a_declared_length_ends_at_the_limit(client):
    sent = 0

    def endless():
        nonlocal sent
        yield b'--b\r\nContent-Disposition: form-data; name="file"; filename="a.ply"\r\n\r\n'
        while sent < 50_000_000:
            sent += 65536
            yield b"0" * 65536

    import httpx

    try:
        answer = client.post(
            "/api/surfaces", content=endless(), headers={"Content-Type": "multipart/form-data; boundary=b"}
        )
        assert answer.status_code == 413
    except httpx.HTTPError:  # the service hung up, which it may
        pass
    assert sent < 20_000_000


def test_wrong_kinds_of_content_are_refused(client, surface):
    assert client.post("/api/surfaces", json={"file": "x"}).status_code == 415
    assert client.post("/api/runs", content=b"{}", headers={"Content-Type": "text/plain"}).status_code == 415
    assert client.post("/api/runs", content=b"{", headers={"Content-Type": "application/json"}).status_code == 400
    deep = b"[" * 100_000
    assert client.post("/api/runs", content=deep, headers={"Content-Type": "application/json"}).status_code == 400
    large = b'{"a":"' + b"x" * 400_000 + b'"}'
    assert client.post("/api/runs", content=large, headers={"Content-Type": "application/json"}).status_code == 413
    packed = {"Content-Type": "application/json", "Content-Encoding": "gzip"}
    assert client.post("/api/runs", content=gzip.compress(b"{}"), headers=packed).status_code == 415
    two = [("file", ("a.ply", WHOLE)), ("file", ("b.ply", WHOLE))]
    assert client.post("/api/surfaces", files=two, data={"unit": "nm"}).status_code in (400, 422)


@pytest.mark.parametrize("unit", ["", "parsec^2", "nm,nm", "-3 nm", "0 nm", "nm" * 400])
def test_a_unit_that_is_no_length_is_refused(client, unit):
    answer = upload(client, unit=unit)
    assert answer.status_code == 422
    assert "unit" in answer.json()["detail"]


@pytest.mark.parametrize(
    "name", ["../../../etc/cron.d/x.ply", "..\\..\\x.ply", "a\0b.ply", "x" * 300 + ".ply", "-rf .ply"]
)
def test_names_of_files_never_reach_the_disk(client, live, name):
    answer = upload(client, name=name)
    assert answer.status_code in (201, 400, 415, 422), answer.text
    folder = live.app.state.service.settings.data
    names = [path.name for path in folder.rglob("*") if path.is_file()]
    assert all(len(entry) == 64 or entry.startswith(("service.sqlite", "in_use")) for entry in names), names
    if answer.status_code == 201:
        assert len(answer.json()["name"]) <= 60
        client.delete(f"/api/surfaces/{answer.json()['id']}")
