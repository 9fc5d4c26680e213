"""PNG files of a result, drawn without a display."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, get_args

from matplotlib.image import imsave

from bemescape.errors import SettingsError

from .closeups import windows_scene
from .parts import Scene
from .plots import convergence_figure, spread_figure, survival_figure
from .scenes import cutaway_scene, wall_scene
from .shapes import ViewName

if TYPE_CHECKING:
    import pyvista as pv
    from matplotlib.figure import Figure

    from bemescape.results.result import EscapeResult

__all__ = ["render_png", "save_pictures"]

_LEAST_PIXELS, _MOST_PIXELS = 200, 8000


def save_pictures(result: EscapeResult, folder: str | Path, *, size: tuple[int, int] = (1600, 1200)) -> list[Path]:
    """Write every picture of `result` into `folder` and hand out their paths.

    `view_front.png`, `view_side.png`, `view_top.png`: time on the wall. `cutaway.png`: time inside.
    `windows.png`: exit density. `spread.png`: time over the wall's area and against the distance to a window.
    `convergence.png`: mean time of every resolution. `survival.png`: the part still inside, where the result
    holds the second moment.

    Parameters
    ----------
    result : EscapeResult
        What to draw.
    folder : path
        Made if it does not exist.
    size : (int, int)
        Width and height of the rendered pictures in pixels, 200 to 8000.

    Raises
    ------
    SettingsError
        The size is out of its limits, or the folder cannot be written.
    """
    folder = Path(folder)
    _check_size(size)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise SettingsError(f"the folder {folder} cannot be made ({error.strerror}); name another") from error
    scene = Scene(result)
    plotters: dict[str, Callable[[], pv.Plotter]] = {
        "view_front.png": lambda: wall_scene(result, "front", size=size, scene=scene),
        "view_side.png": lambda: wall_scene(result, "side", size=size, scene=scene),
        "view_top.png": lambda: wall_scene(result, "top", size=size, scene=scene),
        "cutaway.png": lambda: cutaway_scene(result, size=size, scene=scene),
        "windows.png": lambda: windows_scene(result, size=size, scene=scene),
    }
    figures: dict[str, Callable[[EscapeResult], Figure]] = {
        "spread.png": spread_figure,
        "convergence.png": convergence_figure,
    }
    if result.spread is not None:
        figures["survival.png"] = survival_figure
    written = []
    for name, make in plotters.items():
        written.append(_shoot(make(), folder / name))
    for name, draw in figures.items():
        path = folder / name
        with _writing(path):
            draw(result).savefig(path, facecolor="white")
        written.append(path)
    return written


def render_png(
    result: EscapeResult,
    path: str | Path,
    *,
    view: str = "front",
    cut: bool = False,
    size: tuple[int, int] = (1600, 1200),
) -> Path:
    """Write one picture of `result` as a PNG file.

    Parameters
    ----------
    result : EscapeResult
        What to draw.
    path : path
        A file name that ends in ".png"; its folder must exist.
    view : {"front", "side", "top"}
        Which principal axis to look along; the cut-away has a view of its own.
    cut : bool
        Cut the shape open and show the time inside.
    size : (int, int)
        Width and height in pixels, 200 to 8000.

    Raises
    ------
    SettingsError
        The view is unknown, the size is out of its limits, or the file cannot be written.
    """
    path = Path(path)
    _check_size(size)
    if path.suffix.lower() != ".png":
        raise SettingsError(f"the picture {path.name!r} does not end in '.png'; PNG is the one format drawn")
    if view not in get_args(ViewName):
        raise SettingsError(f"there is no view {view!r}; take one of {', '.join(get_args(ViewName))}")
    if not path.parent.is_dir():
        raise SettingsError(f"the folder {path.parent} of the picture does not exist; make it first")
    if cut:
        return _shoot(cutaway_scene(result, size=size), path)
    known: ViewName = next(name for name in get_args(ViewName) if name == view)
    return _shoot(wall_scene(result, known, size=size), path)


def _check_size(size: tuple[int, int]) -> None:
    if len(size) != 2 or not all(_LEAST_PIXELS <= side <= _MOST_PIXELS for side in size):
        raise SettingsError(
            f"a picture of {' x '.join(str(side) for side in size)} pixels cannot be drawn; "
            f"both sides must lie between {_LEAST_PIXELS} and {_MOST_PIXELS}"
        )


class _writing:
    """Turns a failed write of `path` into a sentence."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        if isinstance(error, OSError):
            raise SettingsError(
                f"the picture {self.path} cannot be written ({error.strerror or error}); name another place"
            ) from error


def _shoot(plotter: pv.Plotter, path: Path) -> Path:
    try:
        with _writing(path):
            imsave(path, plotter.screenshot(return_img=True), format="png")
    finally:
        plotter.close()
    return path
