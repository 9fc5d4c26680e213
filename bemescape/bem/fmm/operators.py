"""Translations between boxes: matrices that depend on nothing but the degree, kept on disk.

Coordinates are centred on a box and scaled by its side, so that one set serves every level. An expansion about the
source box (multipole) holds Σ q R_lm(y), one about the target box (local) the coefficients of R_lm(x); with 1/|x − y|
in units of the side,

    child multipole → parent multipole:  R_lm of the parent in those of the child: y = ½ y_child + corner/4;
    multipole → local at an offset d:     S_lm(x + d) as a series in R_lm(x);
    parent local → child local:           R_lm of the parent as a series in those of the child.

Each series follows from values on a sphere about the new centre: harmonics of different degree are orthogonal there, so
Σ_k w_k f(ρ u_k) R_lm(u_k) (2l+1)/4π = ρ^l f_lm with any rule exact for the degrees that occur. For translations to
a local series ρ is a quarter of the smallest distance: what the rule aliases is below 1e-13.

A far translation is cut to the lowest degree whose error stays within the tolerance: most of the 316 offsets are
farther than the closest, and their matrices much smaller.
"""

from __future__ import annotations

import os
import tempfile
import zipfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from platformdirs import user_cache_dir

from bemescape.bem.blas import one_blas_thread
from bemescape.bem.fmm.harmonics import coefficient_count, irregular, regular
from bemescape.bem.fmm.tree import FAR_OFFSETS

__all__ = ["Operators", "load_operators", "make_operators"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

#: Raise when the meaning of a stored matrix changes.
_VERSION = 1


@dataclass(frozen=True)
class Operators:
    """Translations for expansions of one degree; all act from the right on rows of coefficients.

    Attributes
    ----------
    degree : int
        Highest degree of the expansions.
    to_parent, to_child : (8, count, count) float32
        Multipole of child k into its parent's, and local of the parent into that of child k.
    far_degree : (316,) int64
        Degree that suffices at each of `FAR_OFFSETS`.
    far_first : (317,) int64, far : (…,) float32
        The matrices of the far translations, one after the other.
    """

    degree: int
    to_parent: Singles
    to_child: Singles
    far_degree: NDArray[np.int64]
    far_first: NDArray[np.int64]
    far: Singles


def _sphere(nodes: int) -> tuple[Floats, Floats]:
    """Points (n, 3) and weights (n,) on the unit sphere, exact to degree 2·nodes − 1; Gauss in z, even around it."""
    z, weight = np.polynomial.legendre.leggauss(nodes)
    angle = (np.arange(2 * nodes) + 0.5) * np.pi / nodes
    across = np.sqrt(1.0 - z**2)
    points = np.stack(
        [np.outer(across, np.cos(angle)), np.outer(across, np.sin(angle)), np.repeat(z[:, None], len(angle), 1)], axis=2
    )
    return points.reshape(-1, 3), np.repeat(weight * np.pi / nodes, len(angle))


def _series(degree: int, nodes: int, radius: float) -> tuple[Floats, Floats]:
    """Points (n, 3) at `radius`, and (count, n) that turns values there into coefficients of R_lm."""
    unit, weights = _sphere(nodes)
    degrees = np.repeat(np.arange(degree + 1), 2 * np.arange(degree + 1) + 1)
    rows = regular(unit, degree).T * weights * ((2 * degrees + 1) / (4.0 * np.pi) / radius**degrees)[:, None]
    return radius * unit, rows


def _corners() -> Floats:
    """Centres of the children (8, 3) as seen from their parent's, in sides of the child."""
    k = np.arange(8)
    return np.stack([k & 1, (k >> 1) & 1, k >> 2], axis=1) - 0.5


def _vertical(degree: int) -> tuple[Floats, Floats]:
    points, series = _series(degree, degree + 1, 0.5)
    # The potential 1/r is in units of the box side; the side doubles on the way up and halves on the way down.
    up = [0.5 * (series @ regular(0.5 * (points + corner), degree)) for corner in _corners()]
    down = [(series @ regular(0.5 * (points + corner), degree)).T for corner in _corners()]
    return np.array(up), np.array(down)


def _probe_pairs() -> tuple[Floats, Floats]:
    """Points in the unit box about the origin for measuring errors: an additive recurrence fills it evenly.

    Source: Roberts (2018), the R_3 sequence, built on the root of x⁴ = x + 1.
    """
    root = 1.2207440846057596
    grid = np.mod(np.outer(np.arange(1, 65), root ** -np.arange(1.0, 4.0)), 1.0) - 0.5
    return grid, grid[::-1] * (-1.0, 1.0, 1.0)


def _sufficient_degree(matrix: Floats, offset: Floats, degree: int, tolerance: float) -> int:
    """Lowest degree at which the potential of unit charges is off by less than `tolerance`, root mean square."""
    sources, targets = _probe_pairs()
    exact = 1.0 / np.linalg.norm(targets[:, None] + offset - sources[None], axis=2)
    at_targets, at_sources = regular(targets, degree), regular(sources, degree)
    for trial in range(2, degree):
        k = coefficient_count(trial)
        got = at_targets[:, :k] @ (at_sources[:, :k] @ matrix[:k, :k]).T
        if np.sqrt(np.mean((got / exact - 1.0) ** 2)) < tolerance:
            return trial
    return degree


def _mirror(degree: int, offset: Floats) -> Floats:
    """Factors (count,) ±1 that the harmonics take where the negative components of `offset` are reflected."""
    ell = np.repeat(np.arange(degree + 1), 2 * np.arange(degree + 1) + 1)
    m = np.arange(coefficient_count(degree)) - ell * ell - ell
    flip_x, flip_y, flip_z = offset < 0
    factors = np.ones(len(ell))
    if flip_x:
        factors *= np.where(m >= 0, 1.0, -1.0) * (-1.0) ** m
    if flip_y:
        factors *= np.where(m >= 0, 1.0, -1.0)
    if flip_z:
        factors *= (-1.0) ** (ell + m)
    return factors


def make_operators(degree: int, tolerance: float) -> Operators:
    """All translations, computed; about a second."""
    with one_blas_thread():
        up, down = _vertical(degree)
        points, series = _series(degree, 20, 0.5)
        matrices: dict[tuple[int, ...], Floats] = {}
        degrees: dict[tuple[int, ...], int] = {}
        far_degree, blocks = [], []
        for offset in FAR_OFFSETS:
            octant, kind = tuple(np.abs(offset)), tuple(sorted(np.abs(offset)))
            if octant not in matrices:
                matrices[octant] = (series @ irregular(points + np.abs(offset), degree)).T
            if kind not in degrees:
                degrees[kind] = _sufficient_degree(matrices[octant], np.abs(offset), degree, tolerance)
            k = coefficient_count(degrees[kind])
            mirror = _mirror(degree, offset)
            far_degree.append(degrees[kind])
            blocks.append((mirror[:k, None] * matrices[octant][:k, :k] * mirror[:k]).astype(np.float32).ravel())
    first = np.concatenate([[0], np.cumsum([len(b) for b in blocks])])
    return Operators(
        degree, up.astype(np.float32), down.astype(np.float32), np.array(far_degree), first, np.concatenate(blocks)
    )


def _read(path: Path, degree: int) -> Operators | None:
    """Stored operators, or None if there are none that can be used."""
    try:
        with np.load(path, allow_pickle=False) as stored:
            read = Operators(
                degree,
                stored["to_parent"],
                stored["to_child"],
                stored["far_degree"],
                stored["far_first"],
                stored["far"],
            )
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
        return None
    count = coefficient_count(degree)
    sizes = (read.far_degree + 1) ** 4 if read.far_degree.ndim == 1 else np.zeros(0)
    fits = (
        read.to_parent.shape == read.to_child.shape == (8, count, count)
        and read.far_degree.shape == (len(FAR_OFFSETS),)
        and read.far_degree.dtype == read.far_first.dtype == np.int64
        and 0 <= read.far_degree.min() <= read.far_degree.max() <= degree
        and np.array_equal(read.far_first, np.concatenate([[0], np.cumsum(sizes)]))
        and read.far.shape == (sizes.sum(),)
        and all(a.dtype == np.float32 and np.isfinite(a).all() for a in (read.to_parent, read.to_child, read.far))
    )
    return read if fits else None


def load_operators(degree: int, tolerance: float) -> Operators:
    """Operators from the user's cache folder; computed, and stored if possible, when they are not there.

    The file appears whole or not at all (written beside its place, then renamed), so that processes may do this at
    the same time; a damaged file is computed anew.
    """
    folder = Path(user_cache_dir("bemescape"))
    path = folder / f"translations_v{_VERSION}_degree{degree}_{tolerance:.0e}.npz"
    found = _read(path, degree)
    if found is not None:
        return found
    made = make_operators(degree, tolerance)
    temporary = None
    try:
        folder.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(dir=folder, suffix=".part")
        with os.fdopen(handle, "wb") as file:
            np.savez(
                file, to_parent=made.to_parent, to_child=made.to_child,
                far_degree=made.far_degree, far_first=made.far_first, far=made.far,
            )  # fmt: skip
        os.replace(temporary, path)
    except OSError:
        # A full or read-only disk costs a second per process, no more.
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
    return made
