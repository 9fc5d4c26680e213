"""A mesh file and its unit in, a surface in µm out."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from pathlib import Path
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError, SurfaceError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.surface.format_gltf import read_glb, read_gltf
from bemescape.surface.format_obj_off import read_obj, read_off
from bemescape.surface.format_ply import read_ply
from bemescape.surface.format_stl import looks_like_binary_stl, read_stl
from bemescape.surface.format_vtk import read_vtk_legacy, read_vtp
from bemescape.surface.heal import heal_surface
from bemescape.surface.health import check_surface
from bemescape.surface.polygons import LARGEST, Polygons, triangulated
from bemescape.surface.surface import Surface
from bemescape.units import Quantity, unit_scale_um

__all__ = ["FILE_LIMIT_BYTES", "file_unit_um", "read_surface", "read_unhealed"]

#: Larger files are refused: a surface of a million triangles fits, as text only just.
FILE_LIMIT_BYTES = 150_000_000

_FORMATS = {
    ".ply": "PLY", ".stl": "STL", ".obj": "OBJ", ".off": "OFF", ".glb": "GLB", ".gltf": "glTF", ".vtp": "VTP",
    ".vtk": "VTK",
}  # fmt: skip


def read_surface(
    path: str | Path,
    *,
    unit: Quantity | Sequence[Quantity] | None = None,
    heal: Literal["none", "auto", "rebuild"] = "auto",
    voxel: Quantity | None = None,
    progress: Progress = silent,
) -> Surface:
    """Closed, outward-facing surface from a mesh file.

    Parameters
    ----------
    path : str or Path
        PLY, STL, OBJ, OFF, GLB, glTF, VTP or legacy VTK. Faces of more than 3 corners are cut into triangles.
    unit : str, quantity or sequence of three
        Length of one file unit: a name ("nm"), a voxel size ("4 nm"), or one for each axis. Never guessed.
    heal : "auto", "none" or "rebuild"
        What may be changed; see `heal_surface`. Every change is listed in `.healing` of the result.
    voxel : length, optional
        Voxel size of `heal="rebuild"`; chosen from the mesh if not given.
    progress : callable
        Receives a `ProgressEvent` for each stage.

    Returns
    -------
    Surface
        In µm; `.health` describes the mesh as read, `.healing` what was changed (None: nothing).

    Raises
    ------
    SettingsError
        The unit is missing or not a length, or `heal` is unknown.
    SurfaceError
        The file cannot be read, or the mesh cannot be healed; `.faces` says where.
    """
    raw = read_unhealed(path, unit=unit, progress=progress)
    return heal_surface(raw, heal, voxel=voxel, progress=progress)


def read_unhealed(
    path: str | Path, *, unit: Quantity | Sequence[Quantity] | None = None, progress: Progress = silent
) -> Surface:
    """The mesh as it is in the file, in µm, with `.health` saying what is wrong with it.

    Such a surface need not be closed or oriented; pass it to `heal_surface`. Parameters and errors as for
    `read_surface`.
    """
    scale = file_unit_um(unit)
    path = Path(path)
    name = path.name
    progress(ProgressEvent("reading", None, name))
    data = _content(path)
    kind = _checked_kind(path, data)
    mesh = triangulated(_parsed(kind, path, data), name)
    progress(ProgressEvent("checking", None, f"{len(mesh.faces)} faces"))
    vertices = mesh.vertices * scale
    if not (np.abs(vertices) < LARGEST).all():
        raise SurfaceError(f"{name}: positions times the unit leave the range of numbers; is the unit right?")
    return Surface(
        vertices=vertices,
        faces=mesh.faces,
        face_data=MappingProxyType(dict(mesh.face_data)),
        vertex_data=MappingProxyType(dict(mesh.vertex_data)),
        name=path.stem,
        unit_um=scale,
        sha256=hashlib.sha256(data).hexdigest(),
        health=check_surface(vertices, mesh.faces),
    )


def file_unit_um(unit: Quantity | Sequence[Quantity] | None) -> NDArray[np.float64]:
    """µm per file unit along x, y, z: (3,).

    Raises
    ------
    SettingsError
        No unit, or not one or three lengths.

    Examples
    --------
    >>> file_unit_um(["4 nm", "4 nm", "40 nm"]).tolist()
    [0.004, 0.004, 0.04]
    """
    if unit is None or (isinstance(unit, str) and not unit.strip()):
        raise SettingsError(
            "mesh files carry no unit: say what one unit of the file is, for example unit='nm', '4 nm' for "
            "voxels or "
            "('4 nm', '4 nm', '40 nm') for each axis"
        )
    if isinstance(unit, Sequence) and not isinstance(unit, str):
        if len(unit) != 3:
            raise SettingsError(f"unit has {len(unit)} entries; give one length, or three for x, y and z")
        return np.array([unit_scale_um(entry) for entry in unit])
    return np.full(3, unit_scale_um(unit))


def _content(path: Path) -> bytes:
    try:
        if path.is_dir():
            raise SurfaceError(f"{path} is a folder; name the mesh file in it")
        if not path.exists():
            raise SurfaceError(f"there is no file {path}; check the name and the folder")
        if not path.is_file():
            raise SurfaceError(f"{path} is not a regular file; copy its content to one")
        size = path.stat().st_size
        if size > FILE_LIMIT_BYTES:
            raise SurfaceError(
                f"{path.name} has {size / 1e6:.0f} MB (limit {FILE_LIMIT_BYTES / 1e6:.0f} MB); reduce the "
                f"number of "
                "triangles, or save it as binary PLY"
            )
        data = path.read_bytes()
    except (OSError, ValueError) as error:
        raise SurfaceError(f"{str(path)[:200]!r} cannot be read: {error}") from error
    if not data.strip(b"\0 \t\r\n"):
        raise SurfaceError(f"{path.name} is empty ({len(data)} bytes without content); export the mesh again")
    return data


def _checked_kind(path: Path, data: bytes) -> str:
    """The format by content, which must agree with the ending of the name."""
    ending = _FORMATS.get(path.suffix.lower())
    looks = _looks_like(data)
    if ending is None:
        known = ", ".join(_FORMATS)
        hint = f"; its content looks like {looks}" if looks else ""
        raise SurfaceError(f"{path.name} does not end in one of {known}{hint}: rename or convert it")
    # STL, OBJ and OFF have no safe mark: only a content that is surely something else speaks against the
    # ending.
    if looks is not None and looks != ending:
        raise SurfaceError(
            f"{path.name} ends in {path.suffix} but its content looks like {looks}; rename it or export it again"
        )
    if looks is None and ending in {"PLY", "GLB", "VTP", "VTK", "glTF"}:
        raise SurfaceError(f"{path.name} does not begin as a {ending} file does; the file is damaged or mislabelled")
    return ending


_MARKS: tuple[tuple[bytes, str], ...] = (
    (b"glTF", "GLB"),
    (b"# vtk DataFile", "VTK"),
    (b"PK\x03\x04", "a zip archive"),
    (b"PK\x05\x06", "a zip archive"),
    (b"\x1f\x8b", "a gzip archive"),
    (b"BZh", "a bzip2 archive"),
    (b"\xfd7zXZ\0", "an xz archive"),
    (b"7z\xbc\xaf", "a 7z archive"),
    (b"\x28\xb5\x2f\xfd", "a zstandard archive"),
    (b"\x80\x02", "a Python pickle"),
    (b"\x80\x03", "a Python pickle"),
    (b"\x80\x04", "a Python pickle"),
    (b"\x80\x05", "a Python pickle"),
    (b"\x93NUMPY", "a NumPy array"),
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"II*\0", "a TIFF picture"),
    (b"MM\0*", "a TIFF picture"),
    (b"\x89HDF", "an HDF5 file"),
    (b"%PDF", "a PDF document"),
)


def _looks_like(data: bytes) -> str | None:
    """What the first bytes say; None if they say nothing sure."""
    for mark, kind in _MARKS:
        if data.startswith(mark):
            return kind
    head = data[:1024].lstrip(b"\xef\xbb\xbf \t\r\n")
    if head.startswith((b"ply\n", b"ply\r")):
        return "PLY"
    if looks_like_binary_stl(data):
        return "STL"
    if b"<VTKFile" in head:
        return "VTP"
    if head.startswith(b"solid") and b"facet" in data[:4096]:
        return "STL"
    if head.startswith((b"OFF", b"COFF", b"NOFF")):
        return "OFF"
    if head.startswith(b"{") and b'"asset"' in data:
        return "glTF"
    if head[:64].lower().startswith((b"<!doctype html", b"<html")):
        return "a web page"
    return None


def _parsed(kind: str, path: Path, data: bytes) -> Polygons:
    name = path.name
    if kind == "glTF":
        return read_gltf(data, name, path.parent)
    if kind in {"VTP", "VTK"}:
        return (read_vtp if kind == "VTP" else read_vtk_legacy)(path, data, name)
    readers = {"PLY": read_ply, "STL": read_stl, "OBJ": read_obj, "OFF": read_off, "GLB": read_glb}
    return readers[kind](data, name)
