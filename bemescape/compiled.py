"""Compiled functions whose cache on disk may be filled by several processes at once.

numba numbers the files of one function's variants (closures over different flags, other argument types) by what its
index holds when a variant is saved, and writes the index first. Two processes that compile different variants at the
same time choose the same number, and one is given the other's code; a process that comes in between is given the code
of an earlier version of the source. Workers of a study start together, so this happens. Here a file is named by what
is in it and written before the index: the worst that is left is that an entry is lost and compiled again.

Nor does numba notice a change in another compiled function that is called; here a change in any of them counts.
"""

from __future__ import annotations

import functools
import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
from numba.core.caching import IndexDataCacheFile

__all__ = ["NamedByContent", "njit"]


class NamedByContent(IndexDataCacheFile):  # type: ignore[misc]  # numba has no types
    """The cache file of one function."""

    def save(self, key: Any, data: Any) -> None:
        """Save the code of one variant."""
        of_all = repr((self._version, self._source_stamp, key)).encode()
        name = self._index_name.removesuffix(".nbi") + f".{hashlib.sha256(of_all).hexdigest()[:20]}.nbc"
        self._save_data(name, data)
        overloads = self._load_index()
        overloads[key] = name
        self._save_index(overloads)


@functools.cache
def _sources() -> str:
    """Checksum of all sources of this package that compile anything."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.rglob("*.py")):
        text = path.read_bytes()
        if b"@njit" in text:
            digest.update(text)
    return digest.hexdigest()


def njit(**options: Any) -> Callable[[Callable[..., Any]], Any]:
    """`numba.njit` with such a cache."""

    def compiled(function: Callable[..., Any]) -> Any:
        dispatcher = numba.njit(**options)(function)
        file: Any = getattr(getattr(dispatcher, "_cache", None), "_cache_file", None)
        if type(file) is IndexDataCacheFile:
            file.__class__ = NamedByContent
            file._source_stamp = (file._source_stamp, _sources())
        return dispatcher

    return compiled
