"""The boundary integral operator of one mesh with its windows: far field + near field, never stored whole.

On the boundary, with q = ∂u/∂n,

    ½u + K u − V q = b,      b(x) = (1/D) ∫_Ω G(x, y) dy,

averaged over each panel. Unknown are u on the wall and q on the windows, where u = −ρ q with ρ = D/κ
(0 when perfectly absorbing). Compact pores add an unknown and an equation each (`bemescape.bem.compact`).
Everything here is for D = 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_matrix

from bemescape.bem.compact import CompactPores, PoreRows, assemble_pores
from bemescape.bem.near import NearField, build_near_field
from bemescape.bem.panels import Panels
from bemescape.bem.sums import FarSums, far_sums

__all__ = ["EscapeOperator", "assemble"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class EscapeOperator:
    """½ + K and V on m panels, w of them windows.

    Attributes
    ----------
    panels : Panels
    sums : FarSums
    window_of : (m,) int64
        Window number of each panel, −1 on the wall.
    resistance : (m,) float64
        ρ = D/κ of the panel's window in µm (u = −ρ q there); 0 on absorbing windows and on the wall.
    near_double : (m, m) sparse, near_single : (m, w) sparse
        Near-field corrections.
    diagonal : (m,) float64
        ½ plus what makes every row sum of ½ + K vanish: a constant is in its null space, exactly.
    volume_potential : (m + p,) float64
        ∫_Ω G dy, averaged over each panel, and at each compact pore.
    pores : PoreRows or None
        The p compact pores.
    """

    panels: Panels
    sums: FarSums
    window_of: Ints
    resistance: Floats
    near_double: csr_matrix
    near_single: csr_matrix
    diagonal: Floats
    volume_potential: Floats
    pores: PoreRows | None = None

    @property
    def is_window(self) -> NDArray[np.bool_]:
        """Mask (m,) of window panels."""
        return np.asarray(self.window_of >= 0)

    def single(self, q_window: Floats) -> Floats:
        """V q on all panels, for q (w,) on the window panels."""
        far = self.sums.single(np.flatnonzero(self.is_window), q_window)
        return np.asarray(far + self.near_single @ q_window.astype(np.float32))

    def half_plus_double(self, u: Floats) -> Floats:
        """(½ + K) u on all panels, for u (m,)."""
        used = np.flatnonzero(u)
        far = self.sums.double(used, u[used])
        return np.asarray(far + self.near_double @ u.astype(np.float32) + self.diagonal * u)

    def half_plus_double_of_clusters(self, cluster_of: Ints, count: int) -> Floats:
        """(½ + K) Z, (m, count), for the indicator functions Z of clusters of panels (−1: in none)."""
        used = np.flatnonzero(cluster_of >= 0)
        image = self.sums.double_of_clusters(cluster_of, count)
        indicator = csr_matrix(
            (np.ones(len(used), np.float32), (used, cluster_of[used])), shape=(len(self.panels), count)
        )
        image += (self.near_double @ indicator).toarray()
        image[used, cluster_of[used]] += self.diagonal[used]
        return image


def assemble(
    panels: Panels,
    window_of: Ints,
    resistance: Floats,
    near: NearField | None = None,
    pores: CompactPores | None = None,
) -> EscapeOperator:
    """Operator for panels in their Morton order; `window_of` and `resistance` (m,) in the same order.

    `near` is the near field of these panels where it is known already.
    """
    is_window = window_of >= 0
    near = build_near_field(panels, is_window) if near is None else near
    m = len(panels)
    near_double = csr_matrix((near.double, near.column, near.first), shape=(m, m))
    number = np.cumsum(is_window) - 1
    near_single = csr_matrix(
        (near.single, number[near.window_column], near.window_first), shape=(m, int(is_window.sum()))
    )
    sums, every, ones = far_sums(panels), np.arange(m), np.ones(m)
    row_sum = sums.double(every, ones) + near_double @ ones.astype(np.float32)
    volume = 0.5 * sums.lifted(every, ones) + near.volume
    rows = assemble_pores(panels, is_window, pores)
    if rows is not None:
        volume = np.concatenate([volume, rows.volume_potential])
    return EscapeOperator(panels, sums, window_of, resistance, near_double, near_single, -row_sum, volume, rows)
