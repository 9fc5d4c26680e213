"""One thread for the linear algebra library while our own threads are at work."""

from __future__ import annotations

from contextlib import AbstractContextManager
from functools import cache
from importlib import import_module
from typing import Any

from threadpoolctl import ThreadpoolController

__all__ = ["one_blas_thread"]


@cache
def _controller() -> Any:
    # The compiled loops call the library through scipy, which must be loaded before it can be found.
    import_module("scipy.linalg.cython_blas")
    return ThreadpoolController()


def one_blas_thread() -> AbstractContextManager[Any]:
    """Within it, matrix products use the calling thread only: two layers of threads would fight over the cores."""
    context: AbstractContextManager[Any] = _controller().limit(limits=1, user_api="blas")
    return context
