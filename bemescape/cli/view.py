"""`bemescape view RESULT`: a desktop window on a saved result, or a picture of it."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from bemescape.errors import SettingsError

__all__ = ["view"]


class Side(StrEnum):
    """The standard views."""

    FRONT = "front"
    SIDE = "side"
    TOP = "top"


def view(
    result: Annotated[Path, typer.Argument(help="Folder that a solve wrote.")],
    *,
    png: Annotated[
        Path | None, typer.Option(help="Render into this file instead of opening a window; needs no display.")
    ] = None,
    side: Annotated[Side, typer.Option("--view", help="Standard view to begin with.")] = Side.FRONT,
    cut: Annotated[
        bool, typer.Option("--cut", help="With --png: cut the shape open and show the time inside.")
    ] = False,
) -> int:
    """Show the time on the wall: rotate, clip, toggle slow regions, click for the value."""
    from bemescape.results.store import load_result

    if png is not None and (png.suffix.lower() != ".png" or not png.parent.is_dir() or png.is_dir()):
        raise SettingsError(f"--png is {png}; give a file that ends in .png in an existing folder")
    if png is None and cut:
        raise SettingsError("--cut needs --png FILE; in the desktop window, move the clip plane instead")
    loaded = load_result(result)
    if png is None:
        from bemescape.viz.window import open_window

        open_window(loaded, view=side.value)
        return 0
    from bemescape.viz.pictures import render_png

    render_png(loaded, png, view=side.value, cut=cut)
    typer.echo(str(png))
    return 0
