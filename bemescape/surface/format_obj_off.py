"""OBJ and OFF files.

Read here rather than by trimesh, which takes files that end early without a word, and regroups the faces
of an OBJ file by material so that face numbers in messages would mean nothing.
"""

from __future__ import annotations

import re

import numpy as np

from bemescape.errors import SurfaceError
from bemescape.surface.polygons import Polygons, decode_text, loaded_rings, loaded_rows, significant_lines

__all__ = ["read_obj", "read_off"]

#: Statements of the OBJ format that say nothing about the shape.
_OBJ_IGNORED = {
    "vn", "vt", "vp", "g", "o", "s", "l", "p", "usemtl", "mtllib", "mg", "bevel", "c_interp", "d_interp",
    "lod", "maplib", "usemap", "shadow_obj", "trace_obj", "cstype", "deg",
}  # fmt: skip
_OBJ_STRANGE = re.compile(
    r"^(?![ \t\r]*(?:$|#|(?:v|f|" + "|".join(sorted(_OBJ_IGNORED)) + r")(?:[ \t\r]|$)))", re.MULTILINE
)
_OBJ_POSITION = re.compile(r"^[ \t]*v[ \t]([^#\r\n]*)", re.MULTILINE)
_OBJ_FACE = re.compile(r"^[ \t]*f[ \t]([^#\r\n]*)", re.MULTILINE)
_OBJ_FACE_START = re.compile(r"^[ \t]*f[ \t]", re.MULTILINE)
_SLASHES = re.compile(r"/\S*")


def read_obj(data: bytes, name: str) -> Polygons:
    """Positions and faces of an OBJ file; normals, textures, groups and materials are left aside.

    Raises
    ------
    SurfaceError
        A line is not OBJ, or a face does not name its corners by whole numbers.
    """
    text = decode_text(data, name)
    if "\\" in text:
        text = text.replace("\\\r\n", " ").replace("\\\n", " ")
    strange = _OBJ_STRANGE.search(text)
    if strange:
        number = text.count("\n", 0, strange.start()) + 1
        line = text[strange.start() :].split("\n", 1)[0].strip()
        raise SurfaceError(f"{name}: line {number}, {line[:40]!r}, is not an OBJ statement; the file is damaged")
    positions = _OBJ_POSITION.findall(text)
    rings = _OBJ_FACE.findall(text)
    if not positions or not rings:
        raise SurfaceError(f"{name} holds {len(positions)} vertices and {len(rings)} faces; was it exported as points?")
    vertices = loaded_rows(positions, "a vertex line", name, columns=(0, 1, 2))
    if "/" in text:
        rings = [_SLASHES.sub("", ring) for ring in rings]
    sizes, corners = loaded_rings(rings, name)
    if (corners == 0).any():
        face = int(np.searchsorted(np.cumsum(sizes), np.flatnonzero(corners == 0)[0], side="right"))
        raise SurfaceError(f"{name}: face {face} names vertex 0, but OBJ files count from 1", faces=(face,))
    if (corners < 0).any():
        # Negative numbers count back from the last vertex before the face.
        known = np.array([len(_OBJ_POSITION.findall(part)) for part in _OBJ_FACE_START.split(text)[:-1]])
        corners = np.where(corners < 0, np.repeat(np.cumsum(known), sizes) + corners, corners - 1)
        return Polygons(vertices, sizes, corners)
    return Polygons(vertices, sizes, corners - 1)


def read_off(data: bytes, name: str) -> Polygons:
    """Positions and faces of an OFF file (also COFF and NOFF, whose colours and normals are left aside).

    Raises
    ------
    SurfaceError
        The counts and the lines do not agree, or a line is not numbers.
    """
    lines = list(significant_lines(decode_text(data, name)))
    head = re.fullmatch(r"(C?N?OFF)\s*(.*)", lines[0][1]) if lines else None
    if head is None:
        raise SurfaceError(f"{name} does not begin with OFF, COFF or NOFF; the file is damaged or of another format")
    rows = [line for _, line in lines[1:]]
    counts = head.group(2) or (rows.pop(0) if rows else "")
    numbers = re.fullmatch(r"(\d{1,18})\s+(\d{1,18})(\s+\d{1,18})?", counts)
    if numbers is None:
        raise SurfaceError(f"{name}: {counts[:40]!r} should be the counts of vertices, faces and edges")
    vertex_count, face_count = int(numbers.group(1)), int(numbers.group(2))
    if len(rows) != vertex_count + face_count:
        raise SurfaceError(
            f"{name}: the header announces {vertex_count} vertices and {face_count} faces, but {len(rows)} "
            f"lines "
            "follow; the file is cut short or its header is wrong"
        )
    if not vertex_count or not face_count:
        raise SurfaceError(f"{name} holds {vertex_count} vertices and {face_count} faces; was it exported as points?")
    vertices = loaded_rows(rows[:vertex_count], "a vertex line", name, columns=(0, 1, 2))
    rings = []
    for face, row in enumerate(rows[vertex_count:]):
        words = row.split()
        size = int(words[0]) if words[0].isascii() and words[0].isdigit() and len(words[0]) < 10 else -1
        if not 0 < size < len(words):
            raise SurfaceError(f"{name}: face {face}, {row[:40]!r}, does not hold the corners it counts", faces=(face,))
        rings.append(" ".join(words[1 : size + 1]))
    sizes, corners = loaded_rings(rings, name)
    return Polygons(vertices, sizes, corners)
