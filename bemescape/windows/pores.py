"""Groups of pores, each a disc of its own: at given positions, or scattered."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from bemescape.errors import WindowError
from bemescape.surface.surface import Surface
from bemescape.units import format_length
from bemescape.windows.patch import Patch
from bemescape.windows.wall import Wall
from bemescape.windows.window import Disc, Points, Scatter, Window, pore_name, shown_place

__all__ = [
    "MOST_COMPACT_PORES",
    "MOST_MESHED_PORES",
    "PANELS_PER_PORE",
    "pore_count",
    "pores_at_points",
    "refuse_many_meshed",
    "refuse_many_pores",
    "scattered_pores",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Of pores with panels of their own: above this many the panels of the pores leave none for the wall.
MOST_MESHED_PORES = 200
#: Of compact pores: each meets each other and every panel in each iteration.
MOST_COMPACT_PORES = 20_000
#: Panels that the rim of one pore takes at the first resolution, about (measured).
PANELS_PER_PORE = 1000
#: Trials in a row that find no free place before a surface counts as full.
_TRIALS_TO_GIVE_UP = 20_000
_BATCH = 4096


def pore_count(surface: Surface, window: Window) -> int:
    """Number of windows that one entry becomes."""
    shape = window.shape
    if isinstance(shape, Points):
        return len(shape.positions_um)
    if isinstance(shape, Scatter):
        if shape.count is not None:
            return shape.count
        return round((shape.density_per_um2 or 0.0) * surface.area)
    return 1


def refuse_many_pores(surface: Surface, windows: Sequence[Window]) -> None:
    """Refuse what would need too many panels or pairs, before any pore is placed.

    Raises
    ------
    WindowError
        More pores than `MOST_COMPACT_PORES`, or than `MOST_MESHED_PORES` that must have panels; a density that gives
        less than one.
    """
    pores = meshed = 0
    for window in windows:
        if not isinstance(window.shape, Points | Scatter):
            continue
        count = pore_count(surface, window)
        if count == 0 and isinstance(window.shape, Scatter):
            raise WindowError(
                f"window {window.name!r}: {window.shape.density_per_um2:g} per µm² on {surface.area:.4g} µm² of wall "
                "is less than one pore; raise the density or give a count"
            )
        pores += count
        meshed += count if window.compact is False else 0
        if meshed > MOST_MESHED_PORES:
            refuse_many_meshed(window.name, meshed, "leave compact = false out")
        if pores > MOST_COMPACT_PORES:
            raise WindowError(
                f"window {window.name!r} brings the pores to {pores} (limit {MOST_COMPACT_PORES}, of which each meets "
                "each other in every iteration); solve a part of the wall, or lump neighbours into larger pores"
            )


def refuse_many_meshed(name: str, count: int, remedy: str) -> NoReturn:
    """Refuse pores that would all need panels of their own.

    Raises
    ------
    WindowError
        Always.
    """
    raise WindowError(
        f"window {name!r} brings the pores with panels of their own to {count} (limit {MOST_MESHED_PORES}): with about "
        f"{PANELS_PER_PORE} panels for each they would take {count * PANELS_PER_PORE} panels; {remedy}"
    )


def pores_at_points(wall: Wall, window: Window, points: Points) -> tuple[list[Window], list[str]]:
    """One disc for each position, moved to the wall, and a remark with the distances moved.

    Raises
    ------
    WindowError
        A position is too far off the wall; two are equal, or their pores overlap; the rows are named.
    """
    gap, places, face = wall.nearest.closest(points.positions_um)
    worst = int(gap.argmax())
    if gap[worst] > points.farthest_um:
        count = int((gap > points.farthest_um).sum())
        raise WindowError(
            f"{_row(window, points, worst)} at {shown_place(points.positions_um[worst])} lies "
            f"{format_length(gap[worst])} off the wall (limit {format_length(points.farthest_um)}"
            + (f"; {count} positions are beyond it" if count > 1 else "")
            + "); correct it, check that positions and surface are in the same unit and frame, or raise 'farthest'"
        )
    _refuse_close_pores(wall, window, points, places, face)
    discs = _discs(window, places, points.radius_um)
    median, largest = float(np.median(gap)), float(gap[worst])
    return discs, [
        f"the {len(discs)} position{'s' * (len(discs) > 1)} of {window.name!r} were moved to the wall by "
        f"{format_length(median)} (median) and at most {format_length(largest)}"
        + (f" ({_row(window, points, worst)})" if len(discs) > 1 else "")
    ]


def _refuse_close_pores(wall: Wall, window: Window, points: Points, places: Floats, face: Ints) -> None:
    if len(places) < 2:
        return
    # Pores on either side of a thin sheet are close but do not overlap: a few neighbours are looked at.
    gap, other = cKDTree(places).query(places, k=min(6, len(places)))
    one, other, gap = np.repeat(np.arange(len(places)), other.shape[1]), other.ravel(), gap.ravel()
    normals = wall.surface.normals[face]
    same_side = np.einsum("ix,ix->i", normals[one], normals[other]) > 0.0
    close = np.flatnonzero(same_side & (gap < 2.0 * points.radius_um) & (one != other))
    if not len(close):
        return
    worst = close[gap[close].argmin()]
    first, second = sorted((int(one[worst]), int(other[worst])))
    pair = f"{_row(window, points, first)} and {_row(window, points, second)}"
    if (points.positions_um[first] == points.positions_um[second]).all():
        raise WindowError(f"{pair} are the same position {shown_place(places[first])}; remove one of the two rows")
    raise WindowError(
        f"{pair} overlap: they are {format_length(float(gap[worst]))} apart on the wall and have a radius of "
        f"{format_length(points.radius_um)} each; move or remove one, or choose a smaller radius"
    )


def _row(window: Window, points: Points, number: int) -> str:
    line = f" (line {points.lines[number]})" if points.lines else ""
    return f"{pore_name(window.name, number)!r}{line}"


def _discs(group: Window, places: Floats, radius_um: float) -> list[Window]:
    discs = []
    for number, place in enumerate(places):
        x, y, z = (float(value) for value in place)
        name = pore_name(group.name, number)
        discs.append(Window(name, Disc((x, y, z), radius_um), group.permeability_um_s, group.compact))
    return discs


def scattered_pores(
    wall: Wall, window: Window, scatter: Scatter, taken: Sequence[Patch], pores: Sequence[Disc] = ()
) -> tuple[list[Window], list[str]]:
    """Discs at random places of the wall, clear of one another, of the patches `taken` and of other `pores`.

    Strategy: places come evenly over the area; each is kept if all pores before it and all other windows are far
    enough, until there are enough or none has fitted for long. Distances are straight lines, so that a pore also
    keeps clear of one on the other side of a thin sheet.

    Raises
    ------
    WindowError
        They do not fit; the number that was reached is named.
    """
    wanted = pore_count(wall.surface, window)
    spacing = 2.0 * scatter.radius_um + scatter.gap_um
    random = np.random.default_rng(scatter.seed)
    cumulative = np.cumsum(wall.surface.areas)
    kept: list[Floats] = []
    cells: dict[tuple[int, int, int], list[int]] = {}
    failed = 0
    while len(kept) < wanted and failed < _TRIALS_TO_GIVE_UP:
        places, face = _random_places(wall, cumulative, random)
        free = _clear_of(places, face, taken, scatter.radius_um + scatter.gap_um)
        for pore_radius in {pore.radius_um for pore in pores}:
            middles = cKDTree([pore.centre_um for pore in pores if pore.radius_um == pore_radius])
            free &= middles.query(places)[0] >= pore_radius + scatter.radius_um + scatter.gap_um
        for place, is_free in zip(places, free, strict=True):
            if is_free and _fits(place, kept, cells, spacing):
                cells.setdefault(_cell(place, spacing), []).append(len(kept))
                kept.append(place)
                failed = 0
                if len(kept) == wanted:
                    break
            else:
                failed += 1
    if len(kept) < wanted:
        raise WindowError(
            f"window {window.name!r}: only {len(kept)} of {wanted} pores fit with a radius of "
            f"{format_length(scatter.radius_um)} and {format_length(scatter.gap_um)} between rims; ask for fewer, "
            "smaller or closer ones"
        )
    discs = _discs(window, np.array(kept), scatter.radius_um)
    return discs, [
        f"the {wanted} pore{'s' * (wanted > 1)} of {window.name!r} were scattered with seed {scatter.seed}, "
        f"{wanted / wall.surface.area:.4g} per µm² of wall"
    ]


def _random_places(wall: Wall, cumulative: Floats, random: np.random.Generator) -> tuple[Floats, Ints]:
    """Places (_BATCH, 3) spread evenly over the area, and their faces."""
    face = np.searchsorted(cumulative, random.random(_BATCH) * cumulative[-1], side="right")
    face = np.minimum(face, len(cumulative) - 1)
    first, second = random.random((2, _BATCH, 1))
    # The square root spreads them evenly over a triangle (Osada et al. 2002, doi:10.1145/571647.571648).
    root = np.sqrt(first)
    a, b, c = (wall.corners[face, k] for k in range(3))
    return (1.0 - root) * a + root * (1.0 - second) * b + root * second * c, face


def _clear_of(places: Floats, face: Ints, taken: Sequence[Patch], distance: float) -> NDArray[np.bool_]:
    free = np.ones(len(places), bool)
    for patch in taken:
        free &= patch.distance_to_rim(places) >= distance
        free &= ~np.isin(face, patch.faces) if patch.level is None else patch.level(places) > 0.0
    return free


def _cell(place: Floats, spacing: float) -> tuple[int, int, int]:
    i, j, k = np.floor(place / spacing).astype(int).tolist()
    return i, j, k


def _fits(place: Floats, kept: list[Floats], cells: dict[tuple[int, int, int], list[int]], spacing: float) -> bool:
    i, j, k = _cell(place, spacing)
    for x in (i - 1, i, i + 1):
        for y in (j - 1, j, j + 1):
            for z in (k - 1, k, k + 1):
                for other in cells.get((x, y, z), ()):
                    if float(((kept[other] - place) ** 2).sum()) < spacing * spacing:
                        return False
    return True
