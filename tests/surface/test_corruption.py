"""Whatever happens to the bytes of a file: a closed surface or a refusal, never a crash or a hang."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import numpy as np
import pytest
import pyvista
import trimesh
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from bemescape.errors import SettingsError, SurfaceError
from bemescape.surface import check_surface, read_surface

#: Reading a VTK file takes half a second, since it starts a process.
EXAMPLES = {
    **dict.fromkeys(["ply", "big.ply", "text.ply", "obj", "off", "stl", "text.stl", "glb"], 80),
    **dict.fromkeys(["vtp", "vtk", "text.vtk"], 8),
}


def intact(kind: str, shapes, folder: Path) -> bytes:
    vertices, faces = shapes.ball(1.0, fineness=1)
    path = folder / kind
    mesh = trimesh.Trimesh(vertices, faces, process=False)
    if kind.endswith(".ply") or kind == "ply":
        layout = {"ply": "binary_little_endian", "big.ply": "binary_big_endian", "text.ply": "ascii"}[kind]
        return shapes.ply_bytes(vertices, faces, layout, label=np.arange(len(faces)))
    if kind in ("vtp", "vtk", "text.vtk"):
        path = folder / f"a.{kind}"
        packed = np.column_stack([np.full(len(faces), 3), faces]).reshape(-1)
        pyvista.PolyData(vertices, packed).save(path, binary=kind != "text.vtk")
        return path.read_bytes()
    written = mesh.export(file_type="stl_ascii" if kind == "text.stl" else kind)
    return written.encode() if isinstance(written, str) else written


@st.composite
def damage(draw):
    """Cuts, flipped bits, foreign bytes, lines lost, doubled or swapped, and numbers changed."""
    return [
        (
            draw(st.sampled_from(["cut", "flip", "write", "drop", "repeat", "digit"])),
            draw(st.floats(0, 1)),
            draw(st.integers(0, 255)),
        )
        for _ in range(draw(st.integers(1, 4)))
    ]


def damaged(data: bytes, steps) -> bytes:
    for kind, where, value in steps:
        if not data:
            break
        at = min(int(where * len(data)), len(data) - 1)
        if kind == "cut":
            data = data[:at]
        elif kind == "flip":
            data = data[:at] + bytes([data[at] ^ (1 << value % 8)]) + data[at + 1 :]
        elif kind == "write":
            data = data[:at] + bytes([value]) * (1 + value % 5) + data[at + 1 + value % 5 :]
        elif kind == "drop":
            data = data[:at] + data[at + 1 + value :]
        elif kind == "repeat":
            data = data[:at] + data[max(at - value, 0) :]
        else:
            digits = [k for k in range(at, min(at + 200, len(data))) if 48 <= data[k] <= 57]
            if digits:
                data = data[: digits[0]] + str(value).encode() + data[digits[0] + 1 :]
    return data


@pytest.mark.parametrize("kind", EXAMPLES)
def test_damaged_bytes_give_a_closed_surface_or_a_refusal(kind, shapes, tmp_path):
    whole = intact(kind, shapes, tmp_path)
    ending = kind.rsplit(".", 1)[-1]
    outcomes = set()

    @settings(
        max_examples=EXAMPLES[kind], deadline=10_000, derandomize=True, database=None,
        suppress_health_check=[HealthCheck.too_slow],
    )  # fmt: skip
    @given(damage())
    def check(steps):
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / f"a.{ending}"
            path.write_bytes(damaged(whole, steps))
            started = time.perf_counter()
            try:
                surface = read_surface(path, unit="um")
            except (SurfaceError, SettingsError) as error:
                outcomes.add("refused")
                message = str(error)
            else:
                outcomes.add("read")
                message = ""
                report = check_surface(surface.vertices, surface.faces)
                assert report.ok
                assert np.isfinite(surface.volume)
                assert surface.volume > 0.0
            assert "\n" not in message
            assert len(message) < 700
            assert time.perf_counter() - started < 10.0

    check()
    assert "refused" in outcomes
