"""A handful of results in one picture, with one colour scale and one size of a micrometre."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure
from matplotlib.image import imread

from bemescape.errors import SettingsError
from bemescape.units import format_time

from .scales import map_colours, round_ticks
from .thumbnails import common_scale, picture_width_um, thumbnails

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["save_side_by_side"]

_TILE = (720, 540)


def save_side_by_side(results: Sequence[EscapeResult], names: Sequence[str], path: str | Path) -> Path:
    """Draw every result beside the others into a PNG file, slow regions outlined.

    Raises
    ------
    SettingsError
        The file cannot be written.
    """
    scale = common_scale([result.summary.slowest_time_s for result in results])
    width_um = max(picture_width_um(result, _TILE) for result in results)
    columns = min(4, math.ceil(math.sqrt(len(results))))
    rows = math.ceil(len(results) / columns)
    figure = Figure(figsize=(4.2 * columns, 3.6 * rows + 0.9), dpi=120, layout="constrained")
    tiles = figure.subplots(rows + 1, columns, squeeze=False, height_ratios=[*[1.0] * rows, 0.05])
    for axes in tiles.ravel():
        axes.axis("off")
    for axes, result, name in zip(tiles[:rows].ravel(), results, names, strict=False):
        picture = thumbnails(result, [scale], size=_TILE, slow=True, width_um=width_um)[0]
        axes.imshow(imread(io.BytesIO(picture)))
        axes.set_title(
            f"{name[-40:]}\n{format_time(result.mean_time_s)} ± {100.0 * result.relative_error:.2g} %", fontsize=10
        )
    for axes in tiles[-1, 1:]:
        axes.remove()
    bar = figure.add_subplot(tiles[-1, 0].get_gridspec()[-1, :])
    tiles[-1, 0].remove()
    steps = np.geomspace(scale.low, scale.high, 256) if scale.log else np.linspace(scale.low, scale.high, 256)
    bar.imshow(map_colours(scale, steps)[None], aspect="auto", extent=(0.0, 1.0, 0.0, 1.0))
    ticks = np.array(round_ticks(scale.low / scale.factor, scale.high / scale.factor, log=scale.log)) * scale.factor
    bar.set_xticks(scale.position(ticks), [scale.text(float(tick)) for tick in ticks])
    bar.set_yticks([])
    bar.set_xlabel(f"{scale.label}; light blue: windows; red: slowest 10 % of the wall", fontsize=9)
    path = Path(path)
    try:
        figure.savefig(path, facecolor="white")
    except OSError as error:
        raise SettingsError(
            f"the picture {path} cannot be written ({error.strerror or error}); name another place"
        ) from error
    return path
