"""Pictures of a result: scenes, PNG files, the report and the desktop window.

The drawing libraries are loaded at the first use of a name, so that importing this package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .closeups import windows_scene
    from .pictures import render_png, save_pictures
    from .report import write_report
    from .scenes import cutaway_scene, wall_scene
    from .window import open_window

__all__ = [
    "cutaway_scene",
    "open_window",
    "render_png",
    "save_pictures",
    "wall_scene",
    "windows_scene",
    "write_report",
]

_HOME = {
    "cutaway_scene": "scenes",
    "open_window": "window",
    "render_png": "pictures",
    "save_pictures": "pictures",
    "wall_scene": "scenes",
    "windows_scene": "closeups",
    "write_report": "report",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return sorted(__all__)
