"""Small meshes with closed-form volumes, and writers for formats that trimesh cannot write with arrays."""

from __future__ import annotations

import struct
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import trimesh


def _cube_quads(side: float = 1.0) -> tuple[np.ndarray, np.ndarray]:
    vertices = side * np.array([[x, y, z] for z in (0, 1) for y in (0, 1) for x in (0, 1)], dtype=float)
    quads = np.array([[0, 2, 3, 1], [4, 5, 7, 6], [0, 1, 5, 4], [2, 6, 7, 3], [0, 4, 6, 2], [1, 3, 7, 5]])
    return vertices, quads


def _cube(side: float = 1.0, at: tuple[float, float, float] = (0.0, 0.0, 0.0)) -> tuple[np.ndarray, np.ndarray]:
    vertices, quads = _cube_quads(side)
    return vertices + np.array(at), np.concatenate([quads[:, [0, 1, 2]], quads[:, [0, 2, 3]]])


def _ball(radius: float = 1.0, *, fineness: int = 3, at: tuple[float, float, float] = (0.0, 0.0, 0.0)):
    mesh = trimesh.creation.icosphere(subdivisions=fineness, radius=radius)
    return np.array(mesh.vertices) + np.array(at), np.array(mesh.faces)


def _join(*meshes: tuple[np.ndarray, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    starts = np.cumsum([0, *(len(vertices) for vertices, _ in meshes)])
    return (
        np.concatenate([vertices for vertices, _ in meshes]),
        np.concatenate([faces + start for (_, faces), start in zip(meshes, starts, strict=False)]),
    )


def _weld(vertices: np.ndarray, faces: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    unique, inverse = np.unique(vertices, axis=0, return_inverse=True)
    return unique, inverse.reshape(-1)[faces]


def _mobius(count: int = 24) -> tuple[np.ndarray, np.ndarray]:
    angle = 2.0 * np.pi * np.arange(count) / count
    rows = []
    for side in (-0.3, 0.3):
        radius = 1.0 + side * np.cos(0.5 * angle)
        rows.append(np.stack([radius * np.cos(angle), radius * np.sin(angle), side * np.sin(0.5 * angle)], axis=1))
    vertices = np.stack(rows, axis=1).reshape(-1, 3)
    faces = []
    for k in range(count):
        a, b = 2 * k, 2 * k + 1
        c, d = (1, 0) if k == count - 1 else (2 * k + 2, 2 * k + 3)
        faces += [[a, c, b], [b, c, d]]
    return vertices, np.array(faces)


def _ply_bytes(
    vertices: np.ndarray,
    faces: list[list[int]] | np.ndarray,
    layout: str = "ascii",
    label: np.ndarray | None = None,
    zone: np.ndarray | None = None,
) -> bytes:
    """PLY with polygons of any size, a face property `label` (int) and a vertex property `zone` (float)."""
    head = [
        "ply", f"format {layout} 1.0", "comment made by a test", f"element vertex {len(vertices)}",
        "property double x", "property double y", "property double z",
        *(["property float zone"] if zone is not None else []),
        f"element face {len(faces)}", "property list uchar int vertex_indices",
        *(["property int label"] if label is not None else []), "end_header\n",
    ]  # fmt: skip
    body = b""
    order = ">" if layout == "binary_big_endian" else "<"
    for k, vertex in enumerate(vertices):
        if layout == "ascii":
            row = [repr(float(value)) for value in vertex] + ([repr(float(zone[k]))] if zone is not None else [])
            body += (" ".join(row) + "\n").encode()
        else:
            body += struct.pack(order + "3d", *vertex)
            body += struct.pack(order + "f", zone[k]) if zone is not None else b""
    for k, face in enumerate(faces):
        if layout == "ascii":
            row = [len(face), *face] + ([int(label[k])] if label is not None else [])
            body += (" ".join(map(str, row)) + "\n").encode()
        else:
            body += struct.pack(f"{order}B{len(face)}i", len(face), *face)
            body += struct.pack(order + "i", int(label[k])) if label is not None else b""
    return "\n".join(head).encode() + body


@pytest.fixture(scope="session")
def shapes() -> SimpleNamespace:
    """Builders of (vertices, faces)."""
    return SimpleNamespace(
        cube=_cube,
        cube_quads=_cube_quads,
        ball=_ball,
        join=_join,
        weld=_weld,
        mobius=_mobius,
        ply_bytes=_ply_bytes,
    )


@pytest.fixture
def write(tmp_path: Path) -> Callable[[str, bytes], Path]:
    """Write bytes to a file in a folder of its own."""

    def written(name: str, data: bytes) -> Path:
        path = tmp_path / name
        path.write_bytes(data)
        return path

    return written
