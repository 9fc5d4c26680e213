"""Adaptive octrees on a common lattice, and which boxes see each other how.

Strategy: all trees of one calculation share a root cube, so that boxes of equal level are offset by whole sides and
one set of translation matrices serves every level. A box is split while it holds more than `cap` panels, but panels
wider than its children do not count: an expansion about a box must not carry panels that stick far out of it.
Targets and sources may have trees of their own; a walk down both at once sorts every pair of them into exactly one of

* `near`: panels in sight of each other, summed directly (touching leaves, and distant pairs too small to expand);
* `far`: two boxes of equal size with at least one box between them: expansion to expansion;
* `down`: a source box seen by a larger target leaf: its expansion is evaluated at the points there;
* `up`: a source leaf seen by a smaller target box: its panels enter the expansion of that box.

Source of the four lists: Carrier, Greengard & Rokhlin (1988), doi:10.1137/0909044 (there U, V, W and X).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.fmm.balance import even_chunks
from bemescape.bem.tree import morton_codes
from bemescape.compiled import njit

__all__ = ["FAR_OFFSETS", "Lists", "Octree", "RootCube", "build_lists", "build_octree", "root_cube"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Levels below the root at most: 21 bits a coordinate fit a 63-bit code.
_DEPTH = 20
#: A panel counts in a box whose children would have this many of its radii as their side.
_SIDES = 3.0
#: Fewer sources than this in a distant box are summed directly, so are fewer targets in one, and two boxes with a
#: smaller product (about where expansions begin to pay, from the counts of operations).
_FEW_SOURCES, _FEW_TARGETS, _FEW_PAIRS = 80, 120, 150
#: Chunks of target boxes in which the translations are batched; more would make the batches too short.
_CHUNKS = 16

_REACH = 3
_OFFSETS = np.array(
    [
        (x, y, z)
        for x in range(-_REACH, _REACH + 1)
        for y in range(-_REACH, _REACH + 1)
        for z in range(-_REACH, _REACH + 1)
        if max(abs(x), abs(y), abs(z)) > 1
    ]
)
#: The 316 places (target − source, in sides) at which boxes of equal level may exchange expansions.
FAR_OFFSETS = _OFFSETS


@dataclass(frozen=True)
class RootCube:
    """Lower corner (3,) and side of the cube that becomes the unit cube."""

    origin: Floats
    side: float

    def inside(self, points: Floats) -> Floats:
        """Points (n, 3) in units of the cube."""
        return np.ascontiguousarray((points - self.origin) / self.side)

    def holds(self, points: Floats) -> bool:
        """Whether all points (n, 3) lie in the cube."""
        unit = self.inside(points)
        return bool((unit >= 0.0).all() and (unit < 1.0).all())


def root_cube(points: Floats) -> RootCube:
    """A cube around points (n, 3), somewhat larger and off their centre.

    In a tight cube, planes of a shape and the centres of graded sets would fall on box faces at every level, where
    the truncation errors of all levels add up (measured: 5 to 30 times the error).
    """
    low, high = points.min(axis=0), points.max(axis=0)
    extent = float((high - low).max())
    if extent == 0.0:
        extent = max(float(np.abs(low).max()), 1.0) * 1e-3
    side = 1.17 * extent
    shift = np.array([0.31, 0.47, -0.39]) * (0.17 / 2.0) * extent
    return RootCube(0.5 * (low + high) + shift - 0.5 * side, side)


@dataclass(frozen=True)
class Octree:
    """Boxes over n points in Morton order, level by level from the root.

    Attributes
    ----------
    order : (n,) int64
        Point k here is point `order[k]` of the caller.
    level : (boxes,) int64, place : (boxes, 3) int64
        Box b is the cube place/2^level … (place + 1)/2^level of the unit cube.
    first, last : (boxes,) int64
        Half-open range of points in each box.
    parent : (boxes,) int64
        −1 for the root.
    child : (boxes, 8) int64
        −1 where a child is empty; all −1 for leaves.
    level_first : (levels + 1,) int64
        First box of each level.
    leaves : (k,) int64
        Boxes without children, in the order of their points.
    """

    order: Ints
    level: Ints
    place: Ints
    first: Ints
    last: Ints
    parent: Ints
    child: Ints
    level_first: Ints
    leaves: Ints

    def __len__(self) -> int:
        return len(self.level)

    @property
    def centres(self) -> Floats:
        """Centres (boxes, 3) in the unit cube."""
        return (self.place + 0.5) / self.scale[:, None]

    @property
    def scale(self) -> Floats:
        """One over the side (boxes,)."""
        return np.ldexp(1.0, self.level.astype(np.int32))


def _codes(unit: Floats) -> Ints:
    cells = np.clip((unit * 2**_DEPTH).astype(np.int64), 0, 2**_DEPTH - 1)
    return morton_codes(cells).astype(np.int64)


def build_octree(unit: Floats, radii: Floats, cap: int) -> Octree:
    """Tree over points (n, 3) in the unit cube that stand for panels of radius (n,) in the same units."""
    codes = _codes(unit)
    order = np.argsort(codes, kind="stable")
    codes, radii = codes[order], radii[order]
    first, last = np.array([0]), np.array([len(codes)])
    place = np.zeros((1, 3), np.int64)
    boxes = [(place, first, last, np.array([-1]), np.array([0]))]
    done = 0
    for level in range(_DEPTH):
        small = radii * (_SIDES * 2.0 ** (level + 1)) <= 1.0
        counted = np.concatenate([[0], np.cumsum(small)])
        split = np.flatnonzero(counted[last] - counted[first] > cap)
        if not len(split):
            break
        # Points of the boxes to split, and where the next octal digit changes among them.
        sizes = last[split] - first[split]
        starts = np.cumsum(sizes) - sizes
        points = np.arange(sizes.sum()) + np.repeat(first[split] - starts, sizes)
        digit = (codes[points] >> (3 * (_DEPTH - level - 1))) & 7
        owner = np.repeat(np.arange(len(split)), sizes)
        edge = np.flatnonzero(np.diff(owner * 8 + digit, prepend=-1))
        octant, owner = digit[edge], owner[edge]
        ends = np.append(edge[1:], len(points))
        place = 2 * place[split][owner] + np.stack([octant & 1, (octant >> 1) & 1, octant >> 2], axis=1)
        first, last = points[edge], points[ends - 1] + 1
        boxes.append((place, first, last, done + split[owner], octant))
        done += len(boxes[-2][1])
    place, first, last, parent, octant = (np.concatenate(column) for column in zip(*boxes, strict=True))
    counts = [len(b[1]) for b in boxes]
    child = np.full((len(first), 8), -1)
    child[parent[1:], octant[1:]] = np.arange(1, len(first))
    leaves = np.flatnonzero((child < 0).all(axis=1))
    return Octree(
        order=order,
        level=np.repeat(np.arange(len(boxes)), counts),
        place=np.ascontiguousarray(place),
        first=first,
        last=last,
        parent=parent,
        child=child,
        level_first=np.concatenate([[0], np.cumsum(counts)]),
        leaves=leaves[np.argsort(first[leaves], kind="stable")],
    )


@dataclass(frozen=True)
class Lists:
    """Every pair of a target and a source, once, in compressed rows.

    Attributes
    ----------
    near_first : (leaves + 1,) int64, near_begin, near_end : (ranges,) int64
        Ranges of source points that each target leaf (in the order of `Octree.leaves`) sums directly.
    leaf_chunks : (chunks + 1,) int64
        Leaves in runs of about equal work.
    down_first : (leaves + 1,) int64, down : (k,) int64
        Source boxes whose expansions are evaluated in each target leaf.
    up_first : (boxes + 1,) int64, up : (k,) int64
        Source leaves whose panels enter the expansion of each target box.
    far_first : (chunks, offsets + 1) int64, far_target, far_source : (pairs,) int64
        Pairs of boxes, by chunk of target boxes and then by offset.
    """

    near_first: Ints
    near_begin: Ints
    near_end: Ints
    leaf_chunks: Ints
    down_first: Ints
    down: Ints
    up_first: Ints
    up: Ints
    far_first: Ints
    far_target: Ints
    far_source: Ints


@njit(cache=True)
def _touch(t, s, t_level, t_place, s_level, s_place):
    """Whether two boxes share at least a corner."""
    lift_t = max(s_level[s] - t_level[t], 0)
    lift_s = max(t_level[t] - s_level[s], 0)
    for k in range(3):
        low_t, high_t = t_place[t, k] << lift_t, (t_place[t, k] + 1) << lift_t
        low_s, high_s = s_place[s, k] << lift_s, (s_place[s, k] + 1) << lift_s
        if low_t > high_s or low_s > high_t:
            return False
    return True


@njit(cache=True)
def _grown(pairs):
    # Element by element, here and below: assignments of whole rows take seconds to compile.
    larger = np.empty((2 * len(pairs), 2), np.int64)
    for i in range(len(pairs)):
        larger[i, 0], larger[i, 1] = pairs[i, 0], pairs[i, 1]
    return larger


@njit(cache=True)
def _walk(
    t_level, t_place, t_first, t_last, t_child, t_leaf, s_level, s_place, s_first, s_last, s_child, s_leaf,
    few_sources, few_targets, few_pairs,
):  # fmt: skip
    """The four lists as arrays of (target box, source box)."""
    near, far = np.empty((1024, 2), np.int64), np.empty((1024, 2), np.int64)
    down, up = np.empty((64, 2), np.int64), np.empty((64, 2), np.int64)
    n_near = n_far = n_down = n_up = 0
    stack = np.empty((4096, 2), np.int64)
    stack[0, 0] = stack[0, 1] = 0
    top = 1
    while top > 0:
        top -= 1
        t, s = stack[top, 0], stack[top, 1]
        targets, sources = t_last[t] - t_first[t], s_last[s] - s_first[s]
        if not _touch(t, s, t_level, t_place, s_level, s_place):
            if t_level[t] == s_level[s] and sources * targets >= few_pairs:
                if n_far == len(far):
                    far = _grown(far)
                far[n_far, 0], far[n_far, 1] = t, s
                n_far += 1
                continue
            if t_level[t] < s_level[s] and sources >= few_sources:
                if n_down == len(down):
                    down = _grown(down)
                down[n_down, 0], down[n_down, 1] = t, s
                n_down += 1
                continue
            if t_level[t] > s_level[s] and targets >= few_targets:
                if n_up == len(up):
                    up = _grown(up)
                up[n_up, 0], up[n_up, 1] = t, s
                n_up += 1
                continue
        elif not (t_leaf[t] and s_leaf[s]):
            if top + 64 > len(stack):
                stack = _grown(stack)
            for a in range(8):
                below_t = t if t_leaf[t] else t_child[t, a]
                if below_t >= 0:
                    for b in range(8):
                        below_s = s if s_leaf[s] else s_child[s, b]
                        if below_s >= 0:
                            stack[top, 0], stack[top, 1] = below_t, below_s
                            top += 1
                        if s_leaf[s]:
                            break
                if t_leaf[t]:
                    break
            continue
        if n_near == len(near):
            near = _grown(near)
        near[n_near, 0], near[n_near, 1] = t, s
        n_near += 1
    return near[:n_near], far[:n_far], down[:n_down], up[:n_up]


def _rows(keys: Ints, count: int) -> tuple[Ints, Ints]:
    """Stable order that sorts `keys`, and where each of `count` rows begins."""
    order = np.argsort(keys, kind="stable")
    return order, np.searchsorted(keys[order], np.arange(count + 1))


def _near_ranges(targets: Octree, sources: Octree, near: Ints) -> tuple[Ints, Ints, Ints]:
    """Per target leaf the ranges of source points, those that join merged into one."""
    leaf_first = targets.first[targets.leaves]
    # A target box that is no leaf passes its sources to all its leaves.
    begin = np.searchsorted(leaf_first, targets.first[near[:, 0]])
    end = np.searchsorted(leaf_first, targets.last[near[:, 0]])
    repeat = end - begin
    leaf = np.arange(repeat.sum()) + np.repeat(begin - (np.cumsum(repeat) - repeat), repeat)
    source = np.repeat(near[:, 1], repeat)
    low, high = sources.first[source], sources.last[source]
    order = np.lexsort((low, leaf))
    leaf, low, high = leaf[order], low[order], high[order]
    new = np.ones(len(leaf), bool)
    new[1:] = (leaf[1:] != leaf[:-1]) | (low[1:] != high[:-1])
    starts = np.flatnonzero(new)
    ends = np.append(starts[1:], len(leaf)) - 1
    first = np.searchsorted(leaf[starts], np.arange(len(targets.leaves) + 1))
    return first, low[starts], high[ends] if len(leaf) else high[:0]


def build_lists(targets: Octree, sources: Octree) -> Lists:
    """Lists between two trees in the same root cube."""
    near, far, down, up = _walk(
        targets.level, targets.place, targets.first, targets.last, targets.child, (targets.child < 0).all(axis=1),
        sources.level, sources.place, sources.first, sources.last, sources.child, (sources.child < 0).all(axis=1),
        _FEW_SOURCES, _FEW_TARGETS, _FEW_PAIRS,
    )  # fmt: skip
    near_first, near_begin, near_end = _near_ranges(targets, sources, near)
    leaf_number = np.full(len(targets), -1)
    leaf_number[targets.leaves] = np.arange(len(targets.leaves))
    down_order, down_first = _rows(leaf_number[down[:, 0]], len(targets.leaves))
    up_order, up_first = _rows(up[:, 0], len(targets))

    total = np.concatenate([[0], np.cumsum(near_end - near_begin)])
    leaf_size = targets.last[targets.leaves] - targets.first[targets.leaves]
    work = leaf_size * (np.diff(total[near_first]) + 200)
    far_counts = np.bincount(far[:, 0], minlength=len(targets))
    chunks = even_chunks(far_counts, _CHUNKS)
    chunk = np.searchsorted(chunks, far[:, 0], side="right") - 1
    place = targets.place[far[:, 0]] - sources.place[far[:, 1]] + _REACH
    width = 2 * _REACH + 1
    number = np.full(width**3, -1)
    number[((_OFFSETS + _REACH) * (width**2, width, 1)).sum(axis=1)] = np.arange(len(_OFFSETS))
    offset = number[(place * (width**2, width, 1)).sum(axis=1)]
    key = chunk * len(_OFFSETS) + offset
    far_order = np.lexsort((far[:, 1], far[:, 0], key))
    edges = np.searchsorted(key[far_order], np.arange(_CHUNKS * len(_OFFSETS) + 1))
    rows = np.arange(_CHUNKS)[:, None] * len(_OFFSETS) + np.arange(len(_OFFSETS) + 1)
    return Lists(
        near_first, near_begin, near_end, even_chunks(work, 4 * _CHUNKS),
        down_first, np.ascontiguousarray(down[down_order, 1]), up_first, np.ascontiguousarray(up[up_order, 1]),
        np.ascontiguousarray(edges[rows]), far[far_order, 0], far[far_order, 1],
    )  # fmt: skip
