"""The closed surface of a compartment, as arrays in µm."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from bemescape.surface.heal import HealReport
    from bemescape.surface.health import HealthReport

__all__ = ["Surface", "triangle_areas_normals"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def triangle_areas_normals(vertices: Floats, faces: Ints) -> tuple[Floats, Floats]:
    """Areas (m,) in µm² and unit normals (m, 3) of flat triangles; a zero-area face has a zero normal."""
    a, b, c = (vertices[faces[:, k]] for k in range(3))
    cross = np.cross(b - a, c - a)
    double = np.linalg.norm(cross, axis=1)
    normals = np.divide(cross, double[:, None], out=np.zeros_like(cross), where=double[:, None] > 0.0)
    return 0.5 * double, normals


@dataclass(frozen=True, eq=False)
class Surface:
    """One or several closed, outward-facing shells.

    Attributes
    ----------
    vertices : (n, 3) float64
        Positions in µm.
    faces : (m, 3) int64
        Corners of each triangle, counter-clockwise seen from outside the diffusing volume.
    face_data, vertex_data : mapping of str to array
        Arrays of the file, first axis m or n (labels of a segmentation, for instance).
    name : str
        For messages and file names.
    unit_um : (3,) float64
        µm per unit of the file along each axis; turns positions of a case file into µm.
    sha256 : str
        Checksum of the file's bytes; empty for a surface made in memory.
    health : HealthReport or None
        State of the mesh as it was read.
    healing : HealReport or None
        Every change that healing made; None if nothing was changed.
    """

    vertices: Floats
    faces: Ints
    face_data: Mapping[str, NDArray[np.generic]] = field(default_factory=lambda: MappingProxyType({}))
    vertex_data: Mapping[str, NDArray[np.generic]] = field(default_factory=lambda: MappingProxyType({}))
    name: str = "surface"
    unit_um: Floats = field(default_factory=lambda: np.ones(3))
    sha256: str = ""
    health: HealthReport | None = None
    healing: HealReport | None = None

    def __post_init__(self) -> None:
        for name, kind in (("vertices", np.float64), ("faces", np.int64), ("unit_um", np.float64)):
            array = np.array(getattr(self, name), dtype=kind)
            array.setflags(write=False)
            object.__setattr__(self, name, array)

    @cached_property
    def _areas_normals(self) -> tuple[Floats, Floats]:
        return triangle_areas_normals(self.vertices, self.faces)

    @property
    def areas(self) -> Floats:
        """Face areas (m,) in µm²."""
        return self._areas_normals[0]

    @property
    def normals(self) -> Floats:
        """Unit normals (m, 3), out of the diffusing volume."""
        return self._areas_normals[1]

    @property
    def area(self) -> float:
        """Total area in µm²."""
        return float(self.areas.sum())

    @cached_property
    def volume(self) -> float:
        """Enclosed volume in µm³ (divergence theorem; obstacles count negative)."""
        corners = self.vertices[self.faces] - self.vertices.mean(axis=0)
        return float(np.einsum("ij,ij->", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])) / 6.0)

    @property
    def bounds(self) -> Floats:
        """Lowest and highest corner (2, 3) of the bounding box in µm."""
        return np.array([self.vertices.min(axis=0), self.vertices.max(axis=0)])

    def __repr__(self) -> str:
        return f"Surface: {self.name}, {len(self.faces)} faces, volume {self.volume:.4g} µm³, area {self.area:.4g} µm²"
