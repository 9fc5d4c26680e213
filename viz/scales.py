"""Colours, colour limits, ticks and scale-bar lengths: what a reader needs, without a renderer."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Literal

import numpy as np
from matplotlib import colormaps
from numpy.typing import NDArray

from bemescape.units import time_scale

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = [
    "BACKGROUND",
    "INK",
    "MAP_NAME",
    "OUTLINE",
    "WINDOW",
    "ColourScale",
    "bar_length_um",
    "density_scale",
    "map_colours",
    "round_ticks",
    "tick_label",
    "time_colours",
]

Floats = NDArray[np.float64]

#: Perceptually uniform, and even in lightness for every kind of colour vision.
MAP_NAME = "cividis"
#: Exit density has another map, so that nobody reads it as a time.
DENSITY_MAP_NAME = "magma"
#: Flat colour of windows: far from every colour of the map, also to colour-blind eyes (a test measures it).
WINDOW = "#35d0ff"
#: Text and rims.
INK = "#101418"
#: Outline of slow regions, drawn on the bright end of the map.
OUTLINE = "#b3001b"
BACKGROUND = "#ffffff"

# Below this ratio of the fast end to the slow end, a scale that starts at 0 shows the differences well.
_NEARLY_EVEN = 0.35
# Part of the wall that may be faster than the start of the scale and is drawn in its first colour.
_CLIPPED_PART = 0.02
_LOG_DECADES = 4.0


@dataclass(frozen=True)
class ColourScale:
    """What a colour means.

    Attributes
    ----------
    low, high : float
        Values at the two ends, in the unit of the data.
    factor : float
        Data value of one printed unit (1e-3 for ms).
    label : str
        Title of the colour bar, with the printed unit.
    log : bool
        Logarithmic between the ends.
    clipped, clipped_above : bool
        Smaller or larger values exist and are drawn in the first or the last colour.
    map_name : str
        Name of the matplotlib map.
    """

    low: float
    high: float
    factor: float
    label: str
    log: bool = False
    clipped: bool = False
    clipped_above: bool = False
    map_name: str = MAP_NAME

    def position(self, values: Floats) -> Floats:
        """Place of `values` on the scale, 0 to 1 (clipped)."""
        inside = np.clip(values, self.low, self.high)
        if self.log:
            return np.asarray(np.log(inside / self.low) / math.log(self.high / self.low))
        return np.asarray((inside - self.low) / (self.high - self.low))

    @property
    def ticks(self) -> tuple[float, ...]:
        """Round values between the ends, in the unit of the data."""
        ticks = round_ticks(self.low / self.factor, self.high / self.factor, log=self.log)
        return tuple(tick * self.factor for tick in ticks)

    def text(self, value: float) -> str:
        """`value` in the printed unit."""
        return tick_label(value / self.factor)


@lru_cache(maxsize=8)
def _table(map_name: str) -> NDArray[np.uint8]:
    steps = np.linspace(0.0, 1.0, 256)
    if map_name == DENSITY_MAP_NAME:
        # The ends would vanish in black rims and on a white page.
        steps = np.linspace(0.12, 0.97, 256)
    return np.asarray(np.round(colormaps[map_name](steps)[:, :3] * 255.0), dtype=np.uint8)


def map_colours(scale: ColourScale, values: Floats) -> NDArray[np.uint8]:
    """Colours (k, 3), 0 to 255, of `values` (k,) on `scale`."""
    table = _table(scale.map_name)
    index = np.nan_to_num(np.round(scale.position(values) * (len(table) - 1)))
    return np.asarray(table[index.astype(np.int64)])


def time_colours(result: EscapeResult, mode: Literal["linear", "log"] = "linear") -> ColourScale:
    """The scale of the mean escape time on the wall of `result`.

    A linear scale starts at 0, unless nearly all of the wall is almost equally slow, as with one small
    window: then it starts at the fastest 2 % of the wall's area, and says so (`clipped`).
    """
    wall = result.panel_window < 0
    times = result.panel_time_s[wall]
    high = max(float(times.max(initial=0.0)), 1e-300)
    factor, unit = time_scale(high)
    label = f"mean escape time ({unit})"
    if mode == "log":
        positive = times[times > 0.0]
        fastest = float(positive.min(initial=high))
        low = max(fastest, high * 10.0**-_LOG_DECADES)
        if low >= 0.999 * high:
            low = 0.5 * high
        return ColourScale(low, high, factor, label, log=True, clipped=fastest < low)
    order = np.argsort(times)
    part = np.cumsum(result.panel_areas_um2[wall][order])
    low = float(times[order][np.searchsorted(part, _CLIPPED_PART * part[-1])]) if len(part) else 0.0
    if low < _NEARLY_EVEN * high:
        return ColourScale(0.0, high, factor, label)
    if low >= 0.999 * high:
        low = 0.9 * high
    return ColourScale(low, high, factor, label, clipped=float(times.min()) < low)


def density_scale(result: EscapeResult) -> ColourScale:
    """The logarithmic scale of the exit density on the windows of `result`.

    It spans all but the outermost 0.5 % of the windows' area at either end: the density grows without bound
    towards a rim, so its largest value only tells how fine the panels are.
    """
    label = "exits per µm² (part of all)"
    inside = (result.panel_window >= 0) & (result.panel_exit_density_per_um2 > 0.0)
    values = result.panel_exit_density_per_um2[inside]
    if not len(values):
        return ColourScale(0.1, 1.0, 1.0, label, log=True, map_name=DENSITY_MAP_NAME)
    order = np.argsort(values)
    part = np.cumsum(result.panel_areas_um2[inside][order])
    low, high = values[order][np.minimum(np.searchsorted(part, np.array([0.005, 0.995]) * part[-1]), len(values) - 1)]
    low = max(min(float(low), 0.5 * float(high)), float(high) * 10.0**-_LOG_DECADES)
    return ColourScale(
        low,
        float(high),
        1.0,
        label,
        log=True,
        clipped=float(values.min()) < low,
        clipped_above=float(values.max()) > high,
        map_name=DENSITY_MAP_NAME,
    )


def round_ticks(low: float, high: float, *, log: bool = False, wanted: int = 6) -> tuple[float, ...]:
    """Round values from `low` to `high`: steps of 1, 2 or 5 times a power of ten.

    >>> round_ticks(0.0, 12.3)
    (0.0, 2.0, 4.0, 6.0, 8.0, 10.0, 12.0)
    >>> round_ticks(0.02, 3.0, log=True)
    (0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0)
    """
    if log and high / low > 4.0:
        first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
        decades = range(first, last + 1)
        digits = (1.0, 2.0, 5.0) if high / low < 300.0 else (1.0,)
        series = [digit * 10.0**power for power in decades for digit in digits]
    else:
        step = _round_down((high - low) / wanted * 1.5)
        series = [step * k for k in range(math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9) + 1)]
    slack = 1e-9 * abs(high)
    return tuple(float(f"{tick:.12g}") for tick in series if low - slack <= tick <= high + slack)


def tick_label(value: float) -> str:
    """A round number as short text.

    >>> tick_label(0.05), tick_label(200.0), tick_label(3e-7), tick_label(20000.0)
    ('0.05', '200', '3·10⁻⁷', '2·10⁴')
    """
    if value == 0.0 or 1e-3 <= abs(value) < 1e4:
        return f"{value:.6g}"
    power = math.floor(math.log10(abs(value)) + 1e-9)
    front = f"{value / 10.0**power:.3g}"
    exponent = str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
    return f"10{exponent}" if front == "1" else f"{front}·10{exponent}"


def bar_length_um(view_width_um: float, part: float = 0.25) -> float:
    """Longest of 1, 2, 5 times a power of ten that takes at most `part` of the view's width.

    >>> bar_length_um(10.0), bar_length_um(1.0), bar_length_um(0.7)
    (2.0, 0.2, 0.1)
    """
    return _round_down(view_width_um * part)


def _round_down(value: float) -> float:
    power = math.floor(math.log10(value))
    for digit in (5.0, 2.0, 1.0):
        rounded = float(f"{digit:.0f}e{power}")
        if rounded <= value * (1.0 + 1e-9):
            return rounded
    return float(f"5e{power - 1}")
