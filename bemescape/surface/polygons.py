"""What every file reader hands back: polygons as flat arrays, checked once and cut into triangles."""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SurfaceError

__all__ = [
    "LARGEST",
    "Polygons",
    "Triangles",
    "decode_text",
    "loaded_rings",
    "loaded_rows",
    "significant_lines",
    "triangulated",
]

Array = NDArray[np.generic]

_WHOLE = re.compile(r"[\s\d-]*")
#: Longer text is refused: taken apart, it would need more than ten times as much memory.
TEXT_LIMIT_BYTES = 80_000_000
#: Surfaces of more faces are refused: neither the checks nor the solve are made for them.
FACES_LIMIT = 1_000_000
#: Coordinates beyond this are damage, whatever the unit.
LARGEST = 1e30


@dataclass(frozen=True)
class Polygons:
    """Faces of any number of corners.

    Attributes
    ----------
    vertices : (n, 3) float64
        In units of the file.
    sizes : (p,) int64
        Corners of each face.
    corners : (sizes.sum(),) int64
        Vertex numbers, face after face.
    face_data, vertex_data : mapping of str to array
        First axis p or n.
    """

    vertices: NDArray[np.float64]
    sizes: NDArray[np.int64]
    corners: NDArray[np.int64]
    face_data: Mapping[str, Array] = field(default_factory=dict)
    vertex_data: Mapping[str, Array] = field(default_factory=dict)

    @classmethod
    def of_triangles(
        cls,
        vertices: NDArray[np.float64],
        faces: NDArray[np.int64],
        face_data: Mapping[str, Array] | None = None,
        vertex_data: Mapping[str, Array] | None = None,
    ) -> Polygons:
        """Polygons that are all triangles: vertices (n, 3), faces (m, 3)."""
        sizes = np.full(len(faces), 3, dtype=np.int64)
        return cls(vertices, sizes, faces.reshape(-1), face_data or {}, vertex_data or {})


@dataclass(frozen=True)
class Triangles:
    """Triangles (m, 3) over vertices (n, 3), in file units, with the arrays of the file."""

    vertices: NDArray[np.float64]
    faces: NDArray[np.int64]
    face_data: Mapping[str, Array]
    vertex_data: Mapping[str, Array]


def decode_text(data: bytes, name: str) -> str:
    """Text of a file that must be text.

    Raises
    ------
    SurfaceError
        UTF-16 or binary content, or too much of it.
    """
    if len(data) > TEXT_LIMIT_BYTES:
        raise SurfaceError(
            f"{name} holds {len(data) / 1e6:.0f} MB of text (limit {TEXT_LIMIT_BYTES / 1e6:.0f} MB); "
            "save it as binary PLY, or with fewer triangles"
        )
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise SurfaceError(f"{name} is UTF-16 text, which mesh files never are; save it again as plain UTF-8")
    zero = data.find(b"\0")
    if zero >= 0:
        raise SurfaceError(
            f"{name} should be text but has a zero byte at position {zero}: the file is damaged or binary; "
            "export it again"
        )
    # Only comments and names may hold anything but ASCII, so a wrong guess there does no harm.
    return data.decode("utf-8", errors="replace").removeprefix("\ufeff")


def significant_lines(text: str) -> Iterator[tuple[int, str]]:
    """Number (from 1) and text of each line that holds more than blanks and comments."""
    for number, line in enumerate(io.StringIO(text), start=1):
        kept = line.split("#", 1)[0].strip()
        if kept:
            yield number, kept


def loaded_rows(
    rows: Sequence[str], what: str, name: str, *, columns: Sequence[int] | None = None
) -> NDArray[np.float64]:
    """Numbers (r, c) in text rows of equal length.

    Raises
    ------
    SurfaceError
        A row holds anything else, or rows differ in length.
    """
    try:
        return np.loadtxt(rows, dtype=np.float64, comments=None, ndmin=2, usecols=columns)
    except (ValueError, IndexError, OverflowError) as error:
        reason = str(error).split(";")[0].split("\n")[0][:120]
        raise SurfaceError(f"{name}: {what} cannot be read as numbers ({reason}); export the file again") from error


def loaded_rings(rings: Sequence[str], name: str) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Sizes (p,) and corner numbers of faces given as text, one face a row.

    Raises
    ------
    SurfaceError
        A row holds anything but whole numbers.
    """
    sizes = np.fromiter((len(ring.split()) for ring in rings), np.int64, len(rings))
    corners = np.empty(int(sizes.sum()), np.int64)
    starts = np.cumsum(sizes) - sizes
    for size in np.unique(sizes[sizes > 0]):
        chosen = np.flatnonzero(sizes == size).tolist()
        rows = rings if len(chosen) == len(rings) else [rings[k] for k in chosen]
        try:
            block = np.loadtxt(rows, dtype=np.int64, comments=None, ndmin=2)
        except (ValueError, OverflowError) as error:
            wrong = next((k for k in chosen if not _WHOLE.fullmatch(rings[k])), chosen[0])
            raise SurfaceError(
                f"{name}: face {wrong}, {rings[wrong][:40]!r}, does not name its corners by whole numbers",
                faces=(int(wrong),),
            ) from error
        corners[starts[chosen][:, None] + np.arange(size)] = block
    return sizes, corners


def triangulated(polygons: Polygons, name: str) -> Triangles:
    """Triangles of the polygons, in the order of the file; a polygon's arrays go to each of its triangles.

    Raises
    ------
    SurfaceError
        No faces, coordinates that are not finite, vertex numbers out of range, faces of fewer than 3 corners.
    """
    vertices, sizes, corners = polygons.vertices, polygons.sizes, polygons.corners
    if len(vertices) == 0 or len(sizes) == 0:
        raise SurfaceError(
            f"{name} holds {len(vertices)} vertices and {len(sizes)} faces; a surface needs at least 4 of "
            f"each: "
            "was it exported as points or lines?"
        )
    if len(corners) - 2 * len(sizes) > FACES_LIMIT:
        raise SurfaceError(
            f"{name} makes {len(corners) - 2 * len(sizes)} triangles (limit {FACES_LIMIT}); reduce their "
            "number, for instance by quadric decimation, or make the surface from larger voxels"
        )
    _refuse_bad_numbers(polygons, name)
    starts = np.cumsum(sizes) - sizes
    if (sizes == 3).all():
        faces, parent = corners.reshape(-1, 3), None
    else:
        faces, parent = _cut(vertices, sizes, starts, corners)
    face_data = {key: array if parent is None else array[parent] for key, array in polygons.face_data.items()}
    return Triangles(vertices, np.ascontiguousarray(faces), face_data, dict(polygons.vertex_data))


def _refuse_bad_numbers(polygons: Polygons, name: str) -> None:
    vertices, sizes, corners = polygons.vertices, polygons.sizes, polygons.corners
    # Powers of coordinates must stay finite too: the quality of triangles is made of products of six.
    bad = np.flatnonzero(~(np.abs(vertices) < LARGEST).all(axis=1))
    if len(bad):
        position = ", ".join(f"{value:g}" for value in vertices[bad[0]])
        raise SurfaceError(
            f"{name}: {len(bad)} of {len(vertices)} vertices are not finite positions, the first is number "
            f"{bad[0]} "
            f"at ({position}); export the mesh again without them"
        )
    short = np.flatnonzero(sizes < 3)
    if len(short):
        raise SurfaceError(
            f"{name}: face {short[0]} has {sizes[short[0]]} corners, at least 3 are needed ({len(short)} such faces)",
            faces=tuple(int(k) for k in short[:24]),
        )
    wrong = np.flatnonzero((corners < 0) | (corners >= len(vertices)))
    if len(wrong):
        faces = np.unique(np.searchsorted(np.cumsum(sizes), wrong, side="right"))
        raise SurfaceError(
            f"{name}: face {faces[0]} names vertex {corners[wrong[0]]}, but the vertices are numbered 0 to "
            f"{len(vertices) - 1} ({len(faces)} such faces): the file is damaged or cut short",
            faces=tuple(int(k) for k in faces[:24]),
        )


def _cut(
    vertices: NDArray[np.float64],
    sizes: NDArray[np.int64],
    starts: NDArray[np.int64],
    corners: NDArray[np.int64],
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Triangles (m, 3) and the polygon of each; concave polygons are cut by ear clipping (VTK)."""
    import pyvista

    pieces = [corners[starts[sizes == 3][:, None] + np.arange(3)]]
    parents = [np.flatnonzero(sizes == 3)]
    many = np.flatnonzero(sizes > 3)
    packed = np.concatenate([np.r_[sizes[k], corners[starts[k] : starts[k] + sizes[k]]] for k in many])
    mesh = pyvista.PolyData(vertices, packed)
    mesh.cell_data["polygon"] = many
    cut = mesh.triangulate()
    ears = np.asarray(cut.faces, dtype=np.int64).reshape(-1, 4)[:, 1:]
    owner = np.asarray(cut.cell_data["polygon"], dtype=np.int64)
    # A flat or knotted polygon may come back with triangles missing, which would tear a hole: fan it instead.
    complete = np.bincount(owner, minlength=len(sizes))[many] == sizes[many] - 2
    keep = np.isin(owner, many[complete])
    pieces.append(ears[keep])
    parents.append(owner[keep])
    for k in many[~complete]:
        ring = corners[starts[k] : starts[k] + sizes[k]]
        pieces.append(np.stack([np.full(len(ring) - 2, ring[0]), ring[1:-1], ring[2:]], axis=1))
        parents.append(np.full(len(ring) - 2, k))
    parent = np.concatenate(parents)
    order = np.argsort(parent, kind="stable")
    return np.concatenate(pieces)[order], parent[order]


#: A reader takes the bytes of a file and its name for messages.
Reader = Callable[[bytes, str], Polygons]
