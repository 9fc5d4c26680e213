"""Quantities with units: parsing what a person types and printing what a person reads.

Inside the package everything is a plain float in µm, s, µm²/s and µm/s. A plain number given by a caller is
taken to be in these units already.
"""

from __future__ import annotations

import math
import numbers
import re
from functools import lru_cache
from typing import Any

import numpy as np
import pint

from bemescape.errors import SettingsError

__all__ = [
    "Quantity",
    "density_per_um2",
    "diffusion_um2_s",
    "format_length",
    "format_time",
    "fraction",
    "length_um",
    "permeability_um_s",
    "quantity",
    "time_scale",
    "unit_scale_um",
]

#: Anything that these functions accept as a quantity.
Quantity = pint.Quantity[Any] | str | float


@lru_cache(maxsize=1)
def _registry() -> pint.UnitRegistry[Any]:
    return pint.UnitRegistry(cache_folder=None)


def quantity(value: float, unit: str) -> pint.Quantity[Any]:
    """`value` in `unit` as a pint quantity.

    >>> print(quantity(2.5, "s").to("ms"))
    2500.0 millisecond
    """
    return _registry().Quantity(value, unit)


# What a person may type: at most one number, then a product of units with small whole exponents. Anything
# else is refused before pint sees it: pint would read "1,5 nm" as 15 nm and "1 2 nm" as 2 nm, and would work
# on "9**9**9 nm" for ever.
_LONGEST_TEXT = 60
_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_FACTOR = r"[A-Za-zµμÅ_]+(?:(?:\^|\*\*)?-?\d{1,2}|⁻?[¹²³⁴-⁹])?"
_TEXT = re.compile(rf"(?P<number>{_NUMBER})?\s*(?P<unit>{_FACTOR}(?:\s*[*/·]\s*{_FACTOR}|\s+{_FACTOR})*)?", re.ASCII)
_PER_AREA = re.compile(rf"(?P<number>{_NUMBER})\s*/\s*(?P<area>[^\s\d].{{0,{_LONGEST_TEXT}}})", re.ASCII)
_BARE_EXPONENT = re.compile(r"(?<=[A-Za-zµμÅ])(?=-?\d)")


def _parsed(text: str, *, bare_unit: bool) -> pint.Quantity[Any]:
    """Text as a quantity; ValueError where it does not follow the grammar above."""
    text = text.strip()
    match = _TEXT.fullmatch(text) if len(text) <= _LONGEST_TEXT else None
    if match is None or (match["number"] is None and not bare_unit):
        raise ValueError(text)
    unit = _BARE_EXPONENT.sub("^", match["unit"] or "").replace("·", "*")
    return quantity(float(match["number"] or 1.0), unit)


# A study says the same few quantities for each of its shapes, and pint takes about a millisecond.
@lru_cache(maxsize=4096)
def _text_in(unit: str, text: str, *, bare_unit: bool) -> float:
    return _in(unit, _parsed(text, bare_unit=bare_unit))


def _in(unit: str, parsed: pint.Quantity[Any]) -> float:
    """Magnitude in `unit`; a quantity without a unit is dimensionless and refused, since its unit would be a guess."""
    # Fifteen digits: 60 nm is 0.06 µm, not 0.060000000000000005.
    return float(f"{float(parsed.to(unit).magnitude):.15g}")


def _magnitude(value: object, unit: str, what: str, example: str, *, bare_unit: bool = False) -> float:
    if isinstance(value, bool | np.bool_):
        raise SettingsError(f"{what} is {value}, not a quantity; write it like {example!r}")
    try:
        if isinstance(value, numbers.Real):
            return float(value)
        if isinstance(value, str):
            return _text_in(unit, value, bare_unit=bare_unit)
        if isinstance(value, pint.Quantity):
            # Rebuilt, since a quantity of another registry cannot be converted by this one.
            return _in(unit, quantity(float(value.magnitude), f"{value.units:D}"))
        raise TypeError(type(value).__name__)
    except (pint.PintError, ValueError, TypeError, AttributeError, ArithmeticError, LookupError) as error:
        kind = f"quantity in {unit}" if unit else "plain number or percentage"
        raise SettingsError(f"{what} {_shortened(value)} is not a {kind}; write it like {example!r}") from error


def _shortened(value: object) -> str:
    text = repr(value)
    return text if len(text) <= _LONGEST_TEXT else f"{text[:40]}..."


def _positive(number: float, what: str, unit: str) -> float:
    if not (math.isfinite(number) and number > 0.0):
        raise SettingsError(f"{what} is {number:g} {unit}; it must be a finite number above 0")
    return number


def length_um(value: Quantity, what: str = "length") -> float:
    """Length in µm, above 0.

    >>> length_um("60 nm")
    0.06
    """
    number = _magnitude(value, "um", what, "60 nm")
    return _positive(number, what, "µm")


def diffusion_um2_s(value: Quantity) -> float:
    """Diffusion coefficient in µm²/s, above 0.

    >>> diffusion_um2_s("2e-7 cm^2/s")
    20.0
    """
    number = _magnitude(value, "um^2/s", "diffusion coefficient", "20 um^2/s")
    return _positive(number, "diffusion coefficient", "µm²/s")


def density_per_um2(value: Quantity, what: str = "density") -> float:
    """Number per area in 1/µm², above 0.

    >>> density_per_um2("3 /um^2"), density_per_um2("3e-6 nm^-2")
    (3.0, 3.0)
    """
    if isinstance(value, str) and (match := _PER_AREA.fullmatch(value.strip())):
        # A slash right after the number, where the grammar of quantities wants a unit.
        area = _magnitude(match["area"], "um^2", f"{what} {_shortened(value)}: area", "3 /um^2", bare_unit=True)
        return _positive(float(match["number"]) / _positive(area, what, "µm²"), what, "per µm²")
    number_per_um2 = _magnitude(value, "um^-2", what, "3 /um^2")
    return _positive(number_per_um2, what, "per µm²")


def permeability_um_s(value: Quantity | None) -> float:
    """Permeability in µm/s, above 0; infinite (perfectly absorbing) for None, "inf" or infinity.

    >>> permeability_um_s("1 mm/s"), permeability_um_s(None)
    (1000.0, inf)
    """
    if value is None or (isinstance(value, str) and value.strip().lower() in {"inf", "infinite"}):
        return math.inf
    if isinstance(value, float) and value == math.inf:
        return math.inf
    number = _magnitude(value, "um/s", "permeability", "10 um/s")
    return _positive(number, "permeability", "µm/s")


def fraction(value: Quantity, what: str = "fraction") -> float:
    """A dimensionless number between 0 and 1, such as "0.5 %" or 0.005.

    >>> fraction("0.5 %")
    0.005
    """
    if isinstance(value, str) and value.rstrip().endswith("%"):
        value = f"{value.rstrip()[:-1].rstrip()} percent"
    number = _magnitude(value, "", what, "0.5 %")
    if not 0.0 < number < 1.0:
        raise SettingsError(f"{what} is {number:g}; it must lie between 0 and 1 (0 % and 100 %)")
    return number


def unit_scale_um(unit: Quantity) -> float:
    """µm per unit of a file, from a name ("nm") or a length ("4 nm", for voxel units).

    >>> unit_scale_um("nm"), unit_scale_um("4 nm")
    (0.001, 0.004)
    """
    number = _magnitude(unit, "um", "unit of the file", "nm", bare_unit=True)
    return _positive(number, "unit of the file", "µm")


_TIME_UNITS = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"))


def time_scale(seconds: float) -> tuple[float, str]:
    """Factor and name of the unit in which a time of this size reads best.

    >>> time_scale(0.012)
    (0.001, 'ms')
    """
    size = abs(seconds)
    for factor, name in _TIME_UNITS:
        if size >= factor:
            return factor, name
    return _TIME_UNITS[-1] if size > 0.0 else _TIME_UNITS[0]


def format_time(seconds: float, digits: int = 4) -> str:
    """A time as text in s, ms, µs or ns.

    >>> format_time(0.01234567)
    '12.35 ms'
    """
    factor, name = time_scale(seconds)
    return f"{seconds / factor:.{digits}g} {name}"


def format_length(micrometres: float, digits: int = 3) -> str:
    """A length as text in µm or nm.

    >>> format_length(0.06)
    '60 nm'
    """
    if 0.0 < abs(micrometres) < 1.0:
        return f"{micrometres * 1e3:.{digits}g} nm"
    return f"{micrometres:.{digits}g} µm"
