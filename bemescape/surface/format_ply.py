"""PLY files, text and binary, with their scalar properties.

Read here rather than by trimesh, which refuses binary files that mix triangles and larger polygons, loses the
pairing of polygons and labels when it cuts them, and allocates what the header claims.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SurfaceError
from bemescape.surface.polygons import Array, Polygons, decode_text, loaded_rows

__all__ = ["read_ply"]

_TYPES = {
    "char": "i1", "int8": "i1", "uchar": "u1", "uint8": "u1", "short": "i2", "int16": "i2", "ushort": "u2",
    "uint16": "u2", "int": "i4", "int32": "i4", "uint": "u4", "uint32": "u4", "int64": "i8", "uint64": "u8",
    "float": "f4", "float32": "f4", "double": "f8", "float64": "f8",
}  # fmt: skip
_CORNERS = ("vertex_indices", "vertex_index")
_NOT_KEPT = {"x", "y", "z", "nx", "ny", "nz"}
_HEADER_LIMIT = 65536


@dataclass(frozen=True)
class _Property:
    name: str
    dtype: np.dtype[np.generic]
    count_dtype: np.dtype[np.generic] | None = None


@dataclass(frozen=True)
class _Element:
    name: str
    count: int
    properties: tuple[_Property, ...]


@dataclass(frozen=True)
class _Lists:
    """One list property: sizes (r,) and the items, row after row."""

    sizes: NDArray[np.int64]
    items: Array


_Columns = dict[str, Array | _Lists]


def read_ply(data: bytes, name: str) -> Polygons:
    """Polygons of a PLY file; every scalar property but positions and normals is kept.

    Raises
    ------
    SurfaceError
        The header is not one, the content is shorter or longer than the header says, or there are no faces.
    """
    elements, layout, start = _header(data, name)
    if layout == "ascii":
        tables = _read_text(elements, decode_text(data[start:], name), name)
    else:
        tables = _read_binary(elements, memoryview(data)[start:], name)
    return _assembled(tables, name)


def _header(data: bytes, name: str) -> tuple[list[_Element], str, int]:
    end = data.find(b"end_header", 0, _HEADER_LIMIT)
    stop = data.find(b"\n", end) + 1
    if end < 0 or stop == 0:
        raise SurfaceError(f"{name}: the PLY header has no end_header line; the file is damaged or cut short")
    lines = [line.split() for line in data[:end].decode("ascii", errors="replace").splitlines()]
    layout = ""
    elements: list[_Element] = []
    for number, words in enumerate(lines[1:], start=2):
        if not words or words[0] in {"comment", "obj_info"}:
            continue
        if words[0] == "format" and len(words) == 3:
            layout = words[1]
        elif words[0] == "element" and len(words) == 3 and words[2].isascii() and words[2].isdigit():
            if any(element.name == words[1] for element in elements):
                raise SurfaceError(f"{name}: the PLY header declares the element {words[1]!r} twice")
            elements.append(_Element(words[1], int(words[2][:30]), ()))
        elif words[0] == "property" and elements:
            elements[-1] = _with_property(elements[-1], words, byte_order(layout), f"{name}, line {number}")
        else:
            raise SurfaceError(f"{name}: line {number} of the PLY header, {' '.join(words)[:60]!r}, means nothing")
    if layout not in {"ascii", "binary_little_endian", "binary_big_endian"}:
        raise SurfaceError(
            f"{name}: the PLY format is {layout!r}; it must be ascii, binary_little_endian or binary_big_endian"
        )
    return elements, layout, stop


def byte_order(layout: str) -> str:
    """The numpy byte order mark of a PLY format name."""
    return ">" if layout == "binary_big_endian" else "<"


def _with_property(element: _Element, words: Sequence[str], order: str, place: str) -> _Element:
    is_list = len(words) == 5 and words[1] == "list"
    types = words[2:4] if is_list else words[1:2]
    if not (is_list or len(words) == 3) or any(kind not in _TYPES for kind in types):
        raise SurfaceError(f"{place}: {' '.join(words)[:60]!r} is not a PLY property")
    if any(known.name == words[-1] for known in element.properties):
        raise SurfaceError(f"{place}: the property {words[-1]!r} of {element.name!r} is declared twice")
    kinds = [np.dtype(order + _TYPES[kind]) for kind in types]
    if is_list and kinds[0].kind == "f":
        raise SurfaceError(f"{place}: a list cannot be counted with {words[2]!r}")
    added = _Property(words[-1], kinds[-1], kinds[0] if is_list else None)
    return _Element(element.name, element.count, (*element.properties, added))


def _too_short(element: _Element, name: str, found: str) -> SurfaceError:
    return SurfaceError(
        f"{name}: the header announces {element.count} {element.name} entries, but {found}; "
        "the file is cut short or its header is wrong"
    )


# Text: one entry a line.


def _read_text(elements: Sequence[_Element], text: str, name: str) -> dict[str, _Columns]:
    rows = [line for line in text.splitlines() if line.strip()]
    tables: dict[str, _Columns] = {}
    at = 0
    for element in elements:
        if element.count > len(rows) - at:
            raise _too_short(element, name, f"only {len(rows) - at} lines are left for them")
        tables[element.name] = _text_columns(element, rows[at : at + element.count], name)
        at += element.count
    if at < len(rows):
        raise SurfaceError(f"{name}: {len(rows) - at} lines follow the last entry that the header announces")
    return tables


def _text_columns(element: _Element, rows: list[str], name: str) -> _Columns:
    if not rows or not element.properties:
        return {}
    widths = np.fromiter((len(row.split()) for row in rows), np.int64, len(rows))
    parts: list[tuple[NDArray[np.int64], dict[str, NDArray[np.float64]]]] = []
    for width in np.unique(widths):
        chosen = np.flatnonzero(widths == width)
        table = loaded_rows([rows[k] for k in chosen], f"a {element.name} line", name)
        parts.extend(_split_table(element, table, chosen, name))
    columns: _Columns = {}
    for prop in element.properties:
        if prop.count_dtype is None:
            column = np.empty(len(rows))
            for chosen, values in parts:
                column[chosen] = values[prop.name]
            columns[prop.name] = _cast(column, prop.dtype, f"{name}: property {prop.name!r}")
        else:
            sizes = np.empty(len(rows), np.int64)
            for chosen, values in parts:
                sizes[chosen] = values[prop.name].shape[1]
            starts = np.cumsum(sizes) - sizes
            items = np.empty(int(sizes.sum()))
            for chosen, values in parts:
                block = values[prop.name]
                items[starts[chosen][:, None] + np.arange(block.shape[1])] = block
            columns[prop.name] = _Lists(sizes, _cast(items, prop.dtype, f"{name}: list {prop.name!r}"))
    return columns


def _split_table(
    element: _Element, table: NDArray[np.float64], chosen: NDArray[np.int64], name: str
) -> list[tuple[NDArray[np.int64], dict[str, NDArray[np.float64]]]]:
    """Columns of rows of equal width, split further where two lists share the width differently."""
    pending = [(chosen, table, 0, 0, dict[str, NDArray[np.float64]]())]
    done = []
    while pending:
        rows, block, index, at, values = pending.pop()
        if index == len(element.properties):
            if at != block.shape[1]:
                raise _misfit(element, rows, name)
            done.append((rows, values))
            continue
        prop = element.properties[index]
        if at >= block.shape[1]:
            raise _misfit(element, rows, name)
        if prop.count_dtype is None:
            pending.append((rows, block, index + 1, at + 1, {**values, prop.name: block[:, at]}))
            continue
        for size in np.unique(block[:, at]):
            if not (0 <= size <= block.shape[1] - at - 1 and size == int(size)):
                raise _misfit(element, rows, name)
            same = block[:, at] == size
            stop = at + 1 + int(size)
            kept = {key: column[same] for key, column in values.items()}
            pending.append((rows[same], block[same], index + 1, stop, {**kept, prop.name: block[same, at + 1 : stop]}))
    return done


def _misfit(element: _Element, rows: NDArray[np.int64], name: str) -> SurfaceError:
    return SurfaceError(
        f"{name}: the line of {element.name} {int(rows[0])} does not hold the "
        f"{len(element.properties)} properties that the header announces; the file is damaged"
    )


def _cast(values: NDArray[np.float64], dtype: np.dtype[np.generic], what: str) -> Array:
    if dtype.kind == "f":
        return values.astype(dtype if dtype.itemsize == 8 else np.float64)
    whole = np.isfinite(values) & (values == np.round(values))
    limits = np.iinfo(dtype.str)
    if not (whole & (values >= limits.min) & (values <= limits.max)).all():
        raise SurfaceError(f"{what} holds numbers that do not fit its type, {dtype.name}; the file is damaged")
    return values.astype(dtype)


# Binary: sizes follow from the header wherever lists have one length.


def _read_binary(elements: Sequence[_Element], body: memoryview, name: str) -> dict[str, _Columns]:
    tables: dict[str, _Columns] = {}
    at = 0
    for element in elements:
        left = len(body) - at
        smallest = sum((prop.count_dtype or prop.dtype).itemsize for prop in element.properties)
        if element.count * smallest > left:
            raise _too_short(element, name, f"only {left} bytes are left for them")
        if element.count and element.properties:
            tables[element.name], used = _binary_columns(element, body[at:], name)
            at += used
    trailing = bytes(body[at : at + 64])
    if trailing.strip():
        raise SurfaceError(f"{name}: {len(body) - at} bytes follow the last entry that the header announces")
    return tables


def _binary_columns(element: _Element, body: memoryview, name: str) -> tuple[_Columns, int]:
    fields: list[tuple[str, np.dtype[np.generic], tuple[int, ...]]] = []
    offset = 0
    for index, prop in enumerate(element.properties):
        if prop.count_dtype is not None:
            if offset + prop.count_dtype.itemsize > len(body):
                raise _too_short(element, name, "the first of them is incomplete")
            size = int(np.frombuffer(body, prop.count_dtype, 1, offset)[0])
            if size < 0 or size * prop.dtype.itemsize > len(body):
                return _walk(element, body, name)
            fields.append((f"count {index}", prop.count_dtype, ()))
            fields.append((prop.name, prop.dtype, (size,)))
            offset += prop.count_dtype.itemsize + size * prop.dtype.itemsize
        else:
            fields.append((prop.name, prop.dtype, ()))
            offset += prop.dtype.itemsize
    record = np.dtype([(str(k), kind, shape) for k, (_, kind, shape) in enumerate(fields)])
    if element.count * record.itemsize > len(body):
        return _walk(element, body, name)
    table = np.frombuffer(body, record, element.count)
    columns: _Columns = {}
    for k, (label, _, shape) in enumerate(fields):
        if label.startswith("count "):
            size = int(table[str(k)][0])
            if not (table[str(k)] == size).all():
                return _walk(element, body, name)
        elif shape:
            columns[label] = _Lists(np.full(element.count, shape[0], np.int64), _native(table[str(k)].reshape(-1)))
        else:
            columns[label] = _native(table[str(k)])
    return columns, element.count * record.itemsize


def _walk(element: _Element, body: memoryview, name: str) -> tuple[_Columns, int]:
    """Entry by entry, for lists of differing length: slower, but always possible."""
    scalars: dict[str, list[bytes]] = {prop.name: [] for prop in element.properties}
    sizes: dict[str, list[int]] = {prop.name: [] for prop in element.properties}
    at = 0
    for entry in range(element.count):
        for prop in element.properties:
            width = prop.dtype.itemsize
            if prop.count_dtype is not None:
                count_width = prop.count_dtype.itemsize
                if at + count_width > len(body):
                    raise _too_short(element, name, f"the data end within entry {entry}")
                size = int(np.frombuffer(body, prop.count_dtype, 1, at)[0])
                if size < 0:
                    raise SurfaceError(f"{name}: {element.name} {entry} has a list of {size} items")
                at += count_width
                width *= size
                sizes[prop.name].append(size)
            if at + width > len(body):
                raise _too_short(element, name, f"the data end within entry {entry}")
            scalars[prop.name].append(bytes(body[at : at + width]))
            at += width
    columns: _Columns = {}
    for prop in element.properties:
        values = _native(np.frombuffer(b"".join(scalars[prop.name]), prop.dtype))
        if prop.count_dtype is None:
            columns[prop.name] = values
        else:
            columns[prop.name] = _Lists(np.array(sizes[prop.name], np.int64), values)
    return columns, at


def _native(values: Array) -> Array:
    return values.astype(values.dtype.newbyteorder("="))


def _assembled(tables: dict[str, _Columns], name: str) -> Polygons:
    vertex, face = tables.get("vertex", {}), tables.get("face", {})
    axes = [vertex.get(axis) for axis in "xyz"]
    corners = next((face[key] for key in _CORNERS if key in face), None)
    if "tristrips" in tables:
        raise SurfaceError(f"{name} holds triangle strips; export it again as plain faces")
    if not all(isinstance(axis, np.ndarray) for axis in axes) or not isinstance(corners, _Lists):
        raise SurfaceError(
            f"{name} has no vertices with x, y, z or no faces with vertex_indices; was it exported as points?"
        )
    if corners.items.dtype.kind == "f":
        raise SurfaceError(f"{name}: vertex_indices are fractional numbers; export the mesh again")
    return Polygons(
        vertices=np.stack([np.asarray(axis, np.float64) for axis in axes], axis=1),
        sizes=corners.sizes,
        # Unsigned 64-bit numbers too large for int64 turn negative here and are refused as out of range.
        corners=corners.items.astype(np.int64),
        face_data={key: column for key, column in face.items() if isinstance(column, np.ndarray)},
        vertex_data={
            key: column for key, column in vertex.items() if isinstance(column, np.ndarray) and key not in _NOT_KEPT
        },
    )
