"""Run a function in a process of its own, so that the peak of its memory is its alone."""

from __future__ import annotations

import resource
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from typing import Any


def in_child(function: Callable[..., dict[str, Any]], *arguments: Any, **options: Any) -> dict[str, Any]:
    """The answer of `function`, with `peak_mb` and what of it the imports took (`imports_mb`)."""
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
        return pool.submit(_measured, function, arguments, options).result()


def _measured(
    function: Callable[..., dict[str, Any]], arguments: tuple[Any, ...], options: dict[str, Any]
) -> dict[str, Any]:
    imports_mb = _peak_mb()
    answer = function(*arguments, **options)
    return {**answer, "peak_mb": _peak_mb(), "imports_mb": imports_mb}


def _peak_mb() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0  # Linux counts in KiB
