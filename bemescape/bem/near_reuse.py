"""A near field made from that of another mesh: rows among unchanged panels are taken over, not worked out again.

An entry depends on its two panels alone, and which panels are close depends on the pair alone: where a panel and all
that are close to it are the same in both meshes, and are windows in both or in neither, so is its row, up to the
numbers of the panels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.near import FINE, NearField, fill_near_rows, near_panels, near_pattern
from bemescape.bem.panels import Panels
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["EarlierNearField", "near_field_from"]

_ROWS = 256


@dataclass(frozen=True, eq=False)
class EarlierNearField:
    """The near field of another mesh, with its panels and which of them are windows (m,)."""

    panels: Panels
    is_window: NDArray[np.bool_]
    near: NearField


def near_field_from(
    panels: Panels, is_window: NDArray[np.bool_], earlier: EarlierNearField
) -> tuple[NearField, NDArray[np.bool_]]:
    """The near field of `panels`, as `build_near_field`, and the rows (m,) that were taken over from `earlier`."""
    m = len(panels)
    number = {corners.tobytes(): k for k, corners in enumerate(earlier.panels.corners)}
    before = np.array([number.get(corners.tobytes(), -1) for corners in panels.corners], dtype=np.int64)
    near, kept = near_pattern(panels, is_window), np.zeros(m, np.bool_)
    tree, old = panels.tree, earlier.near
    over_rows(
        _copy_rows, m, _ROWS, panels.centroids, panels.radii, is_window,
        tree.first, tree.last, tree.low, tree.high, tree.reach, FINE, before, earlier.is_window,
        old.first, old.column, old.double, old.window_first, old.window_column, old.single, old.volume,
        near.first, near.column, near.double, near.window_first, near.window_column, near.single, near.volume, kept,
    )  # fmt: skip
    # Runs of rows that are left; long ones in pieces, so that threads can share them.
    change = np.flatnonzero(np.diff(np.concatenate([[True], kept, [True]]).astype(np.int8)))
    runs = [
        (begin, min(begin + _ROWS, last))
        for first, last in zip(change[::2].tolist(), change[1::2].tolist(), strict=True)
        for begin in range(first, last, _ROWS)
    ]

    def fill(begin: int, end: int) -> None:
        for run in runs[begin:end]:
            fill_near_rows(near, panels, is_window, *run)

    over_rows(fill, len(runs), 1)
    return near, kept


@njit(cache=True, error_model="numpy")
def _place(columns, wanted):
    """Where `wanted` stands in ascending `columns`; it is there."""
    low, high = 0, len(columns)
    while low < high:
        middle = (low + high) // 2
        if columns[middle] < wanted:
            low = middle + 1
        else:
            high = middle
    return low


@njit(cache=True, nogil=True, error_model="numpy")
def _copy_rows(
    centroids, radii, is_window, tree_first, tree_last, low, high, reach, fine, before, was_window,
    old_first, old_column, old_double, old_window_first, old_window_column, old_single, old_volume,
    first, column, double, window_first, window_column, single, volume, kept, begin, end,
):  # fmt: skip
    found = np.empty(len(radii), np.int64)
    for i in range(begin, end):
        old = before[i]
        if old < 0 or first[i + 1] - first[i] != old_first[old + 1] - old_first[old]:
            continue
        count = near_panels(i, centroids, radii, tree_first, tree_last, low, high, reach, fine, found)
        same = True
        for k in range(count):
            j = before[found[k]]
            if j < 0 or is_window[found[k]] != was_window[j]:
                same = False
                break
        if not same:
            continue
        # As many close panels as before, each of them there before: the same ones.
        slot = window_first[i]
        columns = old_column[old_first[old] : old_first[old + 1]]
        window_columns = old_window_column[old_window_first[old] : old_window_first[old + 1]]
        for k in range(count):
            j = before[found[k]]
            column[first[i] + k] = found[k]
            double[first[i] + k] = old_double[old_first[old] + _place(columns, j)]
            if is_window[found[k]]:
                window_column[slot] = found[k]
                single[slot] = old_single[old_window_first[old] + _place(window_columns, j)]
                slot += 1
        volume[i] = old_volume[old]
        kept[i] = True
