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


def revolved(profile, step=np.inf, around=48):
    """Body of revolution about z, scaled to the cross-sections of the round one.

    `profile` is a line of (radius, z) from pole to pole, its pieces divided to be no longer than `step`.
    """
    line = [profile[0]]
    for start, end in itertools.pairwise(np.array(profile, float)):
        count = max(1, int(np.ceil(np.linalg.norm(end - start) / step)))
        line += [start + (end - start) * k / count for k in range(1, count + 1)]
    mesh = trimesh.creation.revolve(np.array(line), sections=around)
    vertices = mesh.vertices * (np.sqrt(2 * np.pi / (around * np.sin(2 * np.pi / around))) * np.array([1, 1, 0]))
    vertices[:, 2] = mesh.vertices[:, 2]
    return Surface(vertices, mesh.faces if mesh.volume > 0 else mesh.faces[:, ::-1])


def cylinder_with_neck(neck_radius, neck_length, step=0.12, around=48):
    """Cylinder R = H = 1 with a coaxial neck on its upper end."""
    a, top = neck_radius, 1.0 + neck_length
    return revolved([(0, 0), (1, 0), (1, 1), (a, 1), (a, top), (0, top)], step, around)


def funnel(neck_radius, around=32):
    """Neck of revolution r(z) = a + z²/2, narrowest at z = 0, widening over 0 < z < 1 into a ball that it touches.

    Below z = 0 the neck goes on for the length of its radius, so that a lid can cut it at its narrowest.
    """
    a = neck_radius
    heights = [0.0]
    while heights[-1] < 1.0:
        heights.append(heights[-1] + 0.35 * (a + 0.5 * heights[-1] ** 2))
    heights = np.array(heights) / heights[-1]
    heights = np.concatenate([[-a, -0.5 * a], heights])
    neck = np.column_stack([a + 0.5 * heights**2, heights])
    # The neck ends at 45°: the ball's centre lies on its normal there.
    width = a + 0.5
    angles = np.radians(np.linspace(-45.0, 90.0, 14)[1:])
    ball_part = np.column_stack([np.cos(angles), np.sin(angles)]) * np.sqrt(2.0) * width + [0.0, 1.0 + width]
    ball_part[-1, 0] = 0.0
    return revolved([(0.0, -a), *neck, *ball_part], around=around)


def corner_face(window_radius, outline, rays=16, inner=5, outer=8):
    """Flat triangulation of a quarter plane around the origin: points (n, 2), triangles (m, 3), inside (m,) bool.

    Rays at even angles, rings up to `window_radius`, whose triangles are inside, and on to `outline(angle)`, (2,).
    The quarter circle is a polygon of the circle's area.
    """
    angles = np.linspace(0.0, np.pi / 2.0, rays + 1)
    directions = np.column_stack([np.cos(angles), np.sin(angles)])
    directions[0, 1] = directions[-1, 0] = 0.0
    rim = window_radius * polygon_of_equal_area(4 * rays) * directions
    end = np.array([outline(angle) for angle in angles])
    rings = [rim * k / inner for k in range(1, inner + 1)]
    rings += [rim + (end - rim) * (k / outer) ** 1.5 for k in range(1, outer + 1)]
    points, triangles, inside = [np.zeros((1, 2)), *rings], [], []
    for number in range(len(rings)):
        low, high = 1 + (number - 1) * (rays + 1), 1 + number * (rays + 1)
        for k in range(rays):
            pieces = [(high + k, high + k + 1, 0 if number == 0 else low + k + 1)]
            if number > 0:
                pieces.append((low + k, high + k, low + k + 1))
            triangles += pieces
            inside += [number < inner] * len(pieces)
    return np.concatenate(points), np.array(triangles), np.array(inside)


def polygon_of_equal_area(corners):
    """Radius of the corners of a regular polygon of area π."""
    return np.sqrt(2.0 * np.pi / (corners * np.sin(2.0 * np.pi / corners)))


def square_outline(angle):
    """Border of the unit square seen from its corner."""
    direction = np.array([np.cos(angle), np.sin(angle)])
    return np.round(direction / direction.max(), 12)


def circle_outline(rays=16):
    """Quarter of the unit circle as a polygon of the circle's area."""
    radius = polygon_of_equal_area(4 * rays)
    return lambda angle: radius * np.round([np.cos(angle), np.sin(angle)], 12)


def prism_over(points, triangles, inside, height=1.0, cells=8):
    """Prism 0 < z < height over a flat triangulation; label 1 on those triangles of the top that are `inside`."""
    edges = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    both, count = np.unique(np.sort(edges, axis=1), axis=0, return_counts=True)
    single = {tuple(edge) for edge in both[count == 1]}
    border = np.array([edge for edge in edges if tuple(np.sort(edge)) in single])
    levels = np.linspace(0.0, height, cells + 1)
    vertices = np.concatenate([np.column_stack([points, np.full(len(points), z)]) for z in levels])
    faces, labels = [triangles[:, ::-1], triangles + cells * len(points)], [np.zeros(len(triangles)), inside]
    for level in range(cells):
        a, b = (border + level * len(points)).T
        c, d = b + len(points), a + len(points)
        faces += [np.column_stack([a, b, c]), np.column_stack([a, c, d])]
        labels += [np.zeros(2 * len(border))]
    used, index = np.unique(np.concatenate(faces), return_inverse=True)
    label = np.concatenate(labels).astype(int)
    return Surface(vertices[used], index.reshape(-1, 3), {"label": label})


def tetrahedron_of_the_cube(cells=8):
    """(0, 0, 0), (½, 0, 0), (½, ½, 0), (½, ½, ½), one of the 48 pieces a cube's mirror planes cut; label 1 at x = ½."""
    corners = 0.5 * np.array([(0, 0, 0), (1, 0, 0), (1, 1, 0), (1, 1, 1)], dtype=float)
    triangles, labels = [], []
    for face in itertools.combinations(range(4), 3):
        a, b, c = corners[list(face)]
        opposite = corners[({0, 1, 2, 3} - set(face)).pop()]
        if np.dot(np.cross(b - a, c - a), opposite - a) > 0.0:
            b, c = c, b

        def point(i, j, a=a, b=b, c=c):
            return a + (b - a) * i / cells + (c - a) * j / cells

        for i in range(cells):
            for j in range(cells - i):
                pieces = [(point(i, j), point(i + 1, j), point(i, j + 1))]
                if i + j < cells - 1:
                    pieces.append((point(i + 1, j), point(i + 1, j + 1), point(i, j + 1)))
                triangles += pieces
                labels += [int(0 not in face)] * len(pieces)
    flat = np.round(np.array(triangles).reshape(-1, 3), 12)
    vertices, index = np.unique(flat, axis=0, return_inverse=True)
    return Surface(vertices, index.reshape(-1, 3), {"label": np.array(labels)})


def platonic(count):
    """Corners of an octahedron (6), a cube (8) or an icosahedron (12) on the unit sphere, off the mesh's axes."""
    golden = (1 + 5**0.5) / 2
    if count == 6:
        corners = np.concatenate([np.eye(3), -np.eye(3)])
    elif count == 8:
        corners = np.stack(np.meshgrid(*[[-1.0, 1.0]] * 3), axis=-1).reshape(-1, 3)
    else:
        plane = np.array([(0.0, a, b * golden) for a in (1, -1) for b in (1, -1)])
        corners = np.concatenate([np.roll(plane, k, axis=1) for k in range(3)])
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    return corners / np.linalg.norm(corners, axis=1)[:, None] @ turn.T


def fibonacci(count):
    """Points (count, 3) of a Fibonacci lattice on the unit sphere."""
    i = np.arange(count)
    z, azimuth = 1.0 - (2 * i + 1) / count, np.pi * (1 + 5**0.5) * (i + 0.5)
    return np.column_stack([np.sqrt(1 - z**2) * np.cos(azimuth), np.sqrt(1 - z**2) * np.sin(azimuth), z])
