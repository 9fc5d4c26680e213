"""The wall on which windows are looked for: a surface with what every search needs, worked out once."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from bemescape.surface.compartments import face_parts
from bemescape.surface.surface import Surface
from bemescape.windows.nearest import NearestTriangle

__all__ = ["Wall"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Wall:
    """A surface, perhaps cut and closed by lids.

    Attributes
    ----------
    surface : Surface
        As it is solved.
    given : Surface
        As it was handed in.
    source_face : (m,) int64
        The face of `given` in which each face lies; −1 on lids.
    lid_of : (m,) int64
        Number of the lid of each face, in the order of the lids; −1 elsewhere.
    """

    surface: Surface
    given: Surface
    source_face: Ints
    lid_of: Ints

    @classmethod
    def of(cls, surface: Surface) -> Wall:
        """A surface without lids."""
        count = len(surface.faces)
        return cls(surface, surface, np.arange(count), np.full(count, -1))

    @cached_property
    def corners(self) -> Floats:
        """Corners of the faces (m, 3, 3) in µm."""
        return np.asarray(self.surface.vertices[self.surface.faces])

    @cached_property
    def middles(self) -> Floats:
        """Middles of the faces (m, 3) in µm."""
        return np.asarray(self.corners.mean(axis=1))

    @cached_property
    def reaches(self) -> Floats:
        """Distance (m,) from the middle of each face to its farthest corner."""
        return np.asarray(np.linalg.norm(self.corners - self.middles[:, None], axis=2).max(axis=1))

    @cached_property
    def parts(self) -> Ints:
        """Number of the closed shell of each face (m,)."""
        return face_parts(self.surface.faces)

    @cached_property
    def nearest(self) -> NearestTriangle:
        """Closest points on the wall."""
        return NearestTriangle(self.corners)

    @cached_property
    def diagonal(self) -> float:
        """Diagonal of the bounding box in µm."""
        low, high = self.surface.bounds
        return float(np.linalg.norm(high - low))
