"""Telling sheets apart where more than two faces share an edge, or pieces share only a vertex."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bemescape.surface.measure import face_volumes, sums
from bemescape.surface.repairs import Repair
from bemescape.surface.topology import Edges, corner_fans, oriented_signs
from bemescape.surface.working import Working

__all__ = ["agree_orientation", "separate_sheets"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def agree_orientation(mesh: Working) -> Repair | None:
    """Turn faces around so that neighbours look to the same side; the majority of each piece stays."""
    edges = mesh.edges
    links, opposed = edges.pairs, edges.same_way
    turns = _turns_around_crowded_edges(mesh, edges)
    alternate = [np.stack([turn, np.roll(turn, -1)], axis=1) for turn in turns if len(turn) % 2 == 0]
    signs = np.ones(len(mesh.faces), dtype=np.int8)
    if alternate:
        # Around an edge that a solid touches several times, inside and outside take turns.
        extra = np.concatenate(alternate)
        all_links = np.concatenate([links, extra])
        all_opposed = np.r_[opposed, edges.tail[extra[:, 0]] == edges.tail[extra[:, 1]]]
        signs, _, one_sided = oriented_signs(len(mesh.faces), all_links[:, 0] // 3, all_links[:, 1] // 3, all_opposed)
    if not alternate or len(one_sided):
        signs, _, _ = oriented_signs(len(mesh.faces), links[:, 0] // 3, links[:, 1] // 3, opposed)
    turn = signs < 0
    count = int(turn.sum())
    if not count:
        return None
    detail = f"{count} faces looked to the other side than their neighbours"
    return Repair(mesh.turned(turn), count, detail, mesh.face_source[turn])


def separate_sheets(mesh: Working, *, borders: bool) -> Repair | None:
    """Give each sheet its own vertices along shared edges and at shared vertices.

    No point of the surface moves. Faces around a crowded edge are sorted by angle and joined in pairs across
    the wedges that the solid fills, so that bodies which merely touch come apart. A face that finds no
    partner is left with an open edge. With `borders` False, vertices where the rims of holes touch stay
    whole, so that each hole can be closed by itself.
    """
    edges = mesh.edges
    matched, crowded = _matched_pairs(mesh, edges)
    pairs = np.concatenate([edges.pairs, matched])
    count, fan = corner_fans(edges, pairs)
    corner_vertex = mesh.faces.reshape(-1)
    vertex_of_fan = np.zeros(count, dtype=np.int64)
    vertex_of_fan[fan] = corner_vertex
    _, first_fan = np.unique(vertex_of_fan, return_index=True)
    extra = np.ones(count, dtype=bool)
    extra[first_fan] = False
    if not borders:
        whole = np.zeros(len(mesh.vertices), dtype=bool)
        whole[edges.ends[edges.counts == 1]] = True
        whole[edges.ends[edges.crowded]] = False
        extra[whole[vertex_of_fan]] = False
    if not extra.any() and not crowded:
        return None
    number = np.where(extra, len(mesh.vertices) + np.cumsum(extra) - 1, vertex_of_fan)
    grown = mesh.adding(mesh.vertices[vertex_of_fan[extra]], mesh.vertex_source[vertex_of_fan[extra]])
    split = grown.with_faces(number[fan].reshape(-1, 3), mesh.face_source)
    split, halved = _halve_still_shared(split, matched)
    added = len(split.vertices) - len(mesh.vertices)
    touched = np.unique(np.concatenate([matched.reshape(-1) // 3, np.flatnonzero(extra[fan]) // 3]))
    detail = (
        f"{crowded} edges of more than two faces and {int(extra.sum())} vertices were split, {added} vertices added"
    )
    if halved:
        detail += f" ({halved} of them half-way along an edge)"
    return Repair(split, max(crowded, int(extra.sum())), detail, mesh.face_source[touched])


def _turns_around_crowded_edges(mesh: Working, edges: Edges) -> list[Ints]:
    """Half-edges of each crowded edge, counter-clockwise about its direction (lower to higher)."""
    turns = []
    for edge in edges.crowded:
        half = edges.half_edges(int(edge))
        low, high = edges.ends[edge]
        start = mesh.vertices[low]
        axis = mesh.vertices[high] - start
        apex = mesh.vertices[mesh.faces[half // 3, (half % 3 + 2) % 3]] - start
        length = float(axis @ axis)
        radial = apex - np.outer(apex @ axis / length, axis) if length > 0.0 else apex
        ahead = radial[0]
        aside = np.cross(axis, ahead)
        angle = np.arctan2(radial @ aside * np.sqrt(ahead @ ahead), radial @ ahead * np.sqrt(aside @ aside))
        turns.append(half[np.argsort(angle, kind="stable")])
    return turns


def _matched_pairs(mesh: Working, edges: Edges) -> tuple[Ints, int]:
    """Pairs of half-edges (p, 2) across solid wedges, and the number of crowded edges."""
    turns = _turns_around_crowded_edges(mesh, edges)
    if not turns:
        return np.zeros((0, 2), dtype=np.int64), 0
    # Whether a part looks outwards is told by the sign of its volume; for pairing only, nothing is turned.
    # Pieces between crowded edges are not closed and have no volume of their own, so parts are joined by
    # any shared edge.
    _, joined = edges.parts()
    volume = sums(joined, face_volumes(mesh.vertices, mesh.faces, mesh.origin), int(joined.max()) + 1)
    outward = volume[joined] >= 0.0
    pairs = []
    for turn in turns:
        low = np.minimum(edges.tail[turn[0]], edges.head[turn[0]])
        # A face that runs up the edge and looks outwards has the solid on its clockwise side, one that
        # runs down on the other.
        closing = (edges.tail[turn] == low) == outward[turn // 3]
        waiting: list[int] = []
        late: list[int] = []
        for half, closes in zip(turn.tolist(), closing.tolist(), strict=True):
            if not closes:
                waiting.append(half)
            elif waiting:
                pairs.append((waiting.pop(), half))
            else:
                late.append(half)
        # Wedges across the angle where sorting began.
        while waiting and late:
            pairs.append((waiting.pop(), late.pop(0)))
    return np.array(pairs, dtype=np.int64).reshape(-1, 2), len(turns)


def _halve_still_shared(mesh: Working, pairs: Ints) -> tuple[Working, int]:
    """Cut pairs of faces at the middle of an edge that still has more than two faces.

    That happens where the sheets hang together around both ends of the edge, so that no vertex could be
    split.
    """
    halved = 0
    partner = dict(pairs.tolist()) | {b: a for a, b in pairs.tolist()}
    while True:
        edges = mesh.edges
        todo = [int(h) for edge in edges.crowded for h in edges.half_edges(int(edge)) if int(h) in partner]
        used: set[int] = set()
        faces, source = mesh.faces.copy(), mesh.face_source.copy()
        more_faces: list[list[int]] = []
        more_source: list[int] = []
        middles: list[Floats] = []
        middle_source: list[int] = []
        for half in todo:
            other = partner.get(half, -1)
            if other < 0 or half // 3 in used or other // 3 in used or half // 3 == other // 3:
                continue
            used |= {half // 3, other // 3}
            middle = len(mesh.vertices) + len(middles)
            ends = edges.tail[half], edges.head[half]
            middles.append(0.5 * (mesh.vertices[ends[0]] + mesh.vertices[ends[1]]))
            middle_source.append(int(mesh.vertex_source[ends[0]]))
            for h in (half, other):
                face, k = divmod(h, 3)
                b, c = (int(mesh.faces[face, (k + step) % 3]) for step in (1, 2))
                # The face keeps its other two edges in place, so that waiting pairs on them stay valid.
                faces[face, (k + 1) % 3] = middle
                more_faces.append([middle, b, c])
                more_source.append(int(source[face]))
                new_face = len(faces) + len(more_faces) - 1
                moved = 3 * face + (k + 1) % 3
                if moved in partner:
                    mate = partner.pop(moved)
                    partner[3 * new_face + 1] = mate
                    partner[mate] = 3 * new_face + 1
                del partner[h]
        if not middles:
            return mesh, halved
        halved += len(middles)
        mesh = mesh.adding(np.array(middles), np.array(middle_source)).with_faces(
            np.concatenate([faces, np.array(more_faces, dtype=np.int64)]),
            np.concatenate([source, np.array(more_source, dtype=np.int64)]),
        )
