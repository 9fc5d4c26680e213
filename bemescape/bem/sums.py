"""Which far field serves a mesh: every pair, or the fast multipole method."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.far import cluster_double_layer, double_layer, lifted_single_layer, panel_targets, single_layer
from bemescape.bem.panels import Panels

__all__ = ["FAST_FROM", "FAST_TOLERANCE", "DirectSums", "FarSums", "far_sums"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: From this many panels on the fast sums serve the iteration. They win from 10 000 on, but their first use in an
#: installation compiles for some 20 s, which small meshes should not have to wait for.
FAST_FROM = 16_000
#: Sums that are taken once for a mesh are direct up to this many panels: a pass costs less than compiling, and the
#: clusters, of which there are many, less than their many expansions (measured at 20 000: 0.2 s against 1.2 s).
FAST_ONCE_FROM = 60_000
#: Relative error of the fast sums; its effect on the mean time is far below a tenth of any target.
FAST_TOLERANCE = 1e-5
#: The same for the images of clusters, which only precondition: with 1e-3 the iterations are as many.
ROUGH_TOLERANCE = 1e-3


#: Fewer sources than this are summed directly in any case.
_FEW = 5_000


class FarSums(Protocol):
    """Sums over all pairs of panels by the far-field formula, averaged over every panel."""

    def single(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j ∫_j G over the panels `used` (k,), density (k,) -> (m,)."""

    def double(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j ∫_j ∂G/∂n_y."""

    def lifted(self, used: Ints, density: Floats) -> Floats:
        """Σ density_j h_j ∫_j G, h_j the height of panel j's plane above the target."""

    def double_of_clusters(self, cluster_of: Ints, count: int) -> Floats:
        """`double` of the indicator of each cluster (m, count), roughly; −1 in `cluster_of` (m,) is in none."""


class DirectSums:
    """Every pair: no set-up, work as m²."""

    def __init__(self, panels: Panels) -> None:
        self._panels = panels
        self._targets = panel_targets(panels)

    def single(self, used: Ints, density: Floats) -> Floats:
        """See `FarSums`."""
        return single_layer(self._targets, self._panels, used, density)

    def double(self, used: Ints, density: Floats) -> Floats:
        """See `FarSums`."""
        return double_layer(self._targets, self._panels, used, density)

    def lifted(self, used: Ints, density: Floats) -> Floats:
        """See `FarSums`."""
        return lifted_single_layer(self._targets, self._panels, used, density)

    def double_of_clusters(self, cluster_of: Ints, count: int) -> Floats:
        """See `FarSums`: one pass over the pairs, sources sorted by cluster."""
        used = np.flatnonzero(cluster_of >= 0)
        used = used[np.argsort(cluster_of[used], kind="stable")]
        first = np.searchsorted(cluster_of[used], np.arange(count + 1))
        return cluster_double_layer(self._targets, self._panels, used, first)


class _FastSums:
    """The fast multipole method in the shape of `FarSums`."""

    def __init__(self, panels: Panels) -> None:
        from bemescape.bem.fmm import FastSums  # not before it is needed: it compiles for longer than the rest

        self._panels, self._sums = panels, FastSums(panels, tolerance=FAST_TOLERANCE)
        self._direct = DirectSums(panels)
        self._once: FarSums | FastSums = self._sums if len(panels) >= FAST_ONCE_FROM else self._direct
        self.double, self.lifted = self._sums.double, self._once.lifted

    def single(self, used: Ints, density: Floats) -> Floats:
        """See `FarSums`; few sources, as those on small windows, are summed directly."""
        if len(used) < _FEW:
            return self._direct.single(used, density)
        return self._sums.single(used, density)

    def double_of_clusters(self, cluster_of: Ints, count: int) -> Floats:
        """See `FarSums`."""
        if self._once is self._direct:
            return self._direct.double_of_clusters(cluster_of, count)
        from bemescape.bem.fmm import FastSums

        used = np.flatnonzero(cluster_of >= 0)
        indicators = np.zeros((len(used), count))
        indicators[np.arange(len(used)), cluster_of[used]] = 1.0
        return FastSums(self._panels, tolerance=ROUGH_TOLERANCE).double_many(used, indicators)


def far_sums(panels: Panels) -> FarSums:
    """The cheaper of the two for so many panels."""
    if len(panels) < FAST_FROM:
        return DirectSums(panels)
    return _FastSums(panels)
