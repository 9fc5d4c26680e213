"""Files beside the database: named by their checksum, whole or not there."""

from __future__ import annotations

import hashlib
import os
import re
import secrets
from collections.abc import Iterable
from pathlib import Path

from bemescape.errors import SettingsError

__all__ = ["Files"]

_CHECKSUM = re.compile(r"[0-9a-f]{64}")


class Files:
    """Files by checksum. No name that a client gave ever reaches the disk."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder / "files"
        self._unfinished = folder / "unfinished"
        try:
            for path in (self._folder, self._unfinished):
                path.mkdir(parents=True, exist_ok=True, mode=0o700)
        except OSError as error:
            raise SettingsError(f"data folder {folder} cannot be used: {error.strerror or error}") from error

    def path(self, sha256: str) -> Path:
        """Where a file lies."""
        if _CHECKSUM.fullmatch(sha256) is None:
            raise ValueError(f"{sha256!r} is no checksum")
        return self._folder / sha256[:2] / sha256

    def read(self, sha256: str) -> bytes:
        """The bytes of a file."""
        return self.path(sha256).read_bytes()

    def write(self, data: bytes) -> str:
        """Keep the bytes and answer with their checksum; after it returns they outlive a crash."""
        sha256 = hashlib.sha256(data).hexdigest()
        target = self.path(sha256)
        if target.is_file() and target.stat().st_size == len(data):
            return sha256
        target.parent.mkdir(exist_ok=True, mode=0o700)
        staged = self._unfinished / secrets.token_hex(16)
        try:
            with staged.open("xb") as stream:
                stream.write(data)
                stream.flush()
                os.fsync(stream.fileno())
            os.replace(staged, target)
        finally:
            staged.unlink(missing_ok=True)
        return sha256

    def remove(self, checksums: Iterable[str]) -> None:
        """Delete files that nothing refers to any more."""
        for sha256 in checksums:
            self.path(sha256).unlink(missing_ok=True)

    def sweep(self, known: Iterable[str]) -> int:
        """Delete what a crash left behind: half-written files, and whole ones that no row refers to."""
        kept, removed = set(known), 0
        for path in [*self._unfinished.iterdir(), *self._folder.glob("??/*")]:
            if path.name not in kept:
                path.unlink(missing_ok=True)
                removed += 1
        return removed
