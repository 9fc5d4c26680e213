"""Expansions: up the tree, across it, and down again.

Panels enter expansions, and values are taken from them, in `kept`; here only with slopes.

Every row of an expansion belongs to one box and one column (one density, or one part of a kernel); rows of columns in
which a box has no source are not `live` and cost nothing on the way up and across. Translations are batched: many rows
are gathered, multiplied by one matrix and added to where they belong, so that the work is done by the linear algebra
library. All passes run over chunks fixed by the data, and a row is written by one chunk only, in a fixed order:
results do not depend on the number of threads. (Variants are closures over flags, never over functions: numba could not
find those again in its cache on disk.)
"""

from __future__ import annotations

import numpy as np

from bemescape.bem.fmm.harmonics import BLOCK, SERIES, slopes_irregular, slopes_regular
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = [
    "load_point",
    "move_across",
    "move_down",
    "move_up",
    "slopes_at_leaves",
    "slopes_from_smaller",
    "work_arrays",
]

#: Rows multiplied at a time.
_BATCH = 256
#: Pieces of a level of boxes, on the way up and down.
_LEVEL_PIECES = 16
_SMALL_LEVEL = 256
_UPWARDS, _DOWNWARDS = True, False


@njit(cache=True, fastmath=True, error_model="numpy")
def load_point(block, k, j, centre, scale, points, shape):
    """Panel j as point k of a block, in units of a box."""
    block[0, k] = np.float32((points[j, 0] - centre[0]) * scale)
    block[1, k] = np.float32((points[j, 1] - centre[1]) * scale)
    block[2, k] = np.float32((points[j, 2] - centre[2]) * scale)
    block[3, k], block[4, k], block[5, k] = shape[j, 0], shape[j, 1], shape[j, 2]
    block[6, k] = shape[j, 3] * np.float32(scale * scale)


@njit(cache=True)
def _load_box(block, first, size, centre, scale, points, shape):
    """A block of panels seen from one box; the last is repeated to fill it."""
    for k in range(BLOCK):
        load_point(block, k, first + min(k, size - 1), centre, scale, points, shape)


@njit(cache=True)
def _load_leaves(block, start, size, leaf, number, leaves, last, centres, scales, points, shape):
    """A block of panels in a row, each seen from its own leaf; which (by number) is written to `leaf`."""
    for k in range(BLOCK):
        j = start + min(k, size - 1)
        while j >= last[leaves[number]]:
            number += 1
        leaf[k] = number
        load_point(block, k, j, centres[leaves[number]], scales[leaves[number]], points, shape)


@njit(cache=True)
def work_arrays(degree, layers):
    """Arrays for a block: points, power series, one m of the harmonics, all of them."""
    count = (degree + 1) * (degree + 1)
    return (
        np.zeros((7, BLOCK), np.float32), np.zeros((SERIES, 4, BLOCK), np.float32),
        np.zeros((2 * degree + 3, 4, BLOCK), np.float32), np.zeros((layers, count, BLOCK), np.float32),
    )  # fmt: skip


@njit(cache=True, fastmath=True, error_model="numpy")
def _translate(matrix, pairs_from, pairs_to, live, rows_from, rows_to, gathered, moved):
    """Add the leading coefficients of boxes `pairs_from`, times `matrix`, to those of boxes `pairs_to`."""
    k, columns = len(matrix), rows_from.shape[1]
    row_of = np.empty((_BATCH, 2), np.int64)
    size = 0
    for p in range(len(pairs_from)):
        for c in range(columns):
            if live[pairs_from[p], c]:
                source, target = rows_from[pairs_from[p], c], gathered[size * k : size * k + k]
                for i in range(k):
                    target[i] = source[i]
                row_of[size, 0], row_of[size, 1] = pairs_to[p], c
                size += 1
            if size == _BATCH or (size > 0 and p == len(pairs_from) - 1 and c == columns - 1):
                product = moved[: size * k].reshape((size, k))
                np.dot(gathered[: size * k].reshape((size, k)), matrix, product)
                for r in range(size):
                    target, source = rows_to[row_of[r, 0], row_of[r, 1]], product[r]
                    for i in range(k):
                        target[i] += source[i]
                size = 0


@njit(cache=True, nogil=True)
def _between_levels(begin, end, pieces, child, matrices, live, rows, upwards, first_piece, last_piece):
    """Translate between boxes begin … end, in pieces, and their children, one kind of child at a time."""
    count = rows.shape[2]
    gathered, moved = np.empty(_BATCH * count, np.float32), np.empty(_BATCH * count, np.float32)
    above, below = np.empty(end - begin, np.int64), np.empty(end - begin, np.int64)
    for piece in range(first_piece, last_piece):
        for k in range(8):
            size = 0
            for b in range(
                begin + (end - begin) * piece // pieces,
                begin + (end - begin) * (piece + 1) // pieces,
            ):
                if child[b, k] >= 0:
                    above[size], below[size] = b, child[b, k]
                    size += 1
            if upwards:
                _translate(matrices[k], below[:size], above[:size], live, rows, rows, gathered, moved)
            else:
                _translate(matrices[k], above[:size], below[:size], live, rows, rows, gathered, moved)


def _between_all_levels(level_first, child, matrices, live, rows, upwards):
    levels = len(level_first) - 2
    for step in range(levels):
        level = levels - 1 - step if upwards else step
        begin, end = level_first[level], level_first[level + 1]
        # Waking the other threads for a small level costs more than it saves.
        pieces = 1 if end - begin < _SMALL_LEVEL else _LEVEL_PIECES
        over_rows(_between_levels, pieces, 1, begin, end, pieces, child, matrices, live, rows, upwards)


def move_up(tree, to_parent, live, rows):
    """Multipoles (boxes, columns, count) of all boxes from those of the leaves, in place.

    `live` (boxes, columns) tells where there are any; it is passed up with them.
    """
    for level in range(len(tree.level_first) - 2, 0, -1):
        boxes = slice(tree.level_first[level], tree.level_first[level + 1])
        np.logical_or.at(live, tree.parent[boxes], live[boxes])
    _between_all_levels(tree.level_first, tree.child, to_parent, live, rows, _UPWARDS)


def move_down(tree, to_child, rows):
    """Locals (boxes, columns, count) of all boxes: each adds its parent's, in place, level by level."""
    _between_all_levels(tree.level_first, tree.child, to_child, np.ones(rows.shape[:2], np.bool_), rows, _DOWNWARDS)


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def move_across(
    far_first, far_target, far_source, far_degree, matrix_first, matrices, live, rows_from, rows_to,
    first_chunk, last_chunk,
):  # fmt: skip
    """Multipoles of source boxes into the locals of far target boxes."""
    count = rows_from.shape[2]
    gathered, moved = np.empty(_BATCH * count, np.float32), np.empty(_BATCH * count, np.float32)
    for chunk in range(first_chunk, last_chunk):
        for offset in range(far_first.shape[1] - 1):
            begin, end = far_first[chunk, offset], far_first[chunk, offset + 1]
            if end > begin:
                k = (far_degree[offset] + 1) * (far_degree[offset] + 1)
                matrix = matrices[matrix_first[offset] : matrix_first[offset + 1]].reshape((k, k))
                _translate(
                    matrix, far_source[begin:end], far_target[begin:end], live, rows_from, rows_to, gathered, moved
                )


@njit(cache=True, fastmath=True, error_model="numpy")
def _add_slopes(weight, rows, scale, start, begin, end, out):
    """Add to out (8, n) at points begin … end: values of four columns, slopes of three of them, a fifth's value."""
    values, plain = np.dot(rows[:4], weight[0]), np.dot(rows[4:5], weight[1])
    steep = np.dot(rows[1:4], weight[2])
    for k in range(begin, end):
        for c in range(4):
            out[c, start + k] += values[c, k]
        for c in range(3):
            out[4 + c, start + k] += np.float32(scale) * steep[c, k]
        out[7, start + k] += plain[0, k]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def slopes_at_leaves(
    degree, factors, chunks, leaves, first, last, centres, scales, points, shape, local, out, first_chunk, last_chunk
):
    """From the locals of their leaf to targets, as `_add_slopes`."""
    for chunk in range(first_chunk, last_chunk):
        block, series, column, weight = work_arrays(degree, 3)
        leaf = np.empty(BLOCK, np.int64)
        number = chunks[chunk]
        start, stop = first[leaves[number]], last[leaves[chunks[chunk + 1] - 1]]
        while start < stop and number < chunks[chunk + 1]:
            size = min(BLOCK, stop - start)
            _load_leaves(block, start, size, leaf, number, leaves, last, centres, scales, points, shape)
            slopes_regular(block, degree, factors, series, column, weight)
            begin = 0
            while begin < size:
                number = leaf[begin]
                b = leaves[number]
                end = min(size, last[b] - start)
                _add_slopes(weight, local[b], scales[b], start, begin, end, out)
                begin = end
            start += size


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def slopes_from_smaller(
    degree, factors, chunks, leaves, item_first, items, first, last, points, shape, centres, scales, multipole, out,
    first_chunk, last_chunk,
):  # fmt: skip
    """The points of leaf leaves[number] see the multipoles of the boxes items[item_first[number]: …]."""
    for chunk in range(first_chunk, last_chunk):
        block, series, column, weight = work_arrays(degree, 3)
        for number in range(chunks[chunk], chunks[chunk + 1]):
            leaf = leaves[number]
            for item in range(item_first[number], item_first[number + 1]):
                b = items[item]
                for start in range(first[leaf], last[leaf], BLOCK):
                    size = min(BLOCK, last[leaf] - start)
                    _load_box(block, start, size, centres[b], scales[b], points, shape)
                    slopes_irregular(block, degree, factors, series, column, weight)
                    _add_slopes(weight, multipole[b], scales[b], start, 0, size, out)
