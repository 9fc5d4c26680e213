"""STL files, text and binary; the latter through trimesh."""

from __future__ import annotations

import io
import re

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SurfaceError
from bemescape.surface.measure import equal_rows
from bemescape.surface.polygons import Polygons, decode_text, loaded_rows

__all__ = ["looks_like_binary_stl", "read_stl"]

Floats = NDArray[np.float64]

_HEADER = 84
_RECORD = 50
#: NaN and Inf do not match: such a corner is no position.
_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?"
_CORNER = rf"vertex\s+({_NUMBER}[ \t]+{_NUMBER}[ \t]+{_NUMBER})\s+"
_FACET = re.compile(rf"\s*facet\b[^\r\n]*\s+outer\s+loop\s+{_CORNER * 3}endloop\s+endfacet\b", re.IGNORECASE)
_SOLID = re.compile(r"\s*(end)?solid\b[^\r\n]*", re.IGNORECASE)


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
    if looks_like_binary_stl(data):
        soup = _read_binary(data, name)
    elif data[:5].lower() == b"solid" and b"\0" not in data:
        soup = _read_text(decode_text(data, name), name)
    else:
        claimed = int.from_bytes(data[80:84], "little") if len(data) >= _HEADER else 0
        raise SurfaceError(
            f"{name}: the header announces {claimed} triangles, which take {_HEADER + _RECORD * claimed} "
            f"bytes, but the file has {len(data)}; it is cut short or not STL"
        )
    number = equal_rows(soup + 0.0)  # -0.0 and 0.0 are one position
    _, first = np.unique(number, return_index=True)
    return Polygons.of_triangles(soup[first], number.reshape(-1, 3))


def _read_binary(data: bytes, name: str) -> Floats:
    import trimesh

    expected = (len(data) - _HEADER) // _RECORD
    loaded = trimesh.load(io.BytesIO(data), file_type="stl", process=False)
    if not isinstance(loaded, trimesh.Trimesh) or len(loaded.faces) != expected:
        raise SurfaceError(f"{name}: {expected} triangles were announced but not all can be read")
    soup: Floats = np.asarray(loaded.vertices, np.float64)[np.asarray(loaded.faces).reshape(-1)]
    return soup


def _read_text(text: str, name: str) -> Floats:
    """Corners (3m, 3) of a text file, facet after facet.

    Not through trimesh, which passes over facets that it cannot read.
    """
    corners: list[str] = []
    at, end = 0, len(text)
    opened = closed = 0
    while at < end:
        facet = _FACET.match(text, at)
        if facet is not None:
            corners.extend(facet.groups())
        else:
            facet = _SOLID.match(text, at)
            if facet is None or (facet.group(1) is None) != (opened == closed):
                break
            opened, closed = opened + (facet.group(1) is None), closed + (facet.group(1) is not None)
        at = facet.end()
    if text[at:].strip() or opened != closed or not opened:
        number = text.count("\n", 0, at) + 1
        line = text[at : at + 200].strip().split("\n", 1)[0]
        found = f"does not go on with a whole facet of finite numbers but with {line[:60]!r}" if line else "ends"
        raise SurfaceError(f"{name}: line {number} {found} before endsolid; the file is damaged or cut short")
    return loaded_rows(corners, "a corner", name)
