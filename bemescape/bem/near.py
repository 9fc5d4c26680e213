"""Near field: what the far field's centroid rule gets wrong for close pairs, as sparse matrices.

Each entry is (exact or finer value) − (centroid rule), so that far field + near field is the whole operator.
Pairs closer than `EXACT` radii use the closed forms, averaged over the test panel; pairs up to `FINE` radii use
the three-point rule on both panels.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.kernels import (
    panel_integrals,
    self_mean_inverse_distance,
    spread_dipole,
    spread_inverse,
    spread_lifted,
)
from bemescape.bem.panels import Panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["NearField", "build_near_field", "fill_near_rows", "fill_single_rows", "near_panels", "near_pattern"]

#: Pairs with centroids closer than this many radii (of the larger panel) are integrated in closed form.
EXACT = 2.0
#: Pairs closer than this many radii use three points on each panel.
FINE = 4.5
#: The finer average over a test panel serves sources closer than this many radii of the test panel.
CLOSE = 1.0

#: Rows that a thread takes at a time.
_ROWS = 256

_FOUR_PI = 4.0 * math.pi


@dataclass(frozen=True)
class NearField:
    """Corrections in compressed sparse rows; rows and columns in the order of the panels.

    Attributes
    ----------
    first : (m + 1,) int64, column : (pairs,) int32
        Sparsity of K.
    double : (pairs,) float32
        Corrections to K (double layer), mean over the test panel.
    window_first : (m + 1,) int64, window_column : (window pairs,) int32
        Sparsity of V: window columns only.
    single : (window pairs,) float32
        Corrections to V (single layer).
    volume : (m,) float64
        Corrections to ∫_Ω G dy, the volume potential.
    """

    first: NDArray[np.int64]
    column: NDArray[np.int32]
    double: NDArray[np.float32]
    window_first: NDArray[np.int64]
    window_column: NDArray[np.int32]
    single: NDArray[np.float32]
    volume: NDArray[np.float64]


@njit(cache=True, error_model="numpy")
def near_panels(i, centroids, radii, first, last, low, high, reach, factor, found):
    """Write the numbers of the panels near panel i into `found`, ascending; return how many there are."""
    stack = np.empty(128, np.int64)
    stack[0] = 0
    top = 1
    count = 0
    x, y, z = centroids[i, 0], centroids[i, 1], centroids[i, 2]
    half = len(first) // 2
    while top > 0:
        top -= 1
        node = stack[top]
        if first[node] == last[node]:
            continue
        gx = max(low[node, 0] - x, x - high[node, 0], 0.0)
        gy = max(low[node, 1] - y, y - high[node, 1], 0.0)
        gz = max(low[node, 2] - z, z - high[node, 2], 0.0)
        limit = factor * max(radii[i], reach[node])
        if gx * gx + gy * gy + gz * gz > limit * limit:
            continue
        if node < half:
            # The left child is taken first: panels are found in the order of their numbers.
            stack[top] = 2 * node + 2
            stack[top + 1] = 2 * node + 1
            top += 2
            continue
        for j in range(first[node], last[node]):
            dx, dy, dz = x - centroids[j, 0], y - centroids[j, 1], z - centroids[j, 2]
            limit = factor * max(radii[i], radii[j])
            if dx * dx + dy * dy + dz * dz < limit * limit:
                if count < len(found):
                    found[count] = j
                count += 1
    return count


@njit(cache=True, nogil=True, error_model="numpy")
def _count_pairs(centroids, radii, is_window, first, last, low, high, reach, factor, counts, window_counts, begin, end):
    found = np.empty(len(radii), np.int64)
    for i in range(begin, end):
        counts[i] = near_panels(i, centroids, radii, first, last, low, high, reach, factor, found)
        for k in range(counts[i]):
            if is_window[found[k]]:
                window_counts[i] += 1


@njit(cache=True, error_model="numpy")
def _side(corners, i, start, end):
    dx = corners[i, start, 0] - corners[i, end, 0]
    dy = corners[i, start, 1] - corners[i, end, 1]
    dz = corners[i, start, 2] - corners[i, end, 2]
    return math.sqrt(dx * dx + dy * dy + dz * dz)


@njit(cache=True, error_model="numpy")
def _exact_pair(points, weights, corners, centroids, normals, j):
    """Weighted means over `points` of ∫ 1/r, of −Ω and of height × ∫ 1/r, for source panel j."""
    one_mean = angle_mean = lifted_mean = 0.0
    for p in range(len(points)):
        x, y, z = points[p, 0], points[p, 1], points[p, 2]
        one, angle = panel_integrals(
            corners[j, 0, 0] - x, corners[j, 0, 1] - y, corners[j, 0, 2] - z,
            corners[j, 1, 0] - x, corners[j, 1, 1] - y, corners[j, 1, 2] - z,
            corners[j, 2, 0] - x, corners[j, 2, 1] - y, corners[j, 2, 2] - z,
            normals[j, 0], normals[j, 1], normals[j, 2],
        )  # fmt: skip
        height = (
            normals[j, 0] * (centroids[j, 0] - x)
            + normals[j, 1] * (centroids[j, 1] - y)
            + normals[j, 2] * (centroids[j, 2] - z)
        )
        one_mean += weights[p] * one
        angle_mean -= weights[p] * angle
        lifted_mean += weights[p] * height * one
    return one_mean, angle_mean, lifted_mean


@njit(cache=True, error_model="numpy")
def _three_by_three(points, sources, normals, areas, j):
    """The means of `_exact_pair` by three points on either panel."""
    one_mean = angle_mean = lifted_mean = 0.0
    for p in range(3):
        for s in range(3):
            dx = sources[s, 0] - points[p, 0]
            dy = sources[s, 1] - points[p, 1]
            dz = sources[s, 2] - points[p, 2]
            inverse = 1.0 / math.sqrt(dx * dx + dy * dy + dz * dz)
            height = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
            one_mean += inverse
            angle_mean -= height * inverse * inverse * inverse
            lifted_mean += height * inverse
    weight = areas[j] / 9.0
    return weight * one_mean, weight * angle_mean, weight * lifted_mean


@njit(cache=True, nogil=True, error_model="numpy")
def _fill_rows(
    corners, centroids, normals, areas, radii, spread, three_points,
    close_points, close_weights, close_first, is_window,
    tree_first, tree_last, low, high, reach, exact, fine, close,
    first, column, double, window_first, window_column, single, volume, begin, end,
):  # fmt: skip
    found = np.empty(len(areas), np.int64)
    thirds = np.full(3, 1.0 / 3.0)
    for i in range(begin, end):
        count = near_panels(i, centroids, radii, tree_first, tree_last, low, high, reach, fine, found)
        slot = window_first[i]
        for k in range(count):
            j = found[k]
            dx = centroids[i, 0] - centroids[j, 0]
            dy = centroids[i, 1] - centroids[j, 1]
            dz = centroids[i, 2] - centroids[j, 2]
            distance = math.sqrt(dx * dx + dy * dy + dz * dz)
            if i == j:
                a, b, c = _side(corners, i, 0, 1), _side(corners, i, 1, 2), _side(corners, i, 2, 0)
                v, d, h = self_mean_inverse_distance(a, b, c, areas[i]), 0.0, 0.0
            elif distance < close * radii[i] + radii[j]:
                rule = slice(close_first[i], close_first[i + 1])
                v, d, h = _exact_pair(close_points[rule], close_weights[rule], corners, centroids, normals, j)
            elif distance < exact * max(radii[i], radii[j]):
                v, d, h = _exact_pair(three_points[i], thirds, corners, centroids, normals, j)
            else:
                v, d, h = _three_by_three(three_points[i], three_points[j], normals, areas, j)
            # What the far field does with this pair, to be taken back.
            inverse = 1.0 / math.sqrt(distance * distance + spread[j])
            hs = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
            ht = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
            tilt = normals[i, 0] * normals[j, 0] + normals[i, 1] * normals[j, 1] + normals[i, 2] * normals[j, 2]
            far_v = areas[j] * spread_inverse(ht, hs, spread[i], spread[j], inverse)
            far_d = areas[j] * spread_dipole(ht, hs, tilt, spread[i], spread[j], inverse)
            far_h = -areas[j] * spread_lifted(ht, hs, tilt, spread[i], spread[j], inverse)
            column[first[i] + k] = j
            double[first[i] + k] = (d - far_d) / _FOUR_PI
            volume[i] += 0.5 * (h - far_h) / _FOUR_PI
            if is_window[j]:
                window_column[slot] = j
                single[slot] = (v - far_v) / _FOUR_PI
                slot += 1


@njit(cache=True, nogil=True, error_model="numpy")
def fill_single_rows(centroids, normals, areas, spread, block, begin, end):
    """Rows of the far field's V between all of these panels, times √(area of the target / area of the source)."""
    for i in range(begin, end):
        for j in range(len(areas)):
            dx = centroids[i, 0] - centroids[j, 0]
            dy = centroids[i, 1] - centroids[j, 1]
            dz = centroids[i, 2] - centroids[j, 2]
            inverse = 1.0 / math.sqrt(dx * dx + dy * dy + dz * dz + spread[j])
            hs = normals[j, 0] * dx + normals[j, 1] * dy + normals[j, 2] * dz
            ht = normals[i, 0] * dx + normals[i, 1] * dy + normals[i, 2] * dz
            value = spread_inverse(ht, hs, spread[i], spread[j], inverse)
            block[i, j] = math.sqrt(areas[i] * areas[j]) / _FOUR_PI * value


def near_pattern(panels: Panels, is_window: NDArray[np.bool_], *, fine: float = FINE) -> NearField:
    """Which pairs of `panels` are close, with room for their corrections; `is_window` (m,) as `build_near_field`."""
    m = len(panels)
    counts, window_counts = np.zeros(m, np.int64), np.zeros(m, np.int64)
    over_rows(
        _count_pairs, m, _ROWS, panels.centroids, panels.radii, is_window, *_tree(panels), fine, counts, window_counts
    )
    first = np.concatenate([[0], np.cumsum(counts)])
    window_first = np.concatenate([[0], np.cumsum(window_counts)])
    return NearField(
        first,
        np.empty(first[-1], np.int32),
        np.empty(first[-1], np.float32),
        window_first,
        np.empty(window_first[-1], np.int32),
        np.empty(window_first[-1], np.float32),
        np.zeros(m),
    )


def fill_near_rows(
    near: NearField,
    panels: Panels,
    is_window: NDArray[np.bool_],
    begin: int,
    end: int,
    *,
    exact: float = EXACT,
    fine: float = FINE,
    close: float = CLOSE,
) -> None:
    """Work out the rows from `begin` to before `end` of a pattern."""
    _fill_rows(*_fill_arguments(near, panels, is_window, exact, fine, close), begin, end)


def build_near_field(
    panels: Panels,
    is_window: NDArray[np.bool_],
    *,
    exact: float = EXACT,
    fine: float = FINE,
    close: float = CLOSE,
) -> NearField:
    """Corrections for all close pairs of `panels`; `is_window` (m,) names the columns that V needs."""
    near = near_pattern(panels, is_window, fine=fine)
    over_rows(_fill_rows, len(panels), _ROWS, *_fill_arguments(near, panels, is_window, exact, fine, close))
    return near


def _tree(panels: Panels) -> tuple[Any, ...]:
    return panels.tree.first, panels.tree.last, panels.tree.low, panels.tree.high, panels.tree.reach


def _fill_arguments(
    near: NearField, panels: Panels, is_window: NDArray[np.bool_], exact: float, fine: float, close: float
) -> tuple[Any, ...]:
    return (
        panels.corners, panels.centroids, panels.normals, panels.areas, panels.radii, panels.spread,
        panels.three_points, panels.close_points,
        panels.close_weights, panels.close_first, is_window, *_tree(panels), exact, fine, close,
        near.first, near.column, near.double, near.window_first, near.window_column, near.single, near.volume,
    )  # fmt: skip
