"""A coarser mesh of the same body, for methods that cannot afford fine panels.

Strategy: edges are collapsed onto one of their own ends, in rounds of collapses that do not touch one another. The
cheapest edge is the one that is shortest against its distance to the nearest rim, so that panels still thin out
towards rims, and whose collapse moves the surface least against the edge's length (quadrics: Garland & Heckbert 1997,
doi:10.1145/258734.258849): a thin neck keeps its shape as well as a large body does. The end that stays is moved along
its normal until the volume is what it was (Lindstrom & Turk 1998, doi:10.1109/VISUAL.1998.745314). Rims stay as they
are for as long as the count can be reached without touching them; windows that lose area then are scaled about their
middle. What is left of the change of volume is given back at the end by one common length. The link condition (Dey et
al. 1999) keeps the mesh closed and manifold; no panel turns over.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_matrix

from bemescape.compiled import njit
from bemescape.windows.mesh_edits import mesh_edges
from bemescape.windows.rims import rim_edges, segment_distance

__all__ = ["CoarseMesh", "coarsened"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Panel size at the rim against the window's radius, and gained per distance from it; only their ratio matters.
_SIZE_AT_RIM, _GROWTH = 0.15, 0.4
#: A surface moved by 0.07 of an edge (the sagitta of eleven panels around a neck) costs as much as a full-sized edge.
_SHAPE_COST = 200.0
#: New panels may turn by 60° at most, and have this height against their longest edge unless the old were worse.
_LEAST_COSINE, _LEAST_HEIGHT = 0.5, 0.15
#: Part of the edges that one round may collapse, cheapest first.
_ROUND = 0.15
#: A round that collapses less than this part of them is followed by one that tries all.
_FEW = 0.01
_VOLUME_STEPS = 3
#: Longest edge of a rim that may still be collapsed, in radii of its window: some nine panels stay around a disc.
_LONGEST_RIM = 0.5
_KEPT_AREA = 0.01


@dataclass(frozen=True, eq=False)
class CoarseMesh:
    """Coarser panels.

    Attributes
    ----------
    vertices : (n, 3) float64, faces : (m, 3) int64
        Rim vertices are some of those of the fine mesh.
    window_of : (m,) int64
        Window of each face, −1 on the wall.
    volume_change, window_change : float
        Relative change of the volume, and the largest relative change of a window's area.
    """

    vertices: Floats
    faces: Ints
    window_of: Ints
    volume_change: float
    window_change: float

    @property
    def is_closed(self) -> bool:
        """Whether every edge joins exactly two faces, which run along it in opposite directions."""
        start, end = self.faces.ravel(), np.roll(self.faces, -1, axis=1).ravel()
        one_way = np.sort(start * len(self.vertices) + end)
        other_way = np.sort(end * len(self.vertices) + start)
        return bool((one_way == other_way).all() and (np.diff(one_way) > 0).all())


def coarsened(vertices: Floats, faces: Ints, window_of: Ints, most_faces: int) -> CoarseMesh:
    """Collapse edges until at most `most_faces` panels are left, or none can be collapsed any more.

    Parameters
    ----------
    vertices, faces : (n, 3) µm, (m, 3)
        Closed and manifold; rims are edges.
    window_of : (m,) int
        Window of each face, −1 on the wall.
    most_faces : int
    """
    start_volume, start_areas = _volume(vertices, faces), _window_areas(vertices, faces, window_of)
    # One window of a few hundred panels needs its rim as it is; forty windows cannot all have that.
    for touch_rims in (False, True):
        vertices, faces, window_of = _collapsed(vertices, faces, window_of, most_faces, touch_rims=touch_rims)
        if len(faces) <= most_faces:
            break
    vertices = _with_areas(vertices, faces, window_of, start_areas)
    vertices = _with_volume(vertices, faces, window_of, start_volume)
    areas = _window_areas(vertices, faces, window_of)
    return CoarseMesh(
        vertices,
        faces,
        window_of,
        volume_change=_volume(vertices, faces) / start_volume - 1.0,
        window_change=float(np.abs(areas / start_areas - 1.0).max(initial=0.0)),
    )


def _with_areas(vertices: Floats, faces: Ints, window_of: Ints, areas: Floats) -> Floats:
    """Windows scaled about their middles to the areas that they had, where they lost more than a little."""
    now = _window_areas(vertices, faces, window_of)
    for number in np.flatnonzero(np.abs(now / areas - 1.0) > _KEPT_AREA):
        own = np.unique(faces[window_of == number])
        middle = vertices[own].mean(axis=0)
        vertices[own] = middle + (vertices[own] - middle) * np.sqrt(areas[number] / now[number])
    return vertices


def _with_volume(vertices: Floats, faces: Ints, window_of: Ints, volume: float) -> Floats:
    """Vertices moved along their normals until the body has the volume again."""
    rim, _ = rim_edges(faces, window_of)
    free = np.ones(len(vertices), bool)
    free[rim.ravel()] = False
    for _ in range(_VOLUME_STEPS):
        a, b, c = (vertices[faces[:, k]] for k in range(3))
        area_vector = np.zeros_like(vertices)
        for k in range(3):
            np.add.at(area_vector, faces[:, k], np.cross(b - a, c - a) / 6.0)
        size = np.linalg.norm(area_vector, axis=1)
        normal = np.where(free[:, None], area_vector / np.maximum(size, 1e-300)[:, None], 0.0)
        # d(volume)/d(vertex) is the area vector of a third of the faces around it.
        gain = float(np.einsum("ij,ij->", normal, area_vector))
        if gain <= 0.0:
            break
        vertices = vertices + (volume - _volume(vertices, faces)) / gain * normal
    return vertices


def _collapsed(
    vertices: Floats, faces: Ints, window_of: Ints, most_faces: int, *, touch_rims: bool
) -> tuple[Floats, Ints, Ints]:
    error = _quadrics(vertices, faces)
    size = _wanted_size(vertices, faces, window_of, most_faces)
    radius = np.zeros(len(vertices))
    of_window = np.sqrt(_window_areas(vertices, faces, window_of) / np.pi)
    for corner in faces[window_of >= 0].T:
        radius[corner] = of_window[window_of[window_of >= 0]]
    part = _ROUND
    while len(faces) > most_faces:
        edges, _ = mesh_edges(faces)
        rim, _ = rim_edges(faces, window_of)
        on_rim = np.zeros(len(vertices), bool)
        on_rim[rim.ravel()] = True
        is_rim = np.isin(_edge_key(edges, len(vertices)), _edge_key(rim, len(vertices)))
        # Where one vertex belongs to two rims, or a rim bends sharply, it stays.
        corner = np.bincount(rim.ravel(), minlength=len(vertices)) > 2
        begin = np.concatenate([edges[:, 0], edges[:, 1]])
        end = np.concatenate([edges[:, 1], edges[:, 0]])
        along_rim = np.concatenate([is_rim, is_rim])
        allowed = ~on_rim[begin] | (along_rim & ~corner[begin] if touch_rims else False)
        longest = np.where(along_rim, _LONGEST_RIM * radius[begin], np.inf)
        allowed &= np.linalg.norm(vertices[begin] - vertices[end], axis=1) < longest
        allowed &= np.tile(_shared_neighbours(edges, len(vertices)) == 2, 2)
        begin, end = begin[allowed], end[allowed]
        scale = 0.5 * (size[begin] + size[end])
        length2 = ((vertices[begin] - vertices[end]) ** 2).sum(axis=1)
        moved2 = _quadric_error(error[begin], vertices[end])
        cost = length2 / scale**2 + _SHAPE_COST * moved2 / length2
        order = np.argsort(cost, kind="stable")[: max(200, int(part * len(edges)))]
        target = np.arange(len(vertices))
        room = (len(faces) - most_faces + 1) // 2
        first, around = _faces_around(faces, len(vertices))
        vertices = vertices.copy()
        done = _collapse_round(vertices, faces, first, around, begin[order], end[order], on_rim, target, room)
        if done == 0 and part == 1.0:
            break
        # Where the cheapest are all forbidden, the others get their turn.
        part = 1.0 if done < _FEW * len(order) else _ROUND
        gone = np.flatnonzero(target != np.arange(len(vertices)))
        np.add.at(error, target[gone], error[gone])
        faces = target[faces]
        kept = (faces != np.roll(faces, 1, axis=1)).all(axis=1)
        faces, window_of = faces[kept], window_of[kept]
        used, faces = np.unique(faces, return_inverse=True)
        faces = faces.reshape(-1, 3).astype(np.int64)
        vertices, error, size, radius = vertices[used], error[used], size[used], radius[used]
    return vertices, faces, window_of


def _wanted_size(vertices: Floats, faces: Ints, window_of: Ints, most_faces: int) -> Floats:
    """Edge length (n,) at the vertices at which `most_faces` equilateral panels would cover the surface."""
    size = _graded_size(vertices, faces, window_of)
    a, b, c = (vertices[faces[:, k]] for k in range(3))
    areas = 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1)
    panels = float((areas / size[faces].mean(axis=1) ** 2).sum() / (0.25 * np.sqrt(3.0)))
    return np.asarray(size * np.sqrt(panels / most_faces))


def _graded_size(vertices: Floats, faces: Ints, window_of: Ints) -> Floats:
    """Panel size (n,) at the vertices, up to a common factor."""
    rim, rim_window = rim_edges(faces, window_of)
    if len(rim) == 0:
        return np.ones(len(vertices))
    radius = np.sqrt(_window_areas(vertices, faces, window_of) / np.pi)
    distance, segment = segment_distance(vertices, vertices[rim[:, 0]], vertices[rim[:, 1]])
    return np.asarray(_SIZE_AT_RIM * radius[rim_window[segment]] + _GROWTH * distance)


def _edge_key(edges: Ints, count: int) -> Ints:
    return np.asarray(edges.min(axis=1) * count + edges.max(axis=1))


def _shared_neighbours(edges: Ints, count: int) -> Ints:
    """How many vertices are joined to both ends of each edge: two, unless its collapse would pinch the surface."""
    ends = np.concatenate([edges, edges[:, ::-1]])
    joined = csr_matrix((np.ones(len(ends), np.int64), (ends[:, 0], ends[:, 1])), shape=(count, count))
    both = (joined @ joined).multiply(joined).tocsr()
    return np.asarray(both[edges[:, 0], edges[:, 1]]).ravel()


def _quadrics(vertices: Floats, faces: Ints) -> Floats:
    """Area-weighted squared distance to the planes around each vertex, as (n, 4, 4) forms with the total area."""
    a, b, c = (vertices[faces[:, k]] for k in range(3))
    cross = np.cross(b - a, c - a)
    double = np.linalg.norm(cross, axis=1)
    normal = cross / double[:, None]
    plane = np.concatenate([normal, -np.einsum("ij,ij->i", normal, a)[:, None]], axis=1)
    form = (plane[:, :, None] * plane[:, None]) * (0.5 * double)[:, None, None]
    out = np.zeros((len(vertices), 4, 4))
    for k in range(3):
        np.add.at(out, faces[:, k], form)
    return out


def _quadric_error(form: Floats, points: Floats) -> Floats:
    """Mean squared distance (k,) of points to the planes of their forms: the trace holds the weight."""
    lifted = np.concatenate([points, np.ones((len(points), 1))], axis=1)
    weight = np.einsum("kii->k", form[:, :3, :3])
    return np.asarray(np.maximum(np.einsum("ki,kij,kj->k", lifted, form, lifted), 0.0) / weight)


def _faces_around(faces: Ints, count: int) -> tuple[Ints, Ints]:
    """Faces at each vertex, as a compressed list."""
    corner = faces.ravel()
    first = np.concatenate([[0], np.cumsum(np.bincount(corner, minlength=count))])
    return first, np.argsort(corner, kind="stable") // 3


def _volume(vertices: Floats, faces: Ints) -> float:
    corners = vertices[faces] - vertices.mean(axis=0)
    return float(np.einsum("ij,ij->", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])) / 6.0)


def _window_areas(vertices: Floats, faces: Ints, window_of: Ints) -> Floats:
    chosen = window_of >= 0
    a, b, c = (vertices[faces[chosen, k]] for k in range(3))
    return np.bincount(window_of[chosen], 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1)).astype(np.float64)


@njit(cache=True)
def _shape(a, b, c):
    """Twice the area vector and the longest edge squared of a triangle."""
    e, f, g = b - a, c - a, c - b
    cross = np.array([e[1] * f[2] - e[2] * f[1], e[2] * f[0] - e[0] * f[2], e[0] * f[1] - e[1] * f[0]])
    return cross, max((e * e).sum(), (f * f).sum(), (g * g).sum())


@njit(cache=True)
def _collapse_round(vertices, faces, first, around, begin, end, fixed, target, room):
    """Collapse begin[i] onto end[i] in this order where nothing near has moved yet; number of collapses."""
    touched = np.zeros(len(vertices), np.bool_)
    done = 0
    for i in range(len(begin)):
        if done == room:
            break
        v, w = begin[i], end[i]
        fine = True
        for place in range(first[v], first[v + 1]):
            for k in range(3):
                fine = fine and not touched[faces[around[place], k]]
        for place in range(first[w], first[w + 1]):
            for k in range(3):
                fine = fine and not touched[faces[around[place], k]]
        worst_old, worst_new, lost = 1.0, 1.0, 0.0
        gain = np.zeros(3)  # d(volume)/d(position of the end that stays), times 6
        for place in range(first[v], first[v + 1]):
            if not fine:
                break
            face = faces[around[place]]
            old, longest = _shape(vertices[face[0]], vertices[face[1]], vertices[face[2]])
            old_size = np.sqrt((old * old).sum())
            worst_old = min(worst_old, old_size / longest)
            if face[0] == w or face[1] == w or face[2] == w:
                continue
            new, longest = _shape(
                vertices[w if face[0] == v else face[0]],
                vertices[w if face[1] == v else face[1]],
                vertices[w if face[2] == v else face[2]],
            )
            new_size = np.sqrt((new * new).sum())
            if (old * new).sum() < _LEAST_COSINE * old_size * new_size or new_size == 0.0:
                fine = False
            else:
                worst_new = min(worst_new, new_size / longest)
                # The volume between the old face and the end that stays, times 6.
                lost += ((vertices[v] - vertices[w]) * old).sum()
                gain += new
        if not fine or (worst_new < _LEAST_HEIGHT and worst_new < worst_old):
            continue
        for place in range(first[v], first[v + 1]):
            for k in range(3):
                touched[faces[around[place], k]] = True
        for place in range(first[w], first[w + 1]):
            for k in range(3):
                touched[faces[around[place], k]] = True
        for place in range(first[w], first[w + 1]):
            face = faces[around[place]]
            if face[0] != v and face[1] != v and face[2] != v:
                kept, _ = _shape(vertices[face[0]], vertices[face[1]], vertices[face[2]])
                gain += kept
        square = (gain * gain).sum()
        if not fixed[w] and square > 0.0:
            vertices[w] += lost / square * gain
        target[v] = w
        done += 1
    return done
