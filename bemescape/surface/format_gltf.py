"""GLB and glTF files, through trimesh.

Only positions and triangles are handed on: a file keeps no pictures, cameras or animations on its way in,
and every count is compared with the size of its buffer before anything is allocated.
"""

from __future__ import annotations

import base64
import binascii
import io
import json
from pathlib import Path
from typing import Any, TypeGuard

import numpy as np

from bemescape.errors import SurfaceError
from bemescape.surface.polygons import Polygons, decode_text

__all__ = ["read_glb", "read_gltf"]

_COMPONENT_BYTES = {5120: 1, 5121: 1, 5122: 2, 5123: 2, 5125: 4, 5126: 4}
_TYPE_WIDTH = {"SCALAR": 1, "VEC2": 2, "VEC3": 3, "VEC4": 4, "MAT2": 4, "MAT3": 9, "MAT4": 16}
_NODE_KEYS = ("children", "mesh", "matrix", "translation", "rotation", "scale")
_TRIANGLES = 4
#: Nodes that place the same mesh many times could fill the memory from a tiny file.
_NODE_LIMIT = 10000
_JSON_CHUNK, _BINARY_CHUNK = 0x4E4F534A, 0x004E4942


def read_glb(data: bytes, name: str) -> Polygons:
    """Triangles of a binary glTF file, each node's transformation applied.

    Raises
    ------
    SurfaceError
        Lengths, counts or references in the file do not agree, or it needs an extension.
    """
    if len(data) < 20 or int.from_bytes(data[4:8], "little") != 2:
        raise SurfaceError(f"{name} is not a glTF 2 binary file; export it again as glTF 2.0")
    length = int.from_bytes(data[8:12], "little")
    if length != len(data):
        raise SurfaceError(
            f"{name}: the header announces {length} bytes, but the file has {len(data)}; it is cut short"
        )
    chunks: dict[int, bytes] = {}
    at = 12
    while at + 8 <= len(data):
        size = int.from_bytes(data[at : at + 4], "little")
        kind = int.from_bytes(data[at + 4 : at + 8], "little")
        if at + 8 + size > len(data):
            raise SurfaceError(f"{name}: a block of {size} bytes at byte {at} runs past the end of the file")
        chunks.setdefault(kind, data[at + 8 : at + 8 + size])
        at += 8 + size
    document = _document(chunks.get(_JSON_CHUNK, b""), name)
    buffers = _items(document, "buffers", name)
    if len(buffers) != 1 or "uri" in buffers[0]:
        raise SurfaceError(f"{name} keeps its data in {len(buffers)} buffers or in other files; export it as one GLB")
    return _polygons(document, [chunks.get(_BINARY_CHUNK, b"")], name)


def read_gltf(data: bytes, name: str, folder: Path) -> Polygons:
    """Triangles of a glTF text file; its buffers lie inside it or in files beside it in `folder`.

    Raises
    ------
    SurfaceError
        As `read_glb`; also where a buffer is missing or lies in another folder.
    """
    document = _document(data, name)
    blobs = [_buffer(entry, name, folder) for entry in _items(document, "buffers", name)]
    return _polygons(document, blobs, name)


def _document(data: bytes, name: str) -> dict[str, Any]:
    text = decode_text(data, name)
    try:
        document = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise SurfaceError(f"{name}: its JSON part cannot be read ({str(error)[:80]}); the file is damaged") from error
    if not isinstance(document, dict):
        raise SurfaceError(f"{name}: its JSON part is not a glTF document")
    needed = document.get("extensionsRequired")
    if needed:
        raise SurfaceError(f"{name} needs the extensions {str(needed)[:80]}; export it without compression")
    return document


def _items(document: dict[str, Any], key: str, name: str) -> list[dict[str, Any]]:
    found = document.get(key, [])
    if not isinstance(found, list) or not all(isinstance(entry, dict) for entry in found):
        raise SurfaceError(f"{name}: {key!r} is not a list of glTF entries; the file is damaged")
    return found


def _buffer(entry: dict[str, Any], name: str, folder: Path) -> bytes:
    uri = entry.get("uri")
    if not isinstance(uri, str):
        raise SurfaceError(f"{name}: a buffer has no address; export the file as one GLB")
    if uri.startswith("data:"):
        try:
            return base64.b64decode(uri.partition(",")[2], validate=True)
        except binascii.Error as error:
            raise SurfaceError(f"{name}: a buffer inside the file is not base64; the file is damaged") from error
    if Path(uri).name != uri or "\\" in uri or ":" in uri:
        raise SurfaceError(f"{name}: its data lie at {uri[:80]!r}; only files in the same folder are read")
    path = folder / uri
    size = entry.get("byteLength")
    if not path.is_file() or not _count(size) or path.stat().st_size < size:
        raise SurfaceError(f"{name}: its data file {uri[:80]!r} is missing or shorter than {size} bytes")
    with path.open("rb") as stream:
        return stream.read(size)


def _count(value: object) -> TypeGuard[int]:
    return isinstance(value, int) and not isinstance(value, bool) and value >= 0


def _polygons(document: dict[str, Any], blobs: list[bytes], name: str) -> Polygons:
    import trimesh

    _check_views(document, [len(blob) for blob in blobs], name)
    slim = _slim(document, name)
    files = {f"{k}.bin": blob for k, blob in enumerate(blobs)}
    for k, blob in enumerate(blobs):
        slim["buffers"][k] = {"uri": f"{k}.bin", "byteLength": len(blob)}
    try:
        scene = trimesh.load_scene(
            io.BytesIO(json.dumps(slim).encode()),
            file_type="gltf",
            resolver=_Buffers(files),
            process=False,
        )
        mesh = scene.to_mesh()
    # Whatever remains wrong inside (a reference to a node that is not there) shows as one of these.
    except (
        ValueError,
        KeyError,
        IndexError,
        TypeError,
        AttributeError,
        RecursionError,
        OverflowError,
    ) as error:
        raise SurfaceError(
            f"{name}: its parts do not fit together ({type(error).__name__}: {str(error)[:80]}); the file is damaged"
        ) from error
    return Polygons.of_triangles(np.array(mesh.vertices, np.float64), np.array(mesh.faces, np.int64))


class _Buffers(dict[str, bytes]):
    """Serves the buffers by name, as trimesh asks for them."""

    def get(self, key: str, default: bytes | None = None) -> bytes | None:  # type: ignore[override]
        """The bytes of buffer `key`."""
        return super().get(key.strip(), default)


def _check_views(document: dict[str, Any], sizes: list[int], name: str) -> None:
    """Every view lies in its buffer and every accessor in its view."""
    views = _items(document, "bufferViews", name)
    for k, view in enumerate(views):
        buffer, start, length = view.get("buffer"), view.get("byteOffset", 0), view.get("byteLength")
        stride = view.get("byteStride", 0)
        if not (_count(buffer) and _count(start) and _count(length) and _count(stride)) or buffer >= len(sizes):
            raise SurfaceError(f"{name}: bufferView {k} is not complete; the file is damaged")
        if start + length > sizes[buffer]:
            raise SurfaceError(f"{name}: bufferView {k} ends at byte {start + length} of {sizes[buffer]}; cut short")
    for k, accessor in enumerate(_items(document, "accessors", name)):
        number, start, count = (
            accessor.get("bufferView"),
            accessor.get("byteOffset", 0),
            accessor.get("count"),
        )
        kind, shape = accessor.get("componentType"), str(accessor.get("type"))
        bytes_each = _COMPONENT_BYTES.get(kind, 0) * _TYPE_WIDTH.get(shape, 0) if _count(kind) else 0
        if not (_count(number) and _count(start) and _count(count)) or number >= len(views) or not bytes_each:
            raise SurfaceError(f"{name}: accessor {k} is not complete or sparse; export the file again")
        stride = views[number].get("byteStride") or bytes_each
        if count and start + stride * (count - 1) + bytes_each > views[number]["byteLength"]:
            raise SurfaceError(f"{name}: accessor {k} announces {count} entries, more than its buffer holds")


def _slim(document: dict[str, Any], name: str) -> dict[str, Any]:
    """The document without anything but positions, triangles and where they are."""
    accessors = _items(document, "accessors", name)
    meshes = []
    for k, mesh in enumerate(_items(document, "meshes", name)):
        primitives: list[dict[str, Any]] = []
        for primitive in _items(mesh, "primitives", name):
            attributes = primitive.get("attributes")
            position = attributes.get("POSITION") if isinstance(attributes, dict) else None
            indices = primitive.get("indices")
            if primitive.get("mode", _TRIANGLES) != _TRIANGLES:
                raise SurfaceError(f"{name}: mesh {k} is drawn as points, lines or strips; export it as triangles")
            wanted: list[Any] = [position] if indices is None else [position, indices]
            if not all(_count(entry) and entry < len(accessors) for entry in wanted):
                raise SurfaceError(f"{name}: mesh {k} names positions or corners that the file does not hold")
            kept: dict[str, Any] = {"attributes": {"POSITION": position}, "mode": _TRIANGLES}
            if indices is not None:
                kept["indices"] = indices
            primitives.append(kept)
        meshes.append({"name": f"mesh {k}", "primitives": primitives})
    nodes = [
        {"name": f"node {k}", **{key: node[key] for key in _NODE_KEYS if key in node}}
        for k, node in enumerate(_items(document, "nodes", name))
    ]
    _check_tree(nodes, len(meshes), name)
    if not meshes or not nodes:
        raise SurfaceError(f"{name} holds {len(meshes)} meshes placed by {len(nodes)} nodes; nothing to read")
    kept_keys = ("byteOffset", "bufferView", "componentType", "count", "type", "normalized")
    scene = document.get("scene", 0)
    slim = {
        "asset": {"version": "2.0"},
        "meshes": meshes,
        "nodes": nodes,
        "scenes": [{"nodes": entry.get("nodes", [])} for entry in _items(document, "scenes", name)],
        "scene": scene,
        "accessors": [{key: entry[key] for key in kept_keys if key in entry} for entry in accessors],
        "bufferViews": _items(document, "bufferViews", name),
        "buffers": [{} for _ in _items(document, "buffers", name)],
    }
    if not _count(scene) or scene >= len(slim["scenes"]):
        raise SurfaceError(f"{name}: its scene number {scene!r} is not in the file; export it again")
    return slim


def _check_tree(nodes: list[dict[str, Any]], mesh_count: int, name: str) -> None:
    """Nodes form a forest: a loop would never end, a node with two parents may multiply without bound."""
    parents = [0] * len(nodes)
    for k, node in enumerate(nodes):
        children = node.get("children", [])
        mesh = node.get("mesh")
        known = isinstance(children, list) and all(_count(child) and child < len(nodes) for child in children)
        if not known or (mesh is not None and not (_count(mesh) and mesh < mesh_count)):
            raise SurfaceError(f"{name}: node {k} names children or a mesh that the file does not hold")
        for child in children:
            parents[child] += 1
    queue = [k for k, count in enumerate(parents) if count == 0]
    seen = 0
    while queue:
        seen += 1
        queue.extend(nodes[queue.pop()].get("children", []))
        if seen > _NODE_LIMIT:
            break
    if max(parents, default=0) > 1 or seen != len(nodes) or seen > _NODE_LIMIT:
        raise SurfaceError(
            f"{name}: its {len(nodes)} nodes do not form a tree of at most {_NODE_LIMIT}; export it as one mesh"
        )
