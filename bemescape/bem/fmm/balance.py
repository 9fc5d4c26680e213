"""Equal shares of work, fixed by the data alone, so that sums do not depend on the number of threads."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["even_chunks"]


def even_chunks(work: NDArray[np.int64], count: int) -> NDArray[np.int64]:
    """Boundaries (count + 1,) of contiguous runs of about equal total `work` (n,)."""
    total = np.cumsum(work, dtype=np.float64)
    if not len(total) or total[-1] == 0.0:
        return np.minimum(np.arange(count + 1), 1) * len(work)
    inner = np.searchsorted(total, total[-1] * np.arange(1, count) / count)
    return np.concatenate([[0], inner, [len(work)]])
