"""Bodies with exact answers, as surfaces in µm. Balls and cylinders are rescaled to the volume of the true body."""

import itertools

import numpy as np
import trimesh

from bemescape.surface.surface import Surface

BALL_VOLUME = 4.0 * np.pi / 3.0


def from_quads(quads, labels=None):
    """Quadrilaterals (k, 4, 3), outward, split into triangles that share vertices; `labels` (k,) go to both."""
    quads = np.asarray(quads, dtype=float)
    corners = quads[:, [[0, 1, 2], [0, 2, 3]]].reshape(-1, 3, 3)
    vertices, index = np.unique(np.round(corners.reshape(-1, 3), 10), axis=0, return_inverse=True)
    data = {} if labels is None else {"label": np.repeat(np.asarray(labels), 2)}
    return Surface(vertices, index.reshape(-1, 3), data)


def _patch(u, v, place, *, flip, skip=None):
    """Quads of a flat grid u × v; `place(u, v)` gives the point; cells with `skip(mid_u, mid_v)` are left out."""
    quads = []
    for a, b in itertools.pairwise(u):
        for c, d in itertools.pairwise(v):
            if skip is not None and skip(0.5 * (a + b), 0.5 * (c + d)):
                continue
            corners = [place(a, c), place(b, c), place(b, d), place(a, d)]
            quads.append(corners[::-1] if flip else corners)
    return quads


def box(size=(1.0, 1.0, 1.0), cells=8, *, label=None):
    """Box with one corner at the origin; `label(centre)` numbers each cell from its centre (3,)."""
    grids = [np.linspace(0.0, s, cells + 1) for s in size]
    quads = []
    for axis in range(3):
        first, second = (axis + 1) % 3, (axis + 2) % 3

        def place(a, b, axis=axis, first=first, second=second, height=0.0):
            point = np.zeros(3)
            point[first], point[second], point[axis] = a, b, height
            return point

        quads += _patch(grids[first], grids[second], place, flip=True)
        quads += _patch(grids[first], grids[second], lambda a, b, top=size[axis]: place(a, b, height=top), flip=False)
    quads = np.array(quads)
    labels = None if label is None else [label(quad.mean(axis=0)) for quad in quads]
    return from_quads(quads, labels)


def box_with_neck(side=0.4, length=0.5, cells=10):
    """Unit cube with a square neck of `side` and `length` in the middle of its face z = 1; label 1 is the far end."""
    grid = np.linspace(0.0, 1.0, cells + 1)
    low, high = 0.5 - side / 2, 0.5 + side / 2
    assert np.isclose(grid, low).any()
    neck = grid[(grid > low - 1e-9) & (grid < high + 1e-9)]
    along = np.linspace(1.0, 1.0 + length, max(2, round(length * cells)) + 1)

    def hole(a, b):
        return low < a < high and low < b < high

    quads = _patch(grid, grid, lambda a, b: (a, b, 0.0), flip=True)
    quads += _patch(grid, grid, lambda a, b: (a, b, 1.0), flip=False, skip=hole)
    for height, u, v in ((0.0, grid, grid), (1.0, grid, grid), (low, neck, along), (high, neck, along)):
        flip = height in (0.0, low)
        quads += _patch(u, v, lambda a, b, height=height: (height, a, b), flip=flip)
        quads += _patch(u, v, lambda a, b, height=height: (a, height, b), flip=not flip)
    count = len(quads)
    quads += _patch(neck, neck, lambda a, b: (a, b, 1.0 + length), flip=False)
    return from_quads(quads, [0] * count + [1] * (len(quads) - count))


def ball(subdivisions=4, *, radius=1.0):
    """Icosphere scaled to the exact volume of the ball: 20 · 4^subdivisions faces."""
    mesh = trimesh.creation.icosphere(subdivisions)
    scale = radius * (BALL_VOLUME / mesh.volume) ** (1.0 / 3.0)
    return Surface(mesh.vertices * scale, mesh.faces)


def on_ball(surface, direction):
    """The point of the wall in this direction from the origin, and no symmetric one."""
    direction = np.asarray(direction, dtype=float)
    mesh = trimesh.Trimesh(surface.vertices, surface.faces, process=False)
    return tuple(trimesh.proximity.closest_point(mesh, [direction / np.linalg.norm(direction)])[0][0])


def shell(inner=1.0, outer=2.0, subdivisions=4):
    """Two concentric icospheres, each scaled to its ball's volume; label 1 inside, 2 outside."""
    big, small = ball(subdivisions, radius=outer), ball(subdivisions - 1, radius=inner)
    vertices = np.concatenate([big.vertices, small.vertices])
    faces = np.concatenate([big.faces, small.faces[:, ::-1] + len(big.vertices)])
    labels = np.repeat([2, 1], [len(big.faces), len(small.faces)])
    return Surface(vertices, faces, {"label": labels})


def cylinder_with_strip(half_angle=0.5, height=1.0, *, around=96, cells=6, rings=8):
    """Cylinder with its axis along z, scaled to unit cross-section area π; label 1 is the strip |φ| < half_angle."""
    in_strip = max(4, round(around * half_angle / np.pi))
    strip = np.linspace(-half_angle, half_angle, in_strip + 1)
    rest = np.linspace(half_angle, 2.0 * np.pi - half_angle, around - in_strip + 1)
    phi = np.concatenate([strip, rest[1:-1]])
    following = np.roll(phi, -1)
    following[-1] += 2.0 * np.pi
    area = 0.5 * np.sin(following - phi).sum()
    scale = np.sqrt(np.pi / area)
    circle = scale * np.column_stack([np.cos(phi), np.sin(phi)])
    z = np.linspace(0.0, height, cells + 1)
    triangles, labels = [], []
    for k in range(len(phi)):
        a, b = circle[k], circle[(k + 1) % len(phi)]
        for low, high in itertools.pairwise(z):
            c00, c10, c11, c01 = (*a, low), (*b, low), (*b, high), (*a, high)
            triangles += [(c00, c10, c11), (c00, c11, c01)]
            labels += [int(k < in_strip)] * 2
        for end, up in ((0.0, False), (height, True)):
            radii = np.linspace(0.0, 1.0, rings + 1)
            for inner, outer in itertools.pairwise(radii):
                p, q = (*(inner * a), end), (*(inner * b), end)
                r, s = (*(outer * b), end), (*(outer * a), end)
                pieces = [(p, s, r)] if inner == 0.0 else [(p, s, r), (p, r, q)]
                triangles += pieces if up else [piece[::-1] for piece in pieces]
                labels += [0] * len(pieces)
    corners = np.array(triangles)
    vertices, index = np.unique(np.round(corners.reshape(-1, 3), 10), axis=0, return_inverse=True)
    return Surface(vertices, index.reshape(-1, 3), {"label": np.array(labels)})


def half_oblate_spheroid(around=64, disc_rings=8, ring_rings=4, dome_rings=12):
    """z > 0 half of the spheroid with semi-axes √2, √2, 1: label 1 the focal disc (radius 1), 2 the dome, 0 the rest.

    Circles are polygons of the circles' areas, and heights are scaled so that the volume is the true one, 4π/3.
    """
    phi = 2.0 * np.pi * np.arange(around) / around
    outwards = np.sqrt(2.0 * np.pi / around / np.sin(2.0 * np.pi / around))
    flat = [(radius, 0.0, 1) for radius in np.linspace(0.0, 1.0, disc_rings + 1)[1:]]
    flat += [(radius, 0.0, 0) for radius in np.linspace(1.0, np.sqrt(2.0), ring_rings + 1)[1:]]
    dome = [(np.sqrt(2.0) * np.cos(t), np.sin(t), 2) for t in np.linspace(0.0, np.pi / 2.0, dome_rings + 1)[1:-1]]
    rings = [*flat, *dome]
    vertices = [(0.0, 0.0, 0.0)]
    for radius, height, _ in rings:
        vertices += [(outwards * radius * np.cos(p), outwards * radius * np.sin(p), height) for p in phi]
    vertices.append((0.0, 0.0, 1.0))
    faces, labels = [], []
    for k in range(around):
        after = (k + 1) % around
        faces.append((0, 1 + after, 1 + k))
        labels.append(rings[0][2])
        for number, (_, _, label) in enumerate(rings[1:], start=1):
            low, high = 1 + (number - 1) * around, 1 + number * around
            faces += [(low + k, low + after, high + after), (low + k, high + after, high + k)]
            labels += [label] * 2
        last = 1 + (len(rings) - 1) * around
        faces.append((last + k, last + after, len(vertices) - 1))
        labels.append(2)
    mesh = Surface(np.array(vertices), np.array(faces), {"label": np.array(labels)})
    scale = BALL_VOLUME / mesh.volume
    return Surface(mesh.vertices * [1.0, 1.0, scale], mesh.faces, mesh.face_data)
