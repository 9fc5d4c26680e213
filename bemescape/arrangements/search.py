"""Arrangements of k windows on s sites: clustered, spread, and those with the smallest and largest mean time."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.progress import Progress, ProgressEvent, silent

__all__ = ["SearchOutcome", "clustered", "searched", "spread_out"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Part of the arrangements that are drawn at random; the others are tried in turn from the best and the worst of them.
_RANDOM_PART = 0.4


@dataclass(frozen=True, eq=False)
class SearchOutcome:
    """What a search has seen.

    Attributes
    ----------
    best, worst : (k,) int64
        Sites with the smallest and the largest mean time.
    tried : int
        Different arrangements whose mean time was found.
    complete : bool
        True where these are all that exist.
    sampled : (n,) float64
        Mean times of arrangements that stand for all: all of them, or those drawn at random.
    """

    best: Ints
    worst: Ints
    tried: int
    complete: bool
    sampled: Floats


def clustered(places: Floats, k: int) -> Ints:
    """Sites close together (k,): around each site in turn its nearest, of these the set with the least distances."""
    gap = np.linalg.norm(places[:, None] - places[None], axis=2)
    nearest = np.argsort(gap, axis=1, kind="stable")[:, :k]
    total = gap[nearest[:, :, None], nearest[:, None, :]].sum(axis=(1, 2))
    return np.sort(nearest[int(total.argmin())])


def spread_out(places: Floats, k: int) -> Ints:
    """Sites far apart (k,): the next is the one farthest from all before it, from each first site in turn.

    Of these sets the one with the largest least distance is taken (Gonzalez 1985, doi:10.1016/0304-3975(85)90224-5).
    """
    gap = np.linalg.norm(places[:, None] - places[None], axis=2)
    best, widest = np.arange(k), -1.0
    for first in range(len(places)):
        chosen = [first]
        away = gap[first].copy()
        least = math.inf
        while len(chosen) < k:
            farthest = int(away.argmax())
            least = min(least, float(away[farthest]))
            chosen.append(farthest)
            away = np.minimum(away, gap[farthest])
        if least > widest:
            best, widest = np.array(chosen), least
        if k == 1:
            break
    return np.sort(best)


class _Seen:
    """Mean times of arrangements, each worked out once, within a budget."""

    def __init__(self, mean_times: Callable[[Ints], Floats]) -> None:
        self._mean_times = mean_times
        self.known: dict[bytes, float] = {}

    def times(self, rows: Ints) -> Floats:
        keys = [row.tobytes() for row in rows]
        new = {key: row for key, row in zip(keys, rows, strict=True) if key not in self.known}
        if new:
            times = self._mean_times(np.array(list(new.values())))
            self.known.update(zip(new, times.tolist(), strict=True))
        return np.array([self.known[key] for key in keys])


def searched(
    mean_times: Callable[[Ints], Floats],
    places: Floats,
    k: int,
    *,
    most: int,
    seed: int,
    progress: Progress = silent,
) -> SearchOutcome:
    """Look for the k of s sites with the smallest and the largest mean time.

    Strategy: all arrangements where there are at most `most`. Otherwise random ones, and from the spread-out set, the
    clustered one and then the best (or worst) of the random ones one window after another is moved to whichever site
    is best, until no move helps; from the next start then, until `most` arrangements are seen.

    Parameters
    ----------
    mean_times : callable
        Mean times (b,) of arrangements (b, k), each sorted.
    places : (s, 3) µm
    k : int
        At most s.
    most : int
        About how many arrangements to try.
    seed : int
        Of the random ones.
    progress : callable, optional
    """
    s = len(places)
    if math.comb(s, k) <= most:
        rows = np.array(list(itertools.combinations(range(s), k)), dtype=np.int64)
        times = mean_times(rows)
        progress(ProgressEvent("searching", 1.0, f"all {len(rows)} arrangements"))
        return SearchOutcome(rows[times.argmin()], rows[times.argmax()], len(rows), complete=True, sampled=times)
    random = np.random.default_rng(seed)
    seen = _Seen(mean_times)
    rows = np.sort(random.permuted(np.tile(np.arange(s), (max(1, int(_RANDOM_PART * most)), 1)), axis=1)[:, :k])
    sampled = seen.times(rows)
    order = np.argsort(sampled)
    ends = []
    for sign, first in ((1.0, spread_out(places, k)), (-1.0, clustered(places, k))):
        budget = len(seen.known) + (most - len(seen.known)) // (2 if sign > 0.0 else 1)
        starts = [first, *(rows[order] if sign > 0.0 else rows[order[::-1]])]
        ends.append(_descended(seen, starts, s, sign, budget, progress))
    return SearchOutcome(ends[0], ends[1], len(seen.known), complete=False, sampled=sampled)


def _descended(seen: _Seen, starts: list[Ints], s: int, sign: float, budget: int, progress: Progress) -> Ints:
    """The best end (sign 1) or worst (−1) of descents from `starts`, until the budget is used."""
    ends: dict[bytes, tuple[float, Ints]] = {}
    for start in starts:
        here, value = start, sign * float(seen.times(start[None])[0])
        while True:
            moved = _neighbours(here, s)
            values = sign * seen.times(moved)
            if values.min() >= value:
                break
            here, value = moved[values.argmin()], float(values.min())
        ends[here.tobytes()] = value, here
        progress(ProgressEvent("searching", None, f"{len(seen.known)} arrangements"))
        if len(seen.known) >= budget:
            break
    return min(ends.values(), key=lambda end: end[0])[1]


def _neighbours(arrangement: Ints, s: int) -> Ints:
    """All arrangements (k (s − k), k) with one window moved, each sorted."""
    free = np.setdiff1d(np.arange(s), arrangement)
    rows = np.repeat(arrangement[None], len(arrangement) * len(free), axis=0)
    rows[np.arange(len(rows)), np.repeat(np.arange(len(arrangement)), len(free))] = np.tile(free, len(arrangement))
    return np.sort(rows, axis=1)
