"""VTP and legacy VTK files, through VTK's own readers, with their cell and point arrays."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np

from bemescape.errors import SurfaceError
from bemescape.surface.polygons import Array, Polygons

__all__ = ["read_vtk_legacy", "read_vtp"]

#: Words of a legacy file that a count follows, and the group of the match that holds it.
_LEGACY_COUNTS = re.compile(
    rb"^(POINTS|POLYGONS|VERTICES|LINES|TRIANGLE_STRIPS|CELL_DATA|POINT_DATA|FIELD|METADATA|OFFSETS|CONNECTIVITY)"
    rb"[ \t]+(\S+)(?:[ \t]+(\S+))?",
    re.MULTILINE,
)
_LEGACY_ARRAY = re.compile(
    rb"^\S+[ \t]+(\d+)[ \t]+(\d+)[ \t]+"
    rb"(?:bit|char|unsigned_\w+|short|int|long|vtk\w+|float|double|string)\s*$",
    re.MULTILINE,
)
_XML_COUNT = re.compile(rb'\b(Number\w*)\s*=\s*"([^"]*)"')
#: zlib cannot pack data tighter than this, so a larger count in a compressed file is wrong.
_PACKING_LIMIT = 1032
#: Limits of the reading process: bytes of address space (VTK's libraries alone take a third of it), seconds.
_MEMORY = 1_500_000_000
_SECONDS = 8.0
_BYTES_PER_SECOND = 10e6
_STRIPS = 3


def read_vtk_legacy(path: Path, data: bytes, name: str) -> Polygons:
    """Polygons and arrays of a legacy VTK file with a POLYDATA set.

    Raises
    ------
    SurfaceError
        Another kind of data set, counts larger than the file, or anything that VTK itself objects to.
    """
    lines = data[:2048].split(b"\n", 4)
    kind = re.search(rb"^DATASET[ \t]+(\w+)", data[:4096], re.MULTILINE)
    if len(lines) < 4 or kind is None:
        raise SurfaceError(f"{name}: the VTK header names no DATASET; the file is damaged or cut short")
    if kind.group(1).upper() != b"POLYDATA":
        raise SurfaceError(
            f"{name} holds a {kind.group(1).decode('ascii', 'replace')[:40]}, not a surface; extract the "
            f"surface as "
            "POLYDATA first"
        )
    for match in _LEGACY_COUNTS.finditer(data):
        for count in match.groups()[1:]:
            if count is not None and re.fullmatch(rb"-?\d+", count):
                _refuse_large(count, len(data), match.group(1), name)
    for match in _LEGACY_ARRAY.finditer(data):
        for count in match.groups():
            _refuse_large(count, len(data), b"array", name)
    return _polygons(path, data, name, "vtk")


def read_vtp(path: Path, data: bytes, name: str) -> Polygons:
    """Polygons and arrays of a VTP file.

    Raises
    ------
    SurfaceError
        Another kind of data set, counts larger than the file can hold, or anything that VTK itself objects
        to.
    """
    head = data[:65536]
    kind = re.search(rb'<VTKFile[^>]*\btype\s*=\s*"(\w+)"', head)
    if kind is None or kind.group(1) != b"PolyData":
        found = kind.group(1).decode("ascii", "replace")[:40] if kind else "unnamed data set"
        raise SurfaceError(f"{name} holds a {found}, not PolyData; extract the surface first")
    if b"<!DOCTYPE" in head or b"<!ENTITY" in head:
        raise SurfaceError(f"{name} declares its own XML entities, which mesh files never need; it is not read")
    if b"</VTKFile>" not in data[-4096:]:
        raise SurfaceError(f"{name} does not end with </VTKFile>; the file is cut short")
    for match in _XML_COUNT.finditer(data):
        if not match.group(2).isdigit():
            raise SurfaceError(f"{name}: {match.group(0)[:60].decode('ascii', 'replace')} is not a count")
        _refuse_large(match.group(2), len(data) * _PACKING_LIMIT, match.group(1), name)
    return _polygons(path, data, name, "vtp")


def _refuse_large(count: bytes, limit: int, word: bytes, name: str) -> None:
    if len(count) > 18 or not 0 <= int(count) <= limit:
        raise SurfaceError(
            f"{name}: {word.decode('ascii', 'replace')} announces {count[:30].decode()} entries, more than "
            f"the file can "
            "hold; it is cut short or its header is wrong"
        )


def _polygons(path: Path, data: bytes, name: str, kind: str) -> Polygons:
    child = Path(__file__).with_name("vtk_child.py")
    memory = _MEMORY + 16 * len(data)
    with tempfile.TemporaryDirectory() as folder:
        target = Path(folder) / "read.npz"
        try:
            done = subprocess.run(
                [sys.executable, "-P", str(child), kind, str(path.resolve()), str(target), str(memory)],
                capture_output=True,
                timeout=_SECONDS + len(data) / _BYTES_PER_SECOND,
                check=False,
                # Every idle thread of a numeric library would count against the limit of memory.
                env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
            )
        except subprocess.TimeoutExpired as error:
            raise SurfaceError(
                f"{name}: VTK did not finish reading it in {error.timeout:.0f} s; the file is damaged"
            ) from error
        complaint = _complaint(done.stderr)
        if done.returncode == _STRIPS:
            raise SurfaceError(f"{name} holds triangle strips; export it again as plain polygons")
        if done.returncode != 0 or complaint or not target.is_file():
            reason = complaint or "VTK gave up on it"
            raise SurfaceError(f"{name} cannot be read ({reason}); the file is damaged: export it again")
        with np.load(target, allow_pickle=False) as arrays:
            found: dict[str, Array] = {key: arrays[key] for key in arrays.files}
    points, offsets, corners = (found.pop(key) for key in ("points", "offsets", "corners"))
    ends = offsets.astype(np.int64)
    sizes = ends[1:] - ends[:-1]
    if (sizes < 0).any() or sizes.sum() != len(corners):
        raise SurfaceError(f"{name}: the sizes of its polygons do not add up; the file is damaged")
    vertices = points.astype(np.float64).reshape(-1, 3)
    return Polygons(
        vertices,
        sizes,
        corners.astype(np.int64),
        _named(found, "face ", len(sizes), name),
        _named(found, "vertex ", len(vertices), name),
    )


def _complaint(stderr: bytes) -> str:
    """What VTK, or Python in the child, objected to; empty for mere warnings."""
    lines = stderr.decode("utf-8", errors="replace").splitlines()
    for line in lines:
        if "ERR|" in line:
            return re.sub(r"\(0x\w+\)|\x1b\[\d*m", "", line.split("ERR|", 1)[1]).strip()[:160]
    if any("Traceback" in line for line in lines):
        return lines[-1][:160]
    return ""


def _named(found: dict[str, Array], prefix: str, length: int, name: str) -> dict[str, Array]:
    kept = {key.removeprefix(prefix): array for key, array in found.items() if key.startswith(prefix)}
    for key, array in kept.items():
        if len(array) != length:
            raise SurfaceError(
                f"{name}: the array {key!r} has {len(array)} entries for {length} places; the file is damaged"
            )
    return kept
