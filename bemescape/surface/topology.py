"""How triangles hang together: edges, parts, fans of faces around a vertex, border loops, orientation.

Everything here is array work on faces (m, 3); positions play no part. Half-edge k of face f is number 3 f
+ k and runs from corner k to corner k+1.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

__all__ = ["Edges", "border_loops", "corner_fans", "linked_groups", "oriented_signs"]

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


def linked_groups(count: int, a: Ints, b: Ints) -> tuple[int, Ints]:
    """Number of groups, and the group of each of `count` things, where a[i] and b[i] belong together."""
    links = coo_array((np.ones(len(a), dtype=np.int8), (a, b)), shape=(count, count))
    groups, group = connected_components(links, directed=False)
    return int(groups), group.astype(np.int64)


@dataclass(frozen=True)
class Edges:
    """The edges of triangles.

    Attributes
    ----------
    faces : (m, 3) int
        The triangles.
    order : (3m,) int
        Half-edges sorted so that those of one edge are neighbours.
    starts : (e,) int
        Where each edge begins in `order`.
    counts : (e,) int
        Half-edges of each edge.
    """

    faces: Ints
    order: Ints
    starts: Ints
    counts: Ints

    @classmethod
    def of(cls, faces: Ints) -> Edges:
        """The edges of faces (m, 3)."""
        tail, head = faces.reshape(-1), np.roll(faces, -1, axis=1).reshape(-1)
        base = int(faces.max(initial=0)) + 1
        key = np.minimum(tail, head) * base + np.maximum(tail, head)
        order = np.argsort(key, kind="stable")
        new = np.r_[True, np.diff(key[order]) > 0] if len(key) else np.zeros(0, dtype=bool)
        starts = np.flatnonzero(new)
        return cls(faces, order, starts, np.diff(np.r_[starts, len(key)]))

    @cached_property
    def tail(self) -> Ints:
        """Vertex where each half-edge begins (3m,)."""
        return self.faces.reshape(-1)

    @cached_property
    def head(self) -> Ints:
        """Vertex where each half-edge ends (3m,)."""
        return np.roll(self.faces, -1, axis=1).reshape(-1)

    @cached_property
    def ends(self) -> Ints:
        """Lower and higher vertex of each edge (e, 2)."""
        first = self.order[self.starts]
        return np.sort(np.stack([self.tail[first], self.head[first]], axis=1), axis=1)

    @cached_property
    def of_half_edge(self) -> Ints:
        """Edge of each half-edge (3m,)."""
        edge = np.empty(len(self.order), dtype=np.int64)
        edge[self.order] = np.repeat(np.arange(len(self.starts)), self.counts)
        return edge

    @cached_property
    def pairs(self) -> Ints:
        """The two half-edges of each edge that has exactly two (p, 2)."""
        first = self.starts[self.counts == 2]
        pairs: Ints = np.stack([self.order[first], self.order[first + 1]], axis=1)
        return pairs

    @cached_property
    def open_half_edges(self) -> Ints:
        """Half-edges that are alone on their edge."""
        alone: Ints = self.order[self.starts[self.counts == 1]]
        return alone

    @cached_property
    def crowded(self) -> Ints:
        """Numbers of the edges with three half-edges or more."""
        return np.flatnonzero(self.counts > 2)

    @cached_property
    def same_way(self) -> Bools:
        """Whether both half-edges of each pair run the same way (p,), so that the two faces disagree."""
        same: Bools = self.tail[self.pairs[:, 0]] == self.tail[self.pairs[:, 1]]
        return same

    def half_edges(self, edge: int) -> Ints:
        """Half-edges of one edge."""
        return self.order[self.starts[edge] : self.starts[edge] + self.counts[edge]]

    def parts(self) -> tuple[int, Ints]:
        """Number of parts and part of each face; faces that share an edge, of any count, are of one part."""
        inner = np.ones(len(self.order), dtype=bool)
        inner[self.starts] = False
        following = np.flatnonzero(inner)
        return linked_groups(len(self.faces), self.order[following - 1] // 3, self.order[following] // 3)


def corner_fans(edges: Edges, pairs: Ints) -> tuple[int, Ints]:
    """Fans of faces around each vertex, joined only through the half-edge `pairs` (p, 2).

    Returns the number of fans and the fan of each face corner (3m,). A vertex with more than one fan is
    not manifold.
    """
    one, two = pairs[:, 0], pairs[:, 1]
    after_one, after_two = _next(one), _next(two)
    opposed = edges.tail[one] != edges.tail[two]
    # Corner k of a face is numbered as the half-edge that leaves it.
    first = np.where(opposed, after_two, two)
    second = np.where(opposed, two, after_two)
    return linked_groups(3 * len(edges.faces), np.r_[one, after_one], np.r_[first, second])


def _next(half_edge: Ints) -> Ints:
    return half_edge - half_edge % 3 + (half_edge + 1) % 3


def oriented_signs(count: int, a: Ints, b: Ints, opposed: Bools) -> tuple[NDArray[np.int8], Ints, Ints]:
    """Signs +1 or -1 of `count` faces so that linked faces agree, most of each group staying +1.

    `opposed` tells which links (a, b) join faces that now disagree.

    Returns
    -------
    signs : (count,) int8
        -1: turn the face around. A group that cannot agree (one-sided, as a Möbius strip) keeps +1.
    group : (count,) int64
        Groups of linked faces.
    one_sided : int array
        Groups that cannot agree.

    Notes
    -----
    Each face is doubled into a kept and a turned copy; links join copies that agree. The two copies of a
    face end up in one component exactly where the surface is one-sided.
    """
    if not opposed.any():
        _, group = linked_groups(count, a, b)
        return np.ones(count, dtype=np.int8), group, np.zeros(0, dtype=np.int64)
    shift = np.where(opposed, count, 0)
    _, sheet = linked_groups(2 * count, np.r_[a, a + count], np.r_[b + shift, b + count - shift])
    kept, turned = sheet[:count], sheet[count:]
    low = np.minimum(kept, turned)
    _, group = np.unique(low, return_inverse=True)
    group = group.astype(np.int64)
    # The copy `low` is chosen where it holds at least half of the faces unturned.
    agreeing = np.bincount(group, weights=kept == low)
    size = np.bincount(group)
    wanted_low = 2 * agreeing >= size
    signs = np.where((kept == low) == wanted_low[group], 1, -1).astype(np.int8)
    one_sided = np.unique(group[kept == turned])
    signs[np.isin(group, one_sided)] = 1
    return signs, group, one_sided


def border_loops(tails: Ints, heads: Ints) -> list[Ints]:
    """Closed loops of directed border edges, as vertex numbers in order, none of them touching itself.

    A walk that comes back to a vertex it has passed cuts off the loop between, so that holes which share a
    vertex are told apart. Edges that lead nowhere are left out.
    """
    leaving: dict[int, list[int]] = {}
    for tail, head in zip(tails.tolist(), heads.tolist(), strict=True):
        leaving.setdefault(tail, []).append(head)
    loops: list[Ints] = []
    for start in list(leaving):
        while leaving[start]:
            path: list[int] = [start]
            place = {start: 0}
            while leaving.get(path[-1]):
                following = leaving[path[-1]].pop()
                if following in place:
                    cut = place[following]
                    loops.append(np.array(path[cut:], dtype=np.int64))
                    for vertex in path[cut + 1 :]:
                        del place[vertex]
                    del path[cut + 1 :]
                else:
                    place[following] = len(path)
                    path.append(following)
    return loops
