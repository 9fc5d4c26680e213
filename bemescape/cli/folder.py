"""The folder that a command writes into: checked before the work, not after it."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

from bemescape.errors import SettingsError

__all__ = ["refuse_foreign_folder"]


def refuse_foreign_folder(folder: Path, is_own: Callable[[Path], bool]) -> None:
    """Answers go into a new or empty folder, or replace earlier ones, which `is_own` recognises.

    Raises
    ------
    SettingsError
        The folder cannot be made or used, or holds other files.
    """
    from bemescape.results.store import STAGING

    try:
        if folder.exists() and not folder.is_dir():
            raise SettingsError(f"{folder} is a file, not a folder; give another one with --out")
        ground = next((path for path in (folder, *folder.parents) if path.exists()), Path())
        if not (ground.is_dir() and os.access(ground, os.W_OK)):
            raise SettingsError(f"no folder can be made in {ground}; give another one with --out")
        if not folder.exists() or is_own(folder):
            return
        others = [entry.name for entry in folder.iterdir() if not entry.name.startswith(STAGING)]
    except (OSError, ValueError) as error:
        if isinstance(error, SettingsError):
            raise
        reason = getattr(error, "strerror", None) or "no such name can exist"
        raise SettingsError(
            f"folder {str(folder)[:200]!r} cannot be used: {reason}; give another one with --out"
        ) from error
    if others:
        raise SettingsError(
            f"folder {folder} holds other files ({sorted(others)[0]!r}, for one) and no earlier result; "
            "give a new or empty folder with --out"
        )
