"""Candidate sites: places of the wall where a window may be opened."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError, SurfaceError
from bemescape.surface.compartments import compartments
from bemescape.surface.surface import Surface
from bemescape.windows.patch import disc_patch
from bemescape.windows.pores import pores_at_points, scattered_pores
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Points, Scatter, Window

__all__ = ["FEWEST_SITES", "MOST_SITES", "CandidateSites", "candidate_sites"]

Floats = NDArray[np.float64]

FEWEST_SITES, MOST_SITES = 2, 400


@dataclass(frozen=True, eq=False)
class CandidateSites:
    """Sites on a surface, far enough apart that windows on any two of them do not overlap.

    Attributes
    ----------
    surface : Surface
    windows : tuple of Window
        A disc at each site, all of one radius and permeability.
    places_um : (s, 3) float64
        Their centres, on the wall.
    radius_um, permeability_um_s : float
    notes : tuple of str
        Remarks for the reader.
    """

    surface: Surface
    windows: tuple[Window, ...]
    places_um: Floats
    radius_um: float
    permeability_um_s: float
    notes: tuple[str, ...]

    def __len__(self) -> int:
        return len(self.windows)


def candidate_sites(surface: Surface, sites: Window, open_windows: int) -> CandidateSites:
    """Find every site on the wall, or refuse.

    Parameters
    ----------
    surface : Surface
        One connected volume.
    sites : Window
        Of the kind points or scatter: each pore is a site.
    open_windows : int
        How many of them are open at a time.

    Raises
    ------
    SettingsError
        The window is of another kind, or the number of open windows does not suit that of the sites.
    SurfaceError
        The surface encloses several separate volumes.
    WindowError
        A site lies off the wall or overlaps another, or they do not fit.
    """
    shape = sites.shape
    if not isinstance(shape, Points | Scatter):
        raise SettingsError(
            f"the sites {sites.name!r} are a window of the kind {type(shape).__name__.lower()}; give candidate sites "
            "as points or scatter"
        )
    if isinstance(open_windows, bool) or not isinstance(open_windows, int) or open_windows < 1:
        raise SettingsError(f"open_windows is {open_windows!r}; it must be a whole number, 1 or more")
    wanted = len(shape.positions_um) if isinstance(shape, Points) else shape.count
    if wanted is None and isinstance(shape, Scatter) and shape.density_per_um2 is not None:
        wanted = round(shape.density_per_um2 * surface.area)
    count = int(wanted or 0)
    if count < FEWEST_SITES:
        raise SettingsError(
            f"there {'is' if count == 1 else 'are'} {count} candidate site{'s' * (count != 1)}; there is nothing to "
            f"arrange with fewer than {FEWEST_SITES}: add sites"
        )
    if count > MOST_SITES:
        raise SettingsError(f"there are {count} candidate sites (limit {MOST_SITES}); give fewer")
    if open_windows > count:
        raise SettingsError(
            f"{open_windows} windows cannot be open at {count} candidate sites; add sites or lower open_windows"
        )
    bodies = int(compartments(surface).max()) + 1
    if bodies > 1:
        raise SurfaceError(
            f"{surface.name} encloses {bodies} separate volumes; windows are arranged on one: split the surface, or "
            "remove the others"
        )
    wall = Wall.of(surface)
    if isinstance(shape, Points):
        discs, notes = pores_at_points(wall, sites, shape)
    else:
        discs, notes = scattered_pores(wall, sites, shape, [])
    for disc in discs:
        if not isinstance(disc.shape, Disc):
            raise TypeError(f"the site {disc.name!r} is no disc")
        _, remarks = disc_patch(wall, disc, disc.shape)  # refuses what cannot be a window, before any work
        notes += remarks
    places = np.array([disc.shape.centre_um for disc in discs if isinstance(disc.shape, Disc)])
    return CandidateSites(
        surface, tuple(discs), places, shape.radius_um, sites.permeability_um_s, tuple(dict.fromkeys(notes))
    )
