"""Windows: the absorbing parts of the wall, as the user names them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError, WindowError
from bemescape.surface.surface import Surface
from bemescape.units import Quantity, density_per_um2, length_um, permeability_um_s

__all__ = ["Disc", "Labels", "Lid", "Near", "Points", "Scatter", "Shape", "Window"]

Floats = NDArray[np.float64]
Position = tuple[float, float, float]

#: A pore's position may lie this many radii off the wall, unless the caller sets a limit.
FARTHEST_SNAP = 2.0


@dataclass(frozen=True)
class Disc:
    """The wall within a straight-line distance `radius_um` of `centre_um`, connected to the nearest wall point."""

    centre_um: Position
    radius_um: float


@dataclass(frozen=True)
class Labels:
    """The faces whose entry in a face or vertex array of the mesh file equals `value`."""

    array: str
    value: float


@dataclass(frozen=True, eq=False)
class Near:
    """The wall closer than `distance_um` to another mesh: a contact patch, of one or several pieces."""

    other: Surface
    distance_um: float


@dataclass(frozen=True)
class Lid:
    """A flat lid that closes the surface where a plane cuts it; what `normal` points to is cut off.

    `near_um` picks one among several openings in the plane; `point_um` does where it is None.
    """

    point_um: Position
    normal: Position
    near_um: Position | None = None


@dataclass(frozen=True, eq=False)
class Points:
    """Round pores of one radius, at the points of the wall nearest to `positions_um` (k, 3).

    `lines` are the lines of the file that the positions come from; empty if they come from none.
    """

    positions_um: Floats
    radius_um: float
    farthest_um: float
    lines: tuple[int, ...] = ()


@dataclass(frozen=True)
class Scatter:
    """Round pores of one radius, placed at random with rims at least `gap_um` apart.

    Either `count` or `density_per_um2` is None.
    """

    count: int | None
    density_per_um2: float | None
    radius_um: float
    gap_um: float
    seed: int


Shape = Disc | Labels | Near | Lid | Points | Scatter


@dataclass(frozen=True)
class Window:
    """A named opening, or a group of pores that share a name and are numbered name[1], name[2] and so on.

    Attributes
    ----------
    name : str
        Unique among the windows of a case.
    shape : Disc, Labels, Near, Lid, Points or Scatter
        Which part of the wall it takes.
    permeability_um_s : float
        κ in µm/s; infinite for a perfectly absorbing window.
    compact : bool or None
        Of round windows: True, solved without panels of its own, as a compact pore; False, with them; None, decided by
        how many there are and how small.

    Examples
    --------
    >>> Window.disc("neck", centre=(0.1, 0.0, -0.62), radius="60 nm").shape.radius_um
    0.06
    """

    name: str
    shape: Shape
    permeability_um_s: float = math.inf
    compact: bool | None = None

    def __post_init__(self) -> None:
        if self.compact not in (None, True, False):
            raise SettingsError(f"compact of window {self.name!r} is {self.compact!r}; it must be True, False or None")
        if not self.name.strip():
            raise WindowError("a window has an empty name; give it a short name, such as 'neck'")

    @classmethod
    def disc(
        cls,
        name: str,
        *,
        centre: Sequence[float],
        radius: Quantity,
        permeability: Quantity | None = None,
        compact: bool | None = None,
    ) -> Window:
        """The wall within `radius` (straight line) of `centre`, (3,) in µm, connected to the nearest wall point.

        `compact` says whether it is solved as a compact pore; with few windows it is not, unless asked for.

        Raises
        ------
        WindowError
            The centre is not three finite numbers.
        SettingsError
            The radius or the permeability is not a positive quantity.
        """
        place = _position(centre, f"the centre of window {name!r}")
        disc = Disc(place, length_um(radius, f"radius of window {name!r}"))
        return cls(name, disc, permeability_um_s(permeability), compact)

    @classmethod
    def labels(cls, name: str, *, array: str, value: Any, permeability: Quantity | None = None) -> Window:
        """The faces with `value` in the face array `array`, or whose three corners carry it in a vertex array."""
        return cls(name, Labels(array, float(value)), permeability_um_s(permeability))

    @classmethod
    def near(
        cls,
        name: str,
        *,
        surface: Surface | str | Path,
        distance: Quantity,
        unit: Quantity | Sequence[Quantity] | None = None,
        permeability: Quantity | None = None,
    ) -> Window:
        """The wall closer than `distance` (straight line) to another mesh: a contact patch.

        Parameters
        ----------
        name : str
        surface : Surface or path
            The other mesh, in the same frame as the wall. It may be open, such as a sheet.
        distance : length
            Every part of the wall that is closer belongs to the window, in one piece or several.
        unit : unit of the file
            As for `read_surface`; only where `surface` is a path.
        permeability : quantity, optional

        Raises
        ------
        SettingsError
            A quantity is wrong, or the unit of the file is missing.
        SurfaceError
            The file cannot be read.
        WindowError
            The other mesh has no faces.
        """
        distance_um = length_um(distance, f"distance of window {name!r}")
        if isinstance(surface, Surface):
            if unit is not None:
                raise SettingsError(
                    f"window {name!r}: a Surface is in µm already; leave out unit={unit!r}, or give the file instead"
                )
            other = surface
        else:
            from bemescape.surface.read import read_unhealed

            other = read_unhealed(surface, unit=unit)
        if len(other.faces) == 0:
            raise WindowError(f"window {name!r}: the other mesh {other.name!r} has no faces; nothing can be near it")
        return cls(name, Near(other, distance_um), permeability_um_s(permeability))

    @classmethod
    def lid(
        cls,
        name: str,
        *,
        point: Sequence[float],
        normal: Sequence[float],
        near: Sequence[float] | None = None,
        permeability: Quantity | None = None,
    ) -> Window:
        """A flat lid where the plane through `point` cuts the surface: the mouth of a neck.

        What lies beyond the lid, where `normal` points to, is cut off.

        Parameters
        ----------
        name : str
        point : (3,) µm
            A point of the plane; where the plane makes several openings, the one that holds this point is closed.
        normal : (3,)
            Direction of any length, from the kept side to the one that is cut off.
        near : (3,) µm, optional
            Close the opening whose rim or inside is nearest to this point instead.
        permeability : quantity, optional

        Raises
        ------
        WindowError
            A point is not three finite numbers, or the normal has no direction.
        """
        place = _position(point, f"the point of window {name!r}")
        direction = np.array(_position(normal, f"the normal of window {name!r}"))
        largest = np.abs(direction).max()
        if largest == 0.0:
            raise WindowError(f"the normal of window {name!r} is (0, 0, 0), which has no direction; point it outwards")
        direction /= largest
        x, y, z = (float(value) for value in direction / np.linalg.norm(direction))
        pick = None if near is None else _position(near, f"the point near window {name!r}")
        return cls(name, Lid(place, (x, y, z), pick), permeability_um_s(permeability))

    @classmethod
    def points(
        cls,
        name: str,
        *,
        positions: Sequence[Sequence[float]] | Floats | str | Path,
        radius: Quantity,
        unit: Quantity | Sequence[Quantity] | None = None,
        farthest: Quantity | None = None,
        lines: Sequence[int] = (),
        permeability: Quantity | None = None,
        compact: bool | None = None,
    ) -> Window:
        """Round pores at given positions, moved to the nearest point of the wall.

        Parameters
        ----------
        name : str
            The pores become windows of their own, called name[1], name[2] and so on in the order of the positions.
        positions : (k, 3) µm, or path
            Or a CSV file with the columns x, y, z in the length `unit`, or in that of a second row of units.
        radius : length
        unit : unit of the file
            A name, a length, or one for each axis; only where `positions` is a path.
        farthest : length, optional
            A position further off the wall is refused; two radii by default.
        lines : sequence of int, optional
            Lines of a file that the positions come from, for messages; found out where `positions` is a path.
        permeability : quantity, optional
            Of each pore.
        compact : bool, optional
            Solve each pore as a compact pore, or with panels of its own; by default many small ones are compact.

        Raises
        ------
        WindowError
            The positions are not (k, 3) finite numbers.
        SettingsError
            A quantity or the file is wrong; the message names the line.
        """
        radius_um = length_um(radius, f"radius of window {name!r}")
        limit = FARTHEST_SNAP * radius_um if farthest is None else length_um(farthest, f"farthest of window {name!r}")
        if isinstance(positions, str | Path):
            from bemescape.windows.positions import read_positions

            places, lines = read_positions(positions, unit=unit)
        else:
            if unit is not None:
                raise SettingsError(f"window {name!r}: positions given as numbers are in µm; leave out unit={unit!r}")
            places = _positions(positions, name)
        places.setflags(write=False)
        return cls(name, Points(places, radius_um, limit, tuple(lines)), permeability_um_s(permeability), compact)

    @classmethod
    def scatter(
        cls,
        name: str,
        *,
        radius: Quantity,
        count: int | None = None,
        density: Quantity | None = None,
        gap: Quantity | None = None,
        seed: int = 0,
        permeability: Quantity | None = None,
        compact: bool | None = None,
    ) -> Window:
        """Round pores placed at random over the whole wall, with a distance between their rims.

        Parameters
        ----------
        name : str
            The pores become windows of their own, called name[1], name[2] and so on.
        radius : length
        count : int
            How many; or
        density : "3 /um^2"
            how many per area of wall.
        gap : length, optional
            Smallest distance between two rims; one radius by default.
        seed : int
            The same seed gives the same places on the same surface.
        permeability : quantity, optional
            Of each pore.
        compact : bool, optional
            As for `points`.

        Raises
        ------
        SettingsError
            A quantity is wrong, or both or neither of count and density are given.
        """
        radius_um = length_um(radius, f"radius of window {name!r}")
        if (count is None) == (density is None):
            given = "neither" if count is None else "both"
            raise SettingsError(f"window {name!r} has {given} of count and density; give exactly one")
        for what, value, least in (("count", count, 1), ("seed", seed, 0)):
            if value is not None and (isinstance(value, bool) or not isinstance(value, int) or value < least):
                raise SettingsError(
                    f"{what} of window {name!r} is {value!r}; it must be a whole number, {least} or more"
                )
        per_um2 = None if density is None else density_per_um2(density, f"density of window {name!r}")
        gap_um = radius_um if gap is None else length_um(gap, f"gap of window {name!r}")
        return cls(name, Scatter(count, per_um2, radius_um, gap_um, seed), permeability_um_s(permeability), compact)

    def described(self) -> dict[str, Any]:
        """What was asked for in plain values, to be written beside a result; κ is None where infinite."""
        kappa = self.permeability_um_s if math.isfinite(self.permeability_um_s) else None
        plain = {"name": self.name, **_plain(self.shape), "permeability_um_s": kappa}
        return plain if self.compact is None else {**plain, "compact": self.compact}


def _plain(shape: Shape) -> dict[str, Any]:
    if isinstance(shape, Near):
        other = {"mesh": shape.other.name, "mesh_sha256": shape.other.sha256, "mesh_faces": len(shape.other.faces)}
        return {"kind": "near", **other, "distance_um": shape.distance_um}
    if isinstance(shape, Points):
        return {
            "kind": "points",
            "positions_um": shape.positions_um.tolist(),
            "radius_um": shape.radius_um,
            "farthest_um": shape.farthest_um,
        }
    # Lists, as JSON gives them back: a result read from disk equals the one that was saved.
    plain = {key: list(value) if isinstance(value, tuple) else value for key, value in vars(shape).items()}
    return {"kind": type(shape).__name__.lower(), **plain}


def _position(value: Sequence[float], what: str) -> Position:
    try:
        place = np.asarray(value, dtype=np.float64)
    except (TypeError, ValueError):
        place = np.zeros(0)
    if place.shape != (3,) or not np.isfinite(place).all():
        raise WindowError(f"{what} is {value!r}; it must be three finite numbers")
    x, y, z = (float(part) for part in place)
    return x, y, z


def _positions(value: Sequence[Sequence[float]] | Floats, name: str) -> Floats:
    try:
        places = np.array(value, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise WindowError(f"the positions of window {name!r} are not rows of three numbers in µm") from error
    if places.ndim != 2 or places.shape[1] != 3 or len(places) == 0:
        raise WindowError(
            f"the positions of window {name!r} have the shape {places.shape}; they must be one or more rows of three "
            "numbers in µm"
        )
    bad = ~np.isfinite(places).all(axis=1)
    if bad.any():
        row = int(np.flatnonzero(bad)[0])
        raise WindowError(f"position {row + 1} of window {name!r} is {places[row].tolist()}; it must be finite numbers")
    return places


def pore_name(name: str, number: int) -> str:
    """Name of the pore `number` (from 0) of a group."""
    return f"{name}[{number + 1}]"


def shown_place(point: Sequence[float] | Floats) -> str:
    """A position for a message."""
    return f"({point[0]:.4g}, {point[1]:.4g}, {point[2]:.4g}) µm"
