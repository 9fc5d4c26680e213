"""Which closed part lies inside which."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["PARTS_LIMIT", "nesting_depths"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: With more parts than this, depths are not determined: such a mesh is debris, not a cell.
PARTS_LIMIT = 3000

#: A linear map of no simple angle (containment survives it), so that rays hit no edge of a voxel-aligned
#: mesh head-on.
_TURN = np.array(
    [
        [0.8170416, -0.4253718, 0.3894183],
        [0.5471229, 0.7741930, -0.3182573],
        [-0.1661044, 0.4730897, 0.8652151],
    ]
)


def nesting_depths(vertices: Floats, faces: Ints, part: Ints, count: int) -> Ints:
    """Number of other closed parts that contain each part (count,).

    All are -1 where there are more than `PARTS_LIMIT`. `part` (m,) numbers the part of each face; faces of
    open parts carry -1. A part is placed by rays from the middles of its largest faces: it lies inside a
    part whose surface the ray crosses an odd number of times. Parts that cross one another have no depth;
    what is returned for them follows the majority of three rays.
    """
    if count > PARTS_LIMIT:
        return np.full(count, -1, dtype=np.int64)
    if count < 2:
        return np.zeros(count, dtype=np.int64)
    used = part >= 0
    corners = (vertices @ _TURN.T)[faces[used]]
    owner = part[used]
    low, high = corners.min(axis=1), corners.max(axis=1)
    box_low = np.full((count, 3), np.inf)
    box_high = np.full((count, 3), -np.inf)
    np.minimum.at(box_low, owner, low)
    np.maximum.at(box_high, owner, high)
    sizes = np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
    by_part = np.lexsort((-sizes, owner))
    begin = np.searchsorted(owner[by_part], np.arange(count + 1))
    depths = np.zeros(count, dtype=np.int64)
    for k in range(count):
        inside_box = (box_low <= box_low[k]).all(axis=1) & (box_high >= box_high[k]).all(axis=1)
        inside_box[k] = False
        if not inside_box.any():
            continue
        candidates = np.flatnonzero(inside_box[owner])
        largest = by_part[begin[k] : min(begin[k] + 3, begin[k + 1])]
        votes = np.zeros(count, dtype=np.int64)
        for face in largest:
            point = corners[face].mean(axis=0)
            over = candidates[
                (low[candidates, 0] <= point[0])
                & (high[candidates, 0] >= point[0])
                & (low[candidates, 1] <= point[1])
                & (high[candidates, 1] >= point[1])
                & (high[candidates, 2] >= point[2])
            ]
            crossed = over[_ray_hits(point, corners[over])]
            votes += np.bincount(owner[crossed], minlength=count) % 2
        depths[k] = int((2 * votes > len(largest)).sum())
    return depths


def _ray_hits(point: Floats, corners: Floats) -> NDArray[np.bool_]:
    """Whether the ray from `point` along +z passes each triangle (k, 3, 3)."""
    shifted = corners - point
    x, y = shifted[..., 0], shifted[..., 1]
    x_next, y_next = np.roll(x, -1, axis=1), np.roll(y, -1, axis=1)
    turn = x * y_next - x_next * y
    hit = (turn > 0.0).all(axis=1) | (turn < 0.0).all(axis=1)
    a, b, c = shifted[:, 0], shifted[:, 1], shifted[:, 2]
    normal = np.cross(b - a, c - a)
    # Height of the plane over the point: n·a / n_z.
    height = np.einsum("ij,ij->i", normal, a)
    above: NDArray[np.bool_] = hit & (height * normal[:, 2] > 0.0)
    return above
