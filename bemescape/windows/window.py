"""Windows: the absorbing parts of the wall, as the user names them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from bemescape.errors import WindowError
from bemescape.units import Quantity, length_um, permeability_um_s

__all__ = ["Disc", "Labels", "Window"]


@dataclass(frozen=True)
class Disc:
    """The wall within a straight-line distance `radius_um` of `centre_um`, connected to the wall point nearest to it."""

    centre_um: tuple[float, float, float]
    radius_um: float


@dataclass(frozen=True)
class Labels:
    """The faces whose entry in a face or vertex array of the mesh file equals `value`."""

    array: str
    value: float


@dataclass(frozen=True)
class Window:
    """A named opening.

    Attributes
    ----------
    name : str
        Unique among the windows of a case.
    shape : Disc or Labels
        Which part of the wall it takes.
    permeability_um_s : float
        κ in µm/s; infinite for a perfectly absorbing window.

    Examples
    --------
    >>> Window.disc("neck", centre=(0.1, 0.0, -0.62), radius="60 nm").shape.radius_um
    0.06
    """

    name: str
    shape: Disc | Labels
    permeability_um_s: float = math.inf

    def __post_init__(self) -> None:
        if not self.name.strip():
            raise WindowError("a window has an empty name; give it a short name, such as 'neck'")

    @classmethod
    def disc(
        cls, name: str, *, centre: Sequence[float], radius: Quantity, permeability: Quantity | None = None
    ) -> Window:
        """The wall within `radius` (straight line) of `centre`, (3,) in µm, connected to the nearest wall point.

        Raises
        ------
        WindowError
            The centre is not three finite numbers.
        SettingsError
            The radius or the permeability is not a positive quantity.
        """
        place = np.asarray(centre, dtype=np.float64)
        if place.shape != (3,) or not np.isfinite(place).all():
            raise WindowError(
                f"the centre of window {name!r} is {centre!r}; it must be three finite numbers in µm"
            )
        x, y, z = (float(value) for value in place)
        radius_um = length_um(radius, f"radius of window {name!r}")
        return cls(name, Disc((x, y, z), radius_um), permeability_um_s(permeability))

    @classmethod
    def labels(cls, name: str, *, array: str, value: Any, permeability: Quantity | None = None) -> Window:
        """The faces with `value` in the face array `array`, or whose three corners carry it in a vertex array."""
        return cls(name, Labels(array, float(value)), permeability_um_s(permeability))
