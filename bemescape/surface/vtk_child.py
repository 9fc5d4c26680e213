"""Reads one VTK file in a process of its own; started by `format_vtk`, never imported.

VTK's readers trust what a file says about itself: a damaged one can end the whole process or fill the
memory. Here that ends only the child. It imports nothing of the package, so it starts quickly.

Arguments: the kind ("vtp" or "vtk"), the file, the .npz to write, the limit of memory in bytes. Objections
of VTK go to stderr, where the parent reads them.
"""

from __future__ import annotations

import sys
from typing import Any

import numpy as np
from vtkmodules.util.numpy_support import vtk_to_numpy


def _limit_memory(limit: int) -> None:
    try:
        import resource
    except ImportError:  # not on Windows
        return
    resource.setrlimit(resource.RLIMIT_AS, (limit, limit))


def _numbers(attributes: Any, prefix: str) -> dict[str, Any]:
    kept = {}
    for k in range(attributes.GetNumberOfArrays()):
        array = attributes.GetArray(k)  # None for text
        if array is not None and array.GetName() and array.GetName() not in {"Normals"}:
            kept[prefix + array.GetName()] = vtk_to_numpy(array)
    return kept


def main(kind: str, source: str, target: str, limit: int) -> int:
    """Exit code: 0 written, 3 triangle strips, 4 nothing read."""
    if kind == "vtp":
        from vtkmodules.vtkIOXML import vtkXMLPolyDataReader as Reader
    else:
        from vtkmodules.vtkIOLegacy import vtkPolyDataReader as Reader
    _limit_memory(limit)
    reader = Reader()
    reader.SetFileName(source)
    if kind == "vtk":
        for switch in ("Scalars", "Vectors", "Normals", "Tensors", "Fields"):
            getattr(reader, f"ReadAll{switch}On")()
    reader.Update()
    mesh = reader.GetOutput()
    if mesh is None or mesh.GetPoints() is None:
        return 4
    if mesh.GetNumberOfStrips():
        return 3
    polygons = mesh.GetPolys()
    # Cell arrays run over vertices, lines, polygons in this order.
    first = mesh.GetNumberOfVerts() + mesh.GetNumberOfLines()
    count = polygons.GetNumberOfCells()
    faces = {key: array[first : first + count] for key, array in _numbers(mesh.GetCellData(), "face ").items()}
    found: dict[str, Any] = {
        "points": vtk_to_numpy(mesh.GetPoints().GetData()),
        "offsets": vtk_to_numpy(polygons.GetOffsetsArray()),
        "corners": vtk_to_numpy(polygons.GetConnectivityArray()),
        **faces,
        **_numbers(mesh.GetPointData(), "vertex "),
    }
    np.savez(target, **found)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1], sys.argv[2], sys.argv[3], int(sys.argv[4])))
