"""Panels in the arrangements that have trapped fast multipole methods, and their sums in double precision."""

import numpy as np

from bemescape.bem.kernels import spread_dipole, spread_inverse, spread_lifted
from bemescape.bem.panels import make_panels


def small_triangles(centres, normals, size, rng, *, aspect=1.0):
    """Triangles around centres (n, 3), across normals (n, 3), of edge about `size` (n,), `aspect` times as long."""
    u = np.cross(normals, rng.normal(size=centres.shape))
    u /= np.linalg.norm(u, axis=1, keepdims=True)
    v = np.cross(normals, u)
    angles = 2.0 * np.pi * np.arange(3) / 3.0
    u, v = u * (np.sqrt(aspect) * size)[:, None], v * (size / np.sqrt(aspect))[:, None]
    return centres[:, None] + 0.577 * (np.cos(angles)[:, None] * u[:, None] + np.sin(angles)[:, None] * v[:, None])


def _unit(vectors):
    return vectors / np.linalg.norm(vectors, axis=1, keepdims=True)


def volume(n, rng):
    size = np.full(n, 0.2 * n ** (-1 / 3))
    return small_triangles(rng.uniform(size=(n, 3)), _unit(rng.normal(size=(n, 3))), size, rng)


def _spiral(n):
    """Evenly spread directions: the Fibonacci lattice."""
    z = 1.0 - (2.0 * np.arange(n) + 1.0) / n
    angle = np.pi * (1.0 + np.sqrt(5.0)) * np.arange(n)
    across = np.sqrt(1.0 - z**2)
    return np.stack([across * np.cos(angle), across * np.sin(angle), z], axis=1)


def sphere(n, rng, *, aspect=1.0):
    normals = _spiral(n)
    return small_triangles(normals, normals, np.full(n, np.sqrt(8.0 * np.pi / n)), rng, aspect=aspect)


def slivers(n, rng):
    return sphere(n, rng, aspect=8.0)


def clustered(n, rng):
    """A sphere graded towards one point of it over four decades."""
    distance = 2.0 * 10.0 ** (-4.0 * (np.arange(n) + 0.5) / n)
    angle = 2.0 * np.arcsin(distance / 2.0)
    around = np.pi * (1.0 + np.sqrt(5.0)) * np.arange(n)
    normals = np.stack([np.sin(angle) * np.cos(around), np.sin(angle) * np.sin(around), np.cos(angle)], axis=1)
    return small_triangles(normals, normals, distance * np.sqrt(100.0 / n), rng)


def cube(n, rng):
    """Faces of the unit cube, in a regular grid: planes of panels that boxes could be aligned with."""
    cells = round(np.sqrt(n / 12))
    corners = []
    grid = np.arange(cells + 1) / cells
    for axis in range(3):
        for side in (0.0, 1.0):
            a, b = np.meshgrid(grid[:-1], grid[:-1], indexing="ij")
            h = 1.0 / cells
            flat = np.stack(
                [
                    np.stack([a, b], -1),
                    np.stack([a + h, b], -1),
                    np.stack([a + h, b + h], -1),
                    np.stack([a, b + h], -1),
                ],
                axis=2,
            ).reshape(-1, 4, 2)
            quads = np.insert(flat, axis, side, axis=2)
            order = [[0, 1, 2], [0, 2, 3]] if (side == 1.0) == (axis != 1) else [[0, 2, 1], [0, 3, 2]]
            corners.append(quads[:, order].reshape(-1, 3, 3))
    return np.concatenate(corners)


def far_from_origin(n, rng):
    return sphere(n, rng) + np.array([300.0, -1000.0, 500.0])


SETS = {f.__name__: f for f in (volume, sphere, slivers, clustered, cube, far_from_origin)}


def panels_of(name, n=6000):
    return make_panels(SETS[name](n, np.random.default_rng(7)))


def density_on(panels, rng):
    """A smooth density of zero mean with noise of 30 %."""
    low, high = panels.centroids.min(axis=0), panels.centroids.max(axis=0)
    x = (panels.centroids - low) / (high - low).max()
    return np.sin(5.0 * x[:, 0]) - x[:, 1] * x[:, 2] + 0.3 * rng.normal(size=len(panels))


KERNELS = {
    "single": lambda ht, hs, tilt, st, ss, inverse: spread_inverse.py_func(ht, hs, st, ss, inverse),
    "double": spread_dipole.py_func,
    "lifted": lambda *args: -spread_lifted.py_func(*args),
}


def direct(kind, at, panels, used, density):
    """The sums of `far` in double precision, one target at a time."""
    out = np.empty(len(at.points))
    normals, spread = panels.normals[used], panels.spread[used]
    for i, (x, n, wide) in enumerate(zip(at.points, at.normals, at.spread, strict=True)):
        d = x - panels.centroids[used]
        inverse = 1.0 / np.sqrt((d**2).sum(axis=1) + spread)
        values = KERNELS[kind](d @ n, (d * normals).sum(axis=1), normals @ n, wide, spread, inverse)
        out[i] = (values * panels.areas[used]) @ density / (4.0 * np.pi)
    return out


def relative(got, expected):
    return np.linalg.norm(got - expected) / np.linalg.norm(expected)
