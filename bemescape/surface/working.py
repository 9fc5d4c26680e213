"""A mesh under repair, which remembers where each face and vertex came from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from bemescape.surface.measure import face_volumes, sums
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.surface.topology import Edges, linked_groups

__all__ = ["Working"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Working:
    """Arrays of a mesh; every repair returns a changed copy.

    Attributes
    ----------
    vertices : (n, 3) float
        In µm.
    faces : (m, 3) int
        Triangles.
    face_source : (m,) int
        The face of the original mesh whose data (labels) each face carries.
    vertex_source : (n,) int
        The vertex of the original mesh whose data each vertex carries.
    origin : (3,) float
        Fixed point that volumes are measured from, so that changes of an open mesh can be told too.
    diagonal : float
        Diagonal of the original bounding box in µm: the scale of tolerances.
    """

    vertices: Floats
    faces: Ints
    face_source: Ints
    vertex_source: Ints
    origin: Floats
    diagonal: float

    @classmethod
    def of(cls, surface: Surface) -> Working:
        """The arrays of a surface, unchanged."""
        low, high = surface.bounds
        return cls(
            surface.vertices,
            surface.faces,
            np.arange(len(surface.faces)),
            np.arange(len(surface.vertices)),
            0.5 * (low + high),
            float(np.linalg.norm(high - low)),
        )

    @cached_property
    def edges(self) -> Edges:
        """The edges of the faces."""
        return Edges.of(self.faces)

    @cached_property
    def volume(self) -> float:
        """Signed volume in µm³, every hole thought closed by a fan around the middle of its rim."""
        faces = float(face_volumes(self.vertices, self.faces, self.origin).sum())
        rim = self.edges.open_half_edges
        if not len(rim):
            return faces
        tails, heads = self.edges.tail[rim], self.edges.head[rim]
        ends, place = np.unique(np.r_[tails, heads], return_inverse=True)
        count, line = linked_groups(len(ends), place[: len(rim)], place[len(rim) :])
        size = np.bincount(line, minlength=count)
        middles = sums(line, self.vertices[ends], count) / size[:, None]
        points = np.concatenate([self.vertices, middles])
        lids = np.stack([heads, tails, len(self.vertices) + line[place[: len(rim)]]], axis=1)
        return faces + float(face_volumes(points, lids, self.origin).sum())

    @cached_property
    def areas(self) -> Floats:
        """Face areas (m,) in µm²."""
        return triangle_areas_normals(self.vertices, self.faces)[0]

    def keeping(self, keep: Bools) -> Working:
        """Only the faces (m,) marked True; vertices stay."""
        return replace(self, faces=self.faces[keep], face_source=self.face_source[keep])

    def turned(self, turn: Bools) -> Working:
        """The marked faces (m,) looking the other way."""
        faces = self.faces.copy()
        faces[turn] = faces[turn][:, ::-1]
        return replace(self, faces=faces)

    def renumbered(self, number: Ints) -> Working:
        """Each vertex k replaced by vertex `number[k]`; vertices stay."""
        return replace(self, faces=number[self.faces])

    def with_faces(self, faces: Ints, face_source: Ints) -> Working:
        """Other faces over the same vertices."""
        return replace(self, faces=faces, face_source=face_source)

    def adding(self, vertices: Floats, vertex_source: Ints) -> Working:
        """More vertices, numbered from len(self.vertices) on."""
        return replace(
            self,
            vertices=np.concatenate([self.vertices, vertices.reshape(-1, 3)]),
            vertex_source=np.concatenate([self.vertex_source, np.asarray(vertex_source, np.int64)]),
        )

    def without_unused_vertices(self) -> Working:
        """Only vertices that a face uses."""
        used = np.zeros(len(self.vertices), dtype=bool)
        used[self.faces.reshape(-1)] = True
        number = np.cumsum(used) - 1
        return replace(
            self,
            vertices=self.vertices[used],
            vertex_source=self.vertex_source[used],
            faces=number[self.faces],
        )

    def carried(
        self, face_data: Mapping[str, NDArray[np.generic]], vertex_data: Mapping[str, NDArray[np.generic]]
    ) -> tuple[dict[str, NDArray[np.generic]], dict[str, NDArray[np.generic]]]:
        """The arrays of the original mesh for these faces and vertices."""
        return (
            {key: array[self.face_source] for key, array in face_data.items()},
            {key: array[self.vertex_source] for key, array in vertex_data.items()},
        )
