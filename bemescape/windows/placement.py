"""Windows placed on a surface: lids cut first, groups of pores taken apart, every window found or refused."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import WindowError
from bemescape.surface.surface import Surface
from bemescape.windows.contact import contact_patch
from bemescape.windows.lid import with_lid
from bemescape.windows.patch import Patch, disc_patch, label_patch, patch_of_faces
from bemescape.windows.pores import pores_at_points, refuse_many_pores, scattered_pores
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Labels, Lid, Near, Points, Scatter, Window

__all__ = ["Placement", "place_windows"]

Ints = NDArray[np.int64]


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
        Where each of them lies.
    notes : tuple of str
        Remarks for the reader.
    source_face : (m,) int64 or None
        The face of the surface given in which each face of `surface` lies, −1 on lids; None where it is the same.
    """

    surface: Surface
    windows: tuple[Window, ...]
    patches: tuple[Patch, ...]
    notes: tuple[str, ...]
    source_face: Ints | None = None

    def faces_given(self, faces: Ints) -> Ints:
        """Faces of the surface given (k,) from faces of `surface` (k,); −1 on lids."""
        return faces if self.source_face is None else self.source_face[faces]


def place_windows(surface: Surface, windows: Sequence[Window]) -> Placement:
    """Find every window on the wall, or refuse with names, distances and a remedy.

    Lids come first, since they change the surface; scattered pores last, since they keep clear of all others.

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
    found: dict[int, list[tuple[Window, Patch]]] = {}
    for number, window in enumerate(windows):
        if not isinstance(window.shape, Scatter):
            found[number], remarks = _found(wall, window, lids)
            notes += remarks
    for number, window in enumerate(windows):
        if isinstance(window.shape, Scatter):
            taken = [patch for pairs in found.values() for _, patch in pairs]
            discs, remarks = scattered_pores(wall, window, window.shape, taken)
            notes += remarks
            found[number], remarks = _discs(wall, window, discs)
            notes += remarks
    pairs = [pair for number in range(len(windows)) for pair in found[number]]
    _refuse_equal_names([window.name for window, _ in pairs])
    return Placement(
        wall.surface,
        tuple(window for window, _ in pairs),
        tuple(patch for _, patch in pairs),
        tuple(notes),
        wall.source_face if lids else None,
    )


def _refuse_equal_names(names: Sequence[str]) -> None:
    seen: set[str] = set()
    for name in names:
        if name in seen:
            raise WindowError(f"{names.count(name)} windows are called {name!r}; give each a name of its own")
        seen.add(name)


def _found(wall: Wall, window: Window, lids: Sequence[str]) -> tuple[list[tuple[Window, Patch]], list[str]]:
    shape = window.shape
    notes: list[str] = []
    if isinstance(shape, Disc):
        patch, notes = disc_patch(wall, window, shape)
    elif isinstance(shape, Labels):
        patch = label_patch(wall, window, shape)
    elif isinstance(shape, Near):
        patch, notes = contact_patch(wall, window, shape)
    elif isinstance(shape, Points):
        discs, notes = pores_at_points(wall, window, shape)
        pores, remarks = _discs(wall, window, discs)
        return pores, notes + remarks
    else:
        patch = _lid_patch(wall, window, lids)
    return [(window, patch)], notes


def _discs(wall: Wall, group: Window, pores: Sequence[Window]) -> tuple[list[tuple[Window, Patch]], list[str]]:
    """The patches of a group's pores; what many of them have to say is said once."""
    pairs, remarked = [], []
    for pore in pores:
        if not isinstance(pore.shape, Disc):
            raise TypeError(f"a pore of {group.name!r} is no disc")
        patch, remarks = disc_patch(wall, pore, pore.shape)
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
