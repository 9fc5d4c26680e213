"""Far field in linear time: the sums of `bemescape.bem.far` by an adaptive fast multipole method.

Strategy: panels are sorted into an octree. Boxes next to each other are summed panel by panel, with the kernels of the
direct far field. For all others the panels of a box are condensed into an expansion in solid harmonics, translated to
the boxes that see it from at least one box away, and evaluated there; panels enter and are averaged over with their
second moments, as in these kernels. Everything is in single precision relative to the box at hand: the error is that
of the expansions. What both ways differ in beyond the tolerance is of fourth order in (panel size / distance), as is
what either leaves out of the integral over a panel.

    panels ── up ──▶ multipoles ── move_up ──▶ … of larger boxes
                         │ move_across
                         ▼
    targets ◀─ at points ── locals ◀── move_down ── … of larger boxes

Sources: Greengard & Rokhlin (1987), doi:10.1016/0021-9991(87)90140-9; adaptive lists as named in `tree`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bemescape.bem import far
from bemescape.bem.blas import one_blas_thread
from bemescape.bem.far import Targets, panel_targets, point_targets
from bemescape.bem.fmm import near, passes
from bemescape.bem.fmm.balance import even_chunks
from bemescape.bem.fmm.harmonics import coefficient_count, steps
from bemescape.bem.fmm.kept import KeptHarmonics, Visits, visits
from bemescape.bem.fmm.operators import Operators, load_operators
from bemescape.bem.fmm.tree import Lists, Octree, RootCube, build_lists, build_octree, root_cube
from bemescape.bem.panels import Panels
from bemescape.errors import SettingsError
from bemescape.threads import over_rows

__all__ = ["FastSums", "PointSums"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

_FOUR_PI = 4.0 * math.pi

#: Tolerance -> degree of the expansions, tolerance of a single translation, panels in a box at most. The first bounds
#: the error of sums over dipoles, relative, root mean square, on the sets of the tests (measured: 9e-6 at most for
#: 1e-5, 3.4e-3 for 1e-3, which is for preconditioners); sums over charges are about ten times better. At 1e-6 rounding
#: adds up to 8e-6 for dipoles.
_PRESETS = {1e-3: (5, 1e-3, 64), 1e-4: (9, 2e-5, 64), 1e-5: (11, 2e-6, 64), 1e-6: (13, 2e-7, 100)}
#: Sources that are fewer than this part of all get a tree of their own; so many such trees are kept.
_SUBSET, _SUBSETS_KEPT = 0.6, 4
#: Panels with a radius above this part of their leaf's side are summed directly, as sources and as targets.
_OUTSIZE = 0.75
#: Most memory for either set of expansions with several densities at once, in bytes, and most densities at once.
_MOST_BYTES, _MOST_COLUMNS = 2.0e8, 32
_CHUNKS = 16
#: Sorts of visits, and of sources.
_CHARGES, _DIPOLES, _INTO_LARGER, _AT_TARGETS, _FROM_SMALLER = (
    "charges",
    "dipoles",
    " into larger",
    "at",
    "from smaller",
)


@dataclass(frozen=True)
class _Side:
    """Targets or sources in the order of their tree, in units of the root cube.

    Attributes
    ----------
    points : (n, 3) float64, shape : (n, 4) float32
        Centroids; normals and spread (zeros for bare points).
    outsize : (k,) int64
        Those too large for their box, as numbered by the caller.
    """

    tree: Octree
    centres: Floats
    scales: Floats
    points: Floats
    shape: Singles
    outsize: Ints

    @property
    def leaf_first(self) -> Ints:
        """First point of each leaf."""
        return self.tree.first[self.tree.leaves]

    @property
    def leaf_last(self) -> Ints:
        """One past the last point of each leaf."""
        return self.tree.last[self.tree.leaves]


def _side(cube: RootCube, at: Targets, radii: Floats, cap: int) -> _Side:
    unit = cube.inside(at.points)
    tree = build_octree(unit, radii / cube.side, cap)
    sizes = tree.last[tree.leaves] - tree.first[tree.leaves]
    limit = np.repeat(_OUTSIZE * cube.side / tree.scale[tree.leaves], sizes)
    shape = np.column_stack([at.normals, at.spread / cube.side**2])[tree.order]
    return _Side(
        tree, tree.centres, tree.scale, np.ascontiguousarray(unit[tree.order]), shape.astype(np.float32),
        np.sort(tree.order[radii[tree.order] > limit]),
    )  # fmt: skip


@dataclass(frozen=True)
class _Sources:
    """The panels `used` (k,) as sources, and how the targets see them."""

    used: Ints
    side: _Side
    lists: Lists
    kept: dict[str, KeptHarmonics] = field(default_factory=dict)


class PointSums:
    """Sums over panels at fixed targets; made by `FastSums.at_points`."""

    def __init__(
        self, panels: Panels, at: Targets, radii: Floats, cube: RootCube, operators: Operators, cap: int
    ) -> None:
        self._panels, self._at, self._cube, self._operators, self._cap = panels, at, cube, operators, cap
        self._factors = steps(operators.degree).astype(np.float32)
        self._targets = _side(cube, at, radii, cap)
        self._sources: dict[bytes, _Sources] = {}
        self._kept: dict[str, KeptHarmonics] = {}

    def single(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j ∫_j G over the panels `used` (k,), density (k,), as `far.single_layer`."""
        return self._checked(far.single_layer, self._single, used, density)

    def double(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j ∫_j ∂G/∂n_y over the panels `used` (k,), density (k,), as `far.double_layer`."""
        return self._checked(far.double_layer, self._double, used, density)

    def lifted(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j h_j ∫_j G with h_j the height of panel j's plane above the target: `far.lifted_single_layer`."""
        return self._checked(far.lifted_single_layer, self._lifted, used, density)

    def double_many(self, used: Ints, densities: Floats) -> Floats:
        """`double` of every column of densities (k, r) -> (t, r); zeros, as in indicators of clusters, cost nothing."""
        out = np.zeros((len(self._at.points), densities.shape[1]))
        sources, used, densities = self._select(used, densities)
        count = coefficient_count(self._operators.degree)
        boxes = max(len(sources.side.tree), len(self._targets.tree))
        width = int(np.clip(_MOST_BYTES // (4 * count * boxes), 1, _MOST_COLUMNS))
        regular = densities.copy()
        regular[sources.side.outsize] = 0.0
        for begin in range(0, densities.shape[1], width):
            columns = slice(begin, begin + width)
            out[:, columns] = self._double_many(sources, regular[:, columns])
        for column in range(densities.shape[1]):
            self._add_outsize(far.double_layer, sources, used, densities[:, column], out[:, column])
        return out

    # -- which panels, and those that fit no box --------------------------------------------------------------------

    def _select(self, used: Ints, density: Floats) -> tuple[_Sources, Ints, Floats]:
        """Sources for `used`: all panels with zeros put in, or a tree for these few; `density` in their order."""
        every = len(self._panels)
        if len(used) >= _SUBSET * every:
            full = np.zeros((every, *density.shape[1:]))
            full[used] = density
            return self._prepared(np.arange(every)), np.arange(every), full
        return self._prepared(used), used, np.asarray(density, dtype=np.float64)

    def _prepared(self, used: Ints) -> _Sources:
        key = used.tobytes() if len(used) < len(self._panels) else b""
        if key not in self._sources:
            p = self._panels
            if key == b"" and self._at.points is p.centroids:
                side = self._targets
            else:
                at = Targets(p.centroids[used], p.normals[used], p.spread[used])
                side = _side(self._cube, at, p.radii[used], self._cap)
            for stale in [k for k in self._sources if k][: max(0, len(self._sources) - _SUBSETS_KEPT)]:
                del self._sources[stale]
            self._sources[key] = _Sources(used, side, build_lists(self._targets.tree, side.tree))
        return self._sources[key]

    def _checked(
        self, direct: Callable[..., Floats], fast: Callable[..., Floats], used: Ints, density: Floats
    ) -> Floats:
        if not len(used):
            return np.zeros(len(self._at.points))
        sources, used, density = self._select(used, density)
        regular = density.copy()
        regular[sources.side.outsize] = 0.0
        out = fast(sources, self._strength(sources, regular))
        self._add_outsize(direct, sources, used, density, out)
        return out

    def _add_outsize(
        self, direct: Callable[..., Floats], sources: _Sources, used: Ints, density: Floats, out: Floats
    ) -> None:
        large = sources.side.outsize
        if len(large):
            out += direct(self._at, self._panels, used[large], density[large])
        targets = self._targets.outsize
        if len(targets):
            at = Targets(self._at.points[targets], self._at.normals[targets], self._at.spread[targets])
            out[targets] = direct(at, self._panels, used, density)

    def _strength(self, sources: _Sources, density: Floats) -> Floats:
        """Charges (k,) or (k, r) in the order of the tree."""
        areas = self._panels.areas[sources.used] / _FOUR_PI
        strength = density * (areas if density.ndim == 1 else areas[:, None])
        return np.asarray(strength[sources.side.tree.order])

    # -- the sums ---------------------------------------------------------------------------------------------------

    def _single(self, sources: _Sources, strength: Floats) -> Floats:
        unit, scale = _scaled(strength)
        out = self._near(near.near_single, sources, unit)
        multipole, local = self._expand(sources, [(_CHARGES, unit[:, None])])
        out += self._values(sources, multipole, local)[:, 0]
        return self._restored(out, scale / self._cube.side)

    def _double(self, sources: _Sources, strength: Floats) -> Floats:
        unit, scale = _scaled(strength)
        out = self._near(near.near_double, sources, unit)
        multipole, local = self._expand(sources, [(_DIPOLES, unit[:, None])])
        out += self._values(sources, multipole, local)[:, 0]
        return self._restored(out, scale / self._cube.side**2)

    def _lifted(self, sources: _Sources, strength: Floats) -> Floats:
        """Charges s h_j = s n·(y − c) − (x − c)·(s n): four sums of charges, with c the middle of the sources.

        The mean over a target panel of this product, to second order, is that of its factors plus the spread times
        n·∂B/∂n − div B, for B the potential of the charges s n; div B = −(double layer of s) is a fifth sum.
        """
        unit, scale = _scaled(strength)
        side = sources.side
        normals = side.shape[:, :3].astype(np.float64)
        middle = 0.5 * (side.points.min(axis=0) + side.points.max(axis=0))
        heights = (normals * (side.points - middle)).sum(axis=1)
        charges = np.ascontiguousarray(np.column_stack([heights, normals]) * unit[:, None], np.float32)
        out = self._near(near.near_lifted, sources, unit)
        multipole, local = self._expand(sources, [(_CHARGES, charges), (_DIPOLES, unit[:, None])])
        value = self._slopes(sources, multipole, local)
        t = self._targets
        out += value[0] - ((t.points - middle).T * value[1:4]).sum(axis=0)
        out += t.shape[:, 3] * ((t.shape[:, :3].T * value[4:7]).sum(axis=0) + value[7])
        return self._restored(out, scale)

    def _double_many(self, sources: _Sources, densities: Floats) -> Floats:
        unit, scale = _scaled(self._strength(sources, densities))
        t, s, lists = self._targets, sources.side, sources.lists
        out = np.zeros((len(t.points), unit.shape[1]), np.float32)
        with one_blas_thread():
            over_rows(
                near.near_double_many, len(lists.leaf_chunks) - 1, 1,
                lists.leaf_chunks, lists.near_first, lists.near_begin, lists.near_end, t.leaf_first, t.leaf_last,
                t.centres[t.tree.leaves], t.scales[t.tree.leaves], t.points, t.shape, s.points, s.shape,
                unit.any(axis=1), unit, out,
            )  # fmt: skip
        multipole, local = self._expand(sources, [(_DIPOLES, unit)])
        out += self._values(sources, multipole, local)
        return self._restored(out, scale / self._cube.side**2)

    # -- the passes -------------------------------------------------------------------------------------------------

    def _near(self, run: Callable[..., None], sources: _Sources, strength: Singles) -> Floats:
        t, s, lists = self._targets, sources.side, sources.lists
        out = np.zeros(len(t.points))
        over_rows(
            run, len(lists.leaf_chunks) - 1, 1,
            lists.leaf_chunks, lists.near_first, lists.near_begin, lists.near_end, t.leaf_first, t.leaf_last,
            t.centres[t.tree.leaves], t.scales[t.tree.leaves], t.points, t.shape, s.points, s.shape, strength, out,
        )  # fmt: skip
        return out

    def _expand(self, sources: _Sources, kinds: list[tuple[str, Singles]]) -> tuple[Singles, Singles]:
        """Multipoles of the source boxes and locals of the target boxes, (boxes, columns, count).

        Each of `kinds` is _CHARGES or _DIPOLES and their strengths (k, columns).
        """
        o, t, s, lists = self._operators, self._targets, sources.side, sources.lists
        multipoles, locals_, live = [], [], []
        with one_blas_thread():
            for kind, strength in kinds:
                shape = strength.shape[1], coefficient_count(o.degree)
                multipoles.append(np.zeros((len(s.tree), *shape), np.float32))
                self._harmonics(sources, kind).add_moments(strength, multipoles[-1])
                locals_.append(np.zeros((len(t.tree), *shape), np.float32))
                if len(lists.up):
                    self._harmonics(sources, kind + _INTO_LARGER).add_moments(strength, locals_[-1])
                live.append(np.zeros((len(s.tree), shape[0]), bool))
                live[-1][s.tree.leaves] = np.logical_or.reduceat(strength != 0.0, s.leaf_first, axis=0)
            multipole, local = (
                (multipoles[0], locals_[0])
                if len(kinds) == 1
                else (np.concatenate(multipoles, axis=1), np.concatenate(locals_, axis=1))
            )
            alive = np.concatenate(live, axis=1)
            passes.move_up(s.tree, o.to_parent, alive, multipole)
            over_rows(
                passes.move_across, len(lists.far_first), 1,
                lists.far_first, lists.far_target, lists.far_source, o.far_degree, o.far_first, o.far, alive,
                multipole, local,
            )  # fmt: skip
            passes.move_down(t.tree, o.to_child, local)
        return multipole, local

    def _values(self, sources: _Sources, multipole: Singles, local: Singles) -> Singles:
        """Potentials (t, columns) at the targets in the order of their tree."""
        out = np.zeros((len(self._targets.points), local.shape[1]), np.float32)
        with one_blas_thread():
            self._harmonics(sources, _AT_TARGETS).add_values(local, out)
            if len(sources.lists.down):
                self._harmonics(sources, _FROM_SMALLER).add_values(multipole, out)
        return out

    def _slopes(self, sources: _Sources, multipole: Singles, local: Singles) -> Singles:
        """The eight potentials and slopes (8, t) of `_lifted` at the targets in the order of their tree."""
        t, s, lists = self._targets, sources.side, sources.lists
        out = np.zeros((8, len(t.points)), np.float32)
        looking = np.flatnonzero(np.diff(lists.down_first))
        looking_first = np.append(lists.down_first[looking], len(lists.down))
        with one_blas_thread():
            over_rows(
                passes.slopes_at_leaves, _CHUNKS, 1,
                self._operators.degree, self._factors, even_chunks(t.leaf_last - t.leaf_first, _CHUNKS), t.tree.leaves,
                t.tree.first, t.tree.last, t.centres, t.scales, t.points, t.shape, local, out,
            )  # fmt: skip
            if len(looking):
                over_rows(
                    passes.slopes_from_smaller, _CHUNKS, 1,
                    self._operators.degree, self._factors, even_chunks(np.diff(looking_first), _CHUNKS),
                    t.tree.leaves[looking], looking_first, lists.down, t.tree.first, t.tree.last, t.points, t.shape,
                    s.centres, s.scales, multipole, out,
                )  # fmt: skip
        return out

    def _harmonics(self, sources: _Sources, name: str) -> KeptHarmonics:
        """Of all visits of one sort, made when they are first needed; those at the targets serve all sources."""
        known = self._kept if name == _AT_TARGETS else sources.kept
        if name not in known:
            t, s, lists = self._targets, sources.side, sources.lists
            if name in (_AT_TARGETS, _FROM_SMALLER):
                panels, seen = t, _own_leaf(t) if name == _AT_TARGETS else _looking(lists.down_first, lists.down, t)
                boxes = t if name == _AT_TARGETS else s
            else:
                panels, larger = s, name.endswith(_INTO_LARGER)
                seen, boxes = (_entering(lists, s), t) if larger else (_own_leaf(s), s)
            known[name] = KeptHarmonics(
                seen, self._operators.degree, self._factors,
                dipole=name.startswith(_DIPOLES), far=name not in (_AT_TARGETS, _CHARGES, _DIPOLES),
                centres=boxes.centres, scales=boxes.scales, points=panels.points, shape=panels.shape,
            )  # fmt: skip
        return known[name]

    def _restored(self, sorted_values: Floats | Singles, factor: float) -> Floats:
        """Values (t, …) in the order of the caller, times `factor`."""
        out = np.empty(sorted_values.shape)
        out[self._targets.tree.order] = sorted_values
        out *= factor
        return out


def _own_leaf(side: _Side) -> Visits:
    """The panels of every leaf from the leaf."""
    leaves = side.tree.leaves
    return visits(leaves, side.leaf_first, side.leaf_last, leaves)


def _entering(lists: Lists, sources: _Side) -> Visits:
    """The panels of source boxes from the larger target boxes that they enter."""
    into = np.repeat(np.arange(len(lists.up_first) - 1), np.diff(lists.up_first))
    return visits(into, sources.tree.first[lists.up], sources.tree.last[lists.up], into)


def _looking(down_first: Ints, down: Ints, targets: _Side) -> Visits:
    """The panels of target leaves from the smaller source boxes that they see."""
    leaf = np.repeat(np.arange(len(down_first) - 1), np.diff(down_first))
    return visits(down, targets.leaf_first[leaf], targets.leaf_last[leaf], leaf)


def _scaled(strength: Floats) -> tuple[Singles, float]:
    """Strengths in single precision, the largest of them 1, and what they were divided by."""
    largest = float(np.abs(strength).max(initial=0.0))
    scale = largest if largest > 0.0 else 1.0
    return (strength / scale).astype(np.float32), scale


class FastSums(PointSums):
    """Sums over panels, averaged over the same panels; prepared once for a mesh.

    Parameters
    ----------
    panels : Panels
        All panels that may be sources; every panel is a target.
    tolerance : float, default 1e-5
        Relative error of sums over dipoles, root mean square over the targets: 1e-6 to 1e-3. It is rounded down to
        the next of 1e-3 (for preconditioners: up to 4e-3), 1e-4, 1e-5 and 1e-6; sums over charges are about ten times
        better. At 1e-6 the rounding of single precision shows: up to 8e-6 for dipoles on graded sets.

    Raises
    ------
    SettingsError
        The tolerance is below 1e-6, where single precision ends, or not a positive number.
    """

    def __init__(self, panels: Panels, *, tolerance: float = 1e-5) -> None:
        degree, translation, cap = _preset(tolerance)
        operators = load_operators(degree, translation)
        super().__init__(panels, panel_targets(panels), panels.radii, root_cube(panels.centroids), operators, cap)

    def at_points(self, points: Floats) -> PointSums:
        """The same sums at points (p, 3), without averages."""
        at = point_targets(np.ascontiguousarray(points, dtype=np.float64))
        cube = self._cube
        if not cube.holds(at.points):
            cube = root_cube(np.vstack([self._panels.centroids, at.points]))
        return PointSums(self._panels, at, np.zeros(len(at.points)), cube, self._operators, self._cap)


def _preset(tolerance: float) -> tuple[int, float, int]:
    for limit in sorted(_PRESETS, reverse=True):
        if tolerance >= limit * (1.0 - 1e-9) and np.isfinite(tolerance):
            return _PRESETS[limit]
    raise SettingsError(
        f"far-field tolerance {tolerance:g} is below {min(_PRESETS):g}, the least that single precision can keep; "
        f"ask for {min(_PRESETS):g} or more"
    )
