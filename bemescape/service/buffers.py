"""Arrays for the page: one JSON header and raw little-endian numbers, compressed once.

Layout after decompression: the length of the header in 4 bytes (uint32), the header as UTF-8 JSON padded with blanks
to a multiple of 4, then each array at its `start`. The page reads them without a copy.
"""

from __future__ import annotations

import gzip
import json
import struct
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.surface.surface import Surface
    from bemescape.windows.grade import GradedMesh

__all__ = ["packed", "result_buffers", "surface_buffers", "unpacked", "windows_buffers"]

_KINDS = {"float32": np.dtype("<f4"), "uint32": np.dtype("<u4"), "int32": np.dtype("<i4")}


def packed(header: Mapping[str, Any], arrays: Mapping[str, NDArray[Any]]) -> bytes:
    """Compressed buffers of a header and arrays: floats as float32, whole numbers as int32 or uint32."""
    listed: dict[str, dict[str, Any]] = {}
    parts: list[bytes] = []
    start = 0
    for name, array in arrays.items():
        kind = _kind(array)
        data = np.ascontiguousarray(array, dtype=_KINDS[kind]).tobytes()
        listed[name] = {"kind": kind, "shape": list(array.shape), "start": start}
        parts.append(data)
        start += len(data)
    text = json.dumps({**header, "arrays": listed}, allow_nan=False).encode()
    text += b" " * (-len(text) % 4)
    return gzip.compress(b"".join([struct.pack("<I", len(text)), text, *parts]), compresslevel=5, mtime=0)


def _kind(array: NDArray[Any]) -> str:
    if array.dtype.kind == "f":
        return "float32"
    return "uint32" if array.dtype.kind == "u" or not (array.size and array.min() < 0) else "int32"


def unpacked(data: bytes) -> tuple[dict[str, Any], dict[str, NDArray[Any]]]:
    """What `packed` was given."""
    raw = gzip.decompress(data)
    (length,) = struct.unpack_from("<I", raw)
    header = json.loads(raw[4 : 4 + length])
    arrays = {}
    for name, entry in header.pop("arrays").items():
        count = int(np.prod(entry["shape"], dtype=np.int64))
        arrays[name] = np.frombuffer(
            raw, dtype=_KINDS[entry["kind"]], count=count, offset=4 + length + entry["start"]
        ).reshape(entry["shape"])
    return header, arrays


def _centred(vertices: NDArray[np.float64]) -> tuple[list[float], NDArray[np.float64]]:
    """Single precision keeps its digits for the shape rather than for where the microscope's stage stood."""
    offset = 0.5 * (vertices.min(axis=0) + vertices.max(axis=0))
    return offset.tolist(), vertices - offset


def surface_buffers(surface: Surface) -> bytes:
    """Vertices (n, 3) in µm from `offset_um`, faces (m, 3), and the file's label arrays on faces."""
    offset, vertices = _centred(surface.vertices)
    return packed({"offset_um": offset}, {"vertices": vertices, "faces": surface.faces.astype(np.uint32)})


def result_buffers(result: EscapeResult) -> bytes:
    """Panels with time, exit density and window; rims as pairs of ends."""
    from bemescape.windows.rims import rim_edges

    offset, vertices = _centred(result.vertices)
    rim, _ = rim_edges(result.faces, result.panel_window)
    header = {"offset_um": offset, "windows": [window.name for window in result.windows]}
    return packed(
        header,
        {
            "vertices": vertices,
            "faces": result.faces.astype(np.uint32),
            "time_s": result.panel_time_s,
            "exit_density_per_um2": result.panel_exit_density_per_um2,
            "window": result.panel_window,
            "area_um2": result.panel_areas_um2,
            "rim": rim.astype(np.uint32),
        },
    )


def windows_buffers(mesh: GradedMesh, windows: list[dict[str, Any]], notes: list[str]) -> bytes:
    """The panels of all windows as loose triangles (k, 3, 3) in µm, with the number of the window of each."""
    chosen = np.flatnonzero(mesh.window_of >= 0)
    corners = mesh.vertices[mesh.faces[chosen]]
    offset = corners.reshape(-1, 3).mean(axis=0)
    header = {"offset_um": offset.tolist(), "windows": windows, "notes": notes}
    return packed(header, {"corners": corners - offset, "window": mesh.window_of[chosen].astype(np.uint32)})
