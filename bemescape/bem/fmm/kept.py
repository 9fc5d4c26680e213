"""Harmonics of fixed pairs of panel and box, worked out once and kept for every pass of an iteration.

A visit is a run of panels seen from one box: those of a leaf from the leaf itself, or those of a small box from a far
larger one and the other way round. Once their harmonics are known, panels enter an expansion, and expansions are
evaluated at panels, by products of small matrices; the recurrences of `harmonics` cost many times as much.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.fmm.balance import even_chunks
from bemescape.bem.fmm.harmonics import (
    BLOCK,
    charge_irregular,
    charge_regular,
    coefficient_count,
    dipole_irregular,
    dipole_regular,
)
from bemescape.bem.fmm.passes import load_point, work_arrays
from bemescape.compiled import njit
from bemescape.threads import over_rows

__all__ = ["FILLS", "KeptHarmonics", "Visits", "visits"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

_CHUNKS = 16


@dataclass(frozen=True)
class Visits:
    """Panels begin … end seen from a box, v times.

    Attributes
    ----------
    box, begin, end : (v,) int64
    first : (v + 1,) int64
        Where the harmonics of a visit begin.
    chunks : (c + 1,) int64
        Visits in runs of about equal work, which write to different places.
    """

    box: Ints
    begin: Ints
    end: Ints
    first: Ints
    chunks: Ints


def visits(box: Ints, begin: Ints, end: Ints, written: Ints) -> Visits:
    """From boxes and ranges of panels (v,); neighbours with one number in `written` (v,) stay in one chunk."""
    work = end - begin
    group_first = (
        np.concatenate([[0], np.flatnonzero(np.diff(written)) + 1, [len(written)]]) if len(box) else np.zeros(1, int)
    )
    total = np.concatenate([[0], np.cumsum(work)])
    chunks = group_first[even_chunks(np.diff(total[group_first]), _CHUNKS)]
    return Visits(box, begin, end, total, chunks)


def _fill(dipole, far):
    """A compiled function that writes the harmonics of all pairs of some visits, (pairs, count)."""

    @njit(cache=True, nogil=True, error_model="numpy")
    def run(
        degree, factors, chunks, box, begin, end, first, centres, scales, points, shape, out, first_chunk, last_chunk
    ):
        count = out.shape[1]
        for chunk in range(first_chunk, last_chunk):
            block, series, column, weight = work_arrays(degree, 1)
            v = chunks[chunk]
            row, stop = first[v], first[chunks[chunk + 1]]
            j = begin[v] if row < stop else 0
            while row < stop:
                size = min(BLOCK, stop - row)
                for k in range(size):
                    while j >= end[v]:
                        v += 1
                        j = begin[v]
                    load_point(block, k, j, centres[box[v]], scales[box[v]], points, shape)
                    j += 1
                for k in range(size, BLOCK):  # whole blocks are needed: the last pair again
                    for i in range(block.shape[0]):
                        block[i, k] = block[i, size - 1]
                if dipole and far:
                    dipole_irregular(block, degree, factors, series, column, weight)
                elif dipole:
                    dipole_regular(block, degree, factors, series, column, weight)
                elif far:
                    charge_irregular(block, degree, factors, series, column, weight)
                else:
                    charge_regular(block, degree, factors, series, column, weight)
                for k in range(size):
                    for i in range(count):
                        out[row + k, i] = weight[0, i, k]
                row += size

    return run


#: By (dipole, far).
FILLS: dict[tuple[bool, bool], Callable[..., None]] = {
    (dipole, far): _fill(dipole, far) for dipole in (False, True) for far in (False, True)
}


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _add_moments(chunks, box, begin, first, weights, unit, strengths, out, first_chunk, last_chunk):
    """Add the panels with strengths (n, columns), times the unit of their box, to rows (boxes, columns, count)."""
    for chunk in range(first_chunk, last_chunk):
        for v in range(chunks[chunk], chunks[chunk + 1]):
            start, size, scale, rows = begin[v], first[v + 1] - first[v], unit[box[v]], out[box[v]]
            if len(rows) == 1:
                for k in range(size):
                    charge = scale * strengths[start + k, 0]
                    for i in range(rows.shape[1]):
                        rows[0, i] += charge * weights[first[v] + k, i]
            else:
                sums = np.dot(strengths[start : start + size].T, weights[first[v] : first[v + 1]])
                for c in range(len(rows)):
                    for i in range(rows.shape[1]):
                        rows[c, i] += scale * sums[c, i]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _add_values(chunks, box, begin, first, weights, rows, out, first_chunk, last_chunk):
    """Add to out (n, columns) the values of rows (boxes, columns, count) at the panels."""
    for chunk in range(first_chunk, last_chunk):
        for v in range(chunks[chunk], chunks[chunk + 1]):
            start, size, mine = begin[v], first[v + 1] - first[v], rows[box[v]]
            if len(mine) == 1:
                for k in range(size):
                    total = np.float32(0.0)
                    for i in range(mine.shape[1]):
                        total += mine[0, i] * weights[first[v] + k, i]
                    out[start + k, 0] += total
            else:
                values = np.dot(weights[first[v] : first[v + 1]], mine.T)
                for k in range(size):
                    for c in range(len(mine)):
                        out[start + k, c] += values[k, c]


class KeptHarmonics:
    """Harmonics of all pairs of some visits.

    Parameters
    ----------
    seen : Visits
    dipole, far : bool
        Of dipoles along the panels' normals, not charges; irregular harmonics, not regular ones.
    centres, scales : (boxes, 3), (boxes,) float64
        Of the boxes.
    points, shape : (n, 3) float64, (n, 4) float32
        Of the panels.
    """

    def __init__(
        self, seen: Visits, degree: int, factors: Singles, *, dipole: bool, far: bool,
        centres: Floats, scales: Floats, points: Floats, shape: Singles,
    ) -> None:  # fmt: skip
        self._seen = seen
        self._unit = (scales * scales if dipole else scales).astype(np.float32)
        self._weights = np.empty((int(seen.first[-1]), coefficient_count(degree)), np.float32)
        over_rows(
            FILLS[dipole, far], len(seen.chunks) - 1, 1,
            degree, factors, seen.chunks, seen.box, seen.begin, seen.end, seen.first, centres, scales, points, shape,
            self._weights,
        )  # fmt: skip

    def add_moments(self, strengths: Singles, rows: Singles) -> None:
        """Add the panels with strengths (n, columns) to the expansions rows (boxes, columns, count) of their boxes."""
        s = self._seen
        over_rows(
            _add_moments, len(s.chunks) - 1, 1,
            s.chunks, s.box, s.begin, s.first, self._weights, self._unit, strengths, rows,
        )  # fmt: skip

    def add_values(self, rows: Singles, out: Singles) -> None:
        """Add the values of the expansions rows (boxes, columns, count) at the panels to out (n, columns)."""
        s = self._seen
        over_rows(_add_values, len(s.chunks) - 1, 1, s.chunks, s.box, s.begin, s.first, self._weights, rows, out)
