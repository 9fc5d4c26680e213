"""STL files, text and binary, through trimesh."""

from __future__ import annotations

import io
import re

import numpy as np

from bemescape.errors import SurfaceError
from bemescape.surface.polygons import Polygons, decode_text

__all__ = ["looks_like_binary_stl", "read_stl"]

_HEADER = 84
_RECORD = 50
_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_CORNER = re.compile(rf"vertex\s+{_NUMBER}\s+{_NUMBER}\s+{_NUMBER}\s*")


def looks_like_binary_stl(data: bytes) -> bool:
    """Whether the triangle count in the header agrees with the size of the file."""
    return len(data) > _HEADER and len(data) == _HEADER + _RECORD * int.from_bytes(data[80:84], "little")


def read_stl(data: bytes, name: str) -> Polygons:
    """Triangles of an STL file; corners at equal positions become one vertex.

    The format cannot say that triangles share a corner, so nothing is lost by that.

    Raises
    ------
    SurfaceError
        The size and the count disagree, or a text file is not made of whole facets.
    """
    import trimesh

    if looks_like_binary_stl(data):
        content, expected = data, (len(data) - _HEADER) // _RECORD
    elif data[:5].lower() == b"solid" and b"\0" not in data:
        content, expected = _checked_text(decode_text(data, name), name)
    else:
        claimed = int.from_bytes(data[80:84], "little") if len(data) >= _HEADER else 0
        raise SurfaceError(
            f"{name}: the header announces {claimed} triangles, which take {_HEADER + _RECORD * claimed} "
            f"bytes, but the "
            f"file has {len(data)}; it is cut short or not STL"
        )
    loaded = trimesh.load(io.BytesIO(content), file_type="stl", process=False)
    if not isinstance(loaded, trimesh.Trimesh) or len(loaded.faces) != expected:
        raise SurfaceError(
            f"{name}: {expected} triangles were announced but not all can be read; export it again"
        )
    soup = np.asarray(loaded.vertices, np.float64) + 0.0  # -0.0 and 0.0 are one position
    vertices, corners = np.unique(soup, axis=0, return_inverse=True)
    return Polygons.of_triangles(vertices, corners.reshape(-1)[np.asarray(loaded.faces, np.int64)])


def _checked_text(text: str, name: str) -> tuple[bytes, int]:
    """The text as one solid without names, and the number of its facets."""
    expected = ("facet", "outer", "vertex", "vertex", "vertex", "endloop", "endfacet")
    kept: list[str] = ["solid mesh"]
    step = 0
    open_solid = False
    for number, raw in enumerate(text.splitlines(), start=1):
        line = raw.strip().lower()
        if not line:
            continue
        word = line.split(None, 1)[0]
        if step == 0 and word in {"solid", "endsolid"}:
            open_solid = word == "solid"
            continue
        # NaN and Inf do not match the pattern either: such a corner is no position.
        if word != expected[step] or (word == "vertex" and _CORNER.fullmatch(line) is None):
            raise SurfaceError(
                f"{name}: line {number}, {line[:60]!r}, should be {expected[step]!r} with finite numbers; "
                f"the file is "
                "damaged"
            )
        kept.append(line)
        step = (step + 1) % len(expected)
    if open_solid or step:
        raise SurfaceError(f"{name} ends before endsolid; the file is cut short")
    return "\n".join([*kept, "endsolid mesh\n"]).encode(), (len(kept) - 1) // len(expected)
