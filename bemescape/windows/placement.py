"""Windows placed on a surface: lids cut first, groups of pores taken apart, every window found or refused."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import WindowError
from bemescape.surface.surface import Surface
from bemescape.windows.compact import PlacedPores, fits_compact, placed_pores
from bemescape.windows.contact import contact_patch
from bemescape.windows.lid import with_lid
from bemescape.windows.patch import Patch, disc_patch, label_patch, patch_of_faces
from bemescape.windows.pores import (
    MOST_MESHED_PORES,
    PANELS_PER_PORE,
    pore_count,
    pores_at_points,
    refuse_many_meshed,
    refuse_many_pores,
    scattered_pores,
)
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Labels, Lid, Near, Points, Scatter, Window

__all__ = ["Placement", "place_windows"]

Ints = NDArray[np.int64]

#: Round windows that get panels of their own unasked: their rims take about five sixths of the usual budget of 60 000
#: panels.
MESHED_UNASKED = 50_000 // PANELS_PER_PORE
_ROUND = Disc | Points | Scatter
_DO_NOT_FIT = (
    "they are too large, too close or too near sharp edges to be compact pores unasked: solve fewer, or ask for "
    "compact = true and mind the stated error"
)


@dataclass(frozen=True, eq=False)
class Placement:
    """Windows found on a surface.

    Attributes
    ----------
    surface : Surface
        As it is solved: the one given, or what lids leave of it.
    windows : tuple of Window
        In the order given, each group of pores taken apart into its pores.
    patches : tuple of Patch
        Where those lie that get panels of their own.
    notes : tuple of str
        Remarks for the reader.
    source_face : (m,) int64 or None
        The face of the surface given in which each face of `surface` lies, −1 on lids; None where it is the same.
    meshed : (k,) int64 or None
        The numbers of the windows that `patches` belong to; None where all have panels.
    pores : PlacedPores or None
        The other windows.
    """

    surface: Surface
    windows: tuple[Window, ...]
    patches: tuple[Patch, ...]
    notes: tuple[str, ...]
    source_face: Ints | None = None
    meshed: Ints | None = None
    pores: PlacedPores | None = None

    def numbered(self, patch_of: Ints) -> Ints:
        """Numbers of windows (m,) from those of patches (m,); −1 stays."""
        return patch_of if self.meshed is None else np.append(self.meshed, -1)[patch_of]

    def faces_given(self, faces: Ints) -> Ints:
        """Faces of the surface given (k,) from faces of `surface` (k,); −1 on lids."""
        return faces if self.source_face is None else self.source_face[faces]


def place_windows(surface: Surface, windows: Sequence[Window], *, most_meshed: int | None = None) -> Placement:
    """Find every window on the wall, or refuse with names, distances and a remedy.

    Lids come first, since they change the surface; scattered pores last, since they keep clear of all others. Where
    there are more than `most_meshed` round windows (`MESHED_UNASKED` by default), those that
    are small enough become compact pores; `Window.compact` decides otherwise.

    Raises
    ------
    WindowError
        No window; a name twice; a window that misses the wall, is too small, sits on two sheets or takes all of
        a part; an array or label that the mesh does not have; a lid that misses or is ambiguous; a contact that does
        not exist; pores off the wall, on one another or too many.
    """
    if not windows:
        raise WindowError("no window is given: without one nothing can leave; name at least one window")
    _refuse_equal_names([window.name for window in windows])
    refuse_many_pores(surface, windows)
    notes: list[str] = []
    wall = Wall.of(surface)
    lids: list[str] = []
    for window in windows:
        if isinstance(window.shape, Lid):
            wall, remarks = with_lid(wall, window, window.shape, lids)
            lids.append(window.name)
            notes += remarks
    most_meshed = MESHED_UNASKED if most_meshed is None else min(most_meshed, MOST_MESHED_PORES)
    many = sum(pore_count(surface, window) for window in windows if isinstance(window.shape, _ROUND)) > most_meshed
    found: dict[int, list[tuple[Window, Patch | None]]] = {}
    for number, window in enumerate(windows):
        if not isinstance(window.shape, Scatter):
            found[number], remarks = _found(wall, window, lids, many=many)
            notes += remarks
    for number, window in enumerate(windows):
        if isinstance(window.shape, Scatter):
            discs, remarks = scattered_pores(wall, window, window.shape, *_taken(found))
            notes += remarks
            found[number], remarks = _pores(wall, window, discs, many=many)
            notes += remarks
    pairs = [pair for number in range(len(windows)) for pair in found[number]]
    _refuse_equal_names([window.name for window, _ in pairs])
    meshed = [number for number, (_, patch) in enumerate(pairs) if patch is not None]
    compact = [number for number, (_, patch) in enumerate(pairs) if patch is None]
    _refuse_many_that_do_not_fit(pairs)
    patches = tuple(patch for _, patch in pairs if patch is not None)
    pores = placed_pores(wall, compact, [pairs[number][0] for number in compact], patches)
    if compact:
        notes.append(_compact_note(len(compact), len(meshed)))
    return Placement(
        wall.surface,
        tuple(window for window, _ in pairs),
        patches,
        tuple(notes),
        wall.source_face if lids else None,
        np.asarray(meshed, np.int64) if compact else None,
        pores,
    )


def _compact_note(compact: int, meshed: int) -> str:
    rest = f"; the other {meshed} have panels of their own" if meshed else ""
    return (
        f"{compact} round window{'s are' if compact > 1 else ' is'} solved as compact pore{'s' * (compact > 1)}, one "
        f"unknown each, by their radius and the wall's curvature around them{rest}"
    )


def _taken(found: dict[int, list[tuple[Window, Patch | None]]]) -> tuple[list[Patch], list[Disc]]:
    """What a new pore must keep clear of: patches of meshed windows, and compact pores."""
    pairs = [pair for several in found.values() for pair in several]
    discs = [window.shape for window, patch in pairs if patch is None and isinstance(window.shape, Disc)]
    return [patch for _, patch in pairs if patch is not None], discs


def _refuse_many_that_do_not_fit(pairs: Sequence[tuple[Window, Patch | None]]) -> None:
    round_ones = [window for window, patch in pairs if patch is not None and patch.disc is not None]
    if len(round_ones) > MOST_MESHED_PORES:
        refuse_many_meshed(
            round_ones[-1].name,
            len(round_ones),
            _DO_NOT_FIT,
        )


def _refuse_equal_names(names: Sequence[str]) -> None:
    seen: set[str] = set()
    for name in names:
        if name in seen:
            raise WindowError(f"{names.count(name)} windows are called {name!r}; give each a name of its own")
        seen.add(name)


def _found(
    wall: Wall, window: Window, lids: Sequence[str], *, many: bool
) -> tuple[list[tuple[Window, Patch | None]], list[str]]:
    shape = window.shape
    notes: list[str] = []
    if isinstance(shape, Disc):
        return _pores(wall, window, [window], many=many)
    if window.compact and not isinstance(shape, Points):
        raise WindowError(
            f"window {window.name!r} is of the kind {type(shape).__name__.lower()}, and only round windows (disc, "
            "points, scatter) can be compact pores; leave compact out"
        )
    if isinstance(shape, Labels):
        patch = label_patch(wall, window, shape)
    elif isinstance(shape, Near):
        patch, notes = contact_patch(wall, window, shape)
    elif isinstance(shape, Points):
        discs, notes = pores_at_points(wall, window, shape)
        pores, remarks = _pores(wall, window, discs, many=many)
        return pores, notes + remarks
    else:
        patch = _lid_patch(wall, window, lids)
    return [(window, patch)], notes


def _pores(
    wall: Wall, group: Window, pores: Sequence[Window], *, many: bool
) -> tuple[list[tuple[Window, Patch | None]], list[str]]:
    """A group's pores, with patches unless they are compact; what many of them have to say is said once."""
    discs = [pore.shape for pore in pores if isinstance(pore.shape, Disc)]
    compact = np.full(len(pores), group.compact is True)
    if group.compact is None and many:
        compact = fits_compact(wall, pores, discs)
    pairs: list[tuple[Window, Patch | None]] = []
    remarked: list[str] = []
    if (~compact).sum() > MOST_MESHED_PORES:
        refuse_many_meshed(group.name, int((~compact).sum()), _DO_NOT_FIT)
    for pore, disc, is_compact in zip(pores, discs, compact, strict=True):
        if is_compact:
            pairs.append((pore, None))
            continue
        patch, remarks = disc_patch(wall, pore, disc)
        pairs.append((pore, patch))
        if remarks:
            remarked.append(remarks[0])
    if len(remarked) > 1:
        remarked[0] += f" (and {len(remarked) - 1} more pores of {group.name!r} likewise)"
    return pairs, remarked[:1]


def _lid_patch(wall: Wall, window: Window, lids: Sequence[str]) -> Patch:
    members = wall.lid_of == lids.index(window.name)
    if not members.any():
        raise WindowError(f"window {window.name!r} lies beyond another lid and is cut off; leave out one of the two")
    return patch_of_faces(wall, window.name, members)
