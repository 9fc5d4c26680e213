"""Where molecules start: named points, patches of the wall, balls inside; and what follows from there."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
import trimesh
from numpy.typing import NDArray

from bemescape.bem.field import field_at
from bemescape.bem.panels import make_panels
from bemescape.errors import SettingsError, WindowError
from bemescape.results.points import PlacedPoints
from bemescape.results.ways_out import conditional
from bemescape.surface.surface import Surface, triangle_areas_normals
from bemescape.units import Quantity, format_length, length_um
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.window import Disc, Labels, Window

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult

__all__ = ["Ball", "Start", "StartResult", "check_starts", "results_from_starts"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Ball:
    """A ball inside the volume, from which molecules start uniformly: centre (3,) and radius in µm."""

    centre_um: tuple[float, float, float]
    radius_um: float

    @classmethod
    def at(cls, centre: Sequence[float], radius: Quantity) -> Ball:
        """From a centre (3,) in µm and a radius with its unit.

        Raises
        ------
        SettingsError
            The centre is not three finite numbers, or the radius not a positive length.
        """
        x, y, z = (float(value) for value in _three_numbers(centre, "the centre of a start ball"))
        return cls((x, y, z), length_um(radius, "radius of a start ball"))


#: A point (3,) in µm, a patch of the wall given like a window, or a ball.
Start = Sequence[float] | Window | Ball


@dataclass(frozen=True)
class StartResult:
    """What follows from one start.

    Attributes
    ----------
    kind : {"point", "wall patch", "ball"}
        A patch or a ball is averaged over its area or volume.
    mean_time_s, escape_time_sd_s : float
        Mean and standard deviation of the escape time; None where the spread was not computed.
    splitting : mapping or None
        Window name -> probability of leaving through it; None where it was not computed.
    conditional_time_s : mapping or None
        Window name -> mean time of those who leave through it; None for a window that nobody reaches.
    """

    kind: Literal["point", "wall patch", "ball"]
    mean_time_s: float
    escape_time_sd_s: float | None = None
    splitting: dict[str, float] | None = None
    conditional_time_s: dict[str, float | None] | None = None


def check_starts(surface: Surface, start: Mapping[str, Start]) -> dict[str, Start]:
    """Starts in plain values, each inside the volume or on the wall; refused before anything is computed.

    Raises
    ------
    SettingsError
        A point lies outside, a ball crosses the wall, a patch is not on it.
    """
    checked: dict[str, Start] = {}
    for name, place in start.items():
        if isinstance(place, Window):
            _refuse_off_wall(surface, name, place)
            checked[name] = place
        elif isinstance(place, Ball):
            checked[name] = place
        else:
            x, y, z = (float(value) for value in _three_numbers(place, f"start point {name!r}"))
            checked[name] = (x, y, z)
    inside = {name: place for name, place in checked.items() if not isinstance(place, Window)}
    if inside:
        _refuse_outside(surface, inside)
    return checked


def results_from_starts(result: EscapeResult, surface: Surface, start: Mapping[str, Start]) -> dict[str, StartResult]:
    """Means over each start of every field the result holds.

    Parameters
    ----------
    result : EscapeResult
        With its spread and ways out, as far as they are wanted.
    surface : Surface
        The surface as it was given, whose faces `result.parent_face` counts.
    start : mapping
        As `check_starts` returns it.
    """
    return {name: _from_start(result, surface, place) for name, place in start.items()}


def _from_start(result: EscapeResult, surface: Surface, place: Start) -> StartResult:
    if isinstance(place, Window):
        return _packed(result, "wall patch", *_patch_means(result, surface, place))
    if isinstance(place, Ball):
        return _packed(result, "ball", *_ball_means(result, place))
    return _packed(result, "point", *_point_values(result, np.asarray(place, dtype=np.float64)))


def _packed(
    result: EscapeResult,
    kind: Literal["point", "wall patch", "ball"],
    time: float,
    second: float | None,
    splitting: Floats | None,
    weighted: Floats | None,
) -> StartResult:
    sd = None if second is None else float(np.sqrt(max(second - time**2, 0.0)))
    if splitting is None or weighted is None or result.ways_out is None:
        return StartResult(kind, time, sd)
    names = [result.windows[number].name for number in result.ways_out.windows]
    times = conditional(weighted, splitting)
    return StartResult(
        kind,
        time,
        sd,
        dict(zip(names, splitting.tolist(), strict=True)),
        {name: float(t) if np.isfinite(t) else None for name, t in zip(names, times, strict=True)},
    )


_Means = tuple[float, float | None, Floats | None, Floats | None]


def _point_values(result: EscapeResult, point: Floats) -> _Means:
    placed = PlacedPoints(result, point[None])
    second = None if result.spread is None else float(placed.second_moments(result.spread)[0])
    if result.ways_out is None:
        return float(placed.times()[0]), second, None, None
    ways = result.ways_out
    return float(placed.times()[0]), second, placed.splitting(ways)[:, 0], placed.weighted_times(ways)[:, 0]


def _ball_means(result: EscapeResult, ball: Ball) -> _Means:
    """From the values at the centre alone, by Pizzetti's formula (1909).

    The mean of f over a ball is f + (r²/10) Δf + (r⁴/280) Δ²f + …; with Δu = −1/D, Δm = −2u/D, Δw = 0 and
    Δg = −w/D the series ends here.
    """
    d, r2 = result.diffusion_um2_s, ball.radius_um**2
    time, second, splitting, weighted = _point_values(result, np.asarray(ball.centre_um))
    if second is not None:
        second += -r2 * time / (5.0 * d) + r2**2 / (140.0 * d**2)
    if splitting is not None and weighted is not None:
        weighted = weighted - r2 * splitting / (10.0 * d)
    return time - r2 / (10.0 * d), second, splitting, weighted


def _patch_means(result: EscapeResult, surface: Surface, patch: Window) -> _Means:
    """Area means: the panels are cut along the patch's rim, and values interpolated between them."""
    fine = _patch_pieces(result, surface, patch)
    faces, panel = fine.faces, fine.parent
    areas, _ = triangle_areas_normals(fine.vertices, faces)
    weight = areas / areas.sum()
    middle = fine.vertices[faces].mean(axis=1)

    def mean(f: Floats) -> float:
        return float(weight @ _between_panels(result, f, panel, middle))

    time = mean(result.panel_time_s)
    second = None if result.spread is None else mean(result.spread.panel_second_moment_s2)
    if result.ways_out is None:
        return time, second, None, None
    ways = result.ways_out
    splitting = np.array([mean(row) for row in ways.panel_splitting])
    return time, second, splitting, np.array([mean(row) for row in ways.panel_weighted_time_s])


@dataclass(frozen=True)
class _Pieces:
    vertices: Floats
    faces: Ints
    parent: Ints


def _patch_pieces(result: EscapeResult, surface: Surface, patch: Window) -> _Pieces:
    """The patch as pieces of the result's panels: its faces, cut along its rim if it has one of its own."""
    placement = place_windows(surface, [patch])
    if placement.patches[0].level is None:
        chosen = np.flatnonzero(np.isin(result.parent_face, placement.patches[0].faces))
        return _Pieces(result.vertices, result.faces[chosen], chosen)
    on_panels = place_windows(Surface(result.vertices, result.faces), [patch])
    # Pieces of an eighth of the radius at the rim, larger ones elsewhere; no lines of equal distance.
    fine = graded(on_panels, Fineness(48.0, 0, 1.0, 4.0))
    inside = np.flatnonzero(fine.window_of >= 0)
    return _Pieces(fine.vertices, fine.faces[inside], fine.parent[inside])


def _between_panels(result: EscapeResult, f: Floats, panel: Ints, points: Floats) -> Floats:
    """Values of f (m,) at points (k, 3) of given panels (k,), whose means stay f.

    On the wall the slope is that of the linear function through vertex means; on windows f is constant.
    """
    wall = result.panel_window < 0
    faces = result.faces[wall]
    weight = np.repeat(result.panel_areas_um2[wall], 3)
    n = len(result.vertices)
    total = np.bincount(faces.ravel(), weights=weight, minlength=n)
    summed = np.bincount(faces.ravel(), weights=weight * np.repeat(f[wall], 3), minlength=n)
    at_corner = (summed / np.maximum(total, 1e-300))[result.faces[panel]]
    barycentric = trimesh.triangles.points_to_barycentric(result.vertices[result.faces[panel]], points)
    slope = (at_corner * (barycentric - 1.0 / 3.0)).sum(axis=1)
    return np.asarray(np.where(wall[panel], f[panel] + slope, f[panel]))


def _refuse_off_wall(surface: Surface, name: str, patch: Window) -> None:
    if not isinstance(patch.shape, Disc | Labels):
        raise SettingsError(
            f"start region {name!r} is a window of the kind {type(patch.shape).__name__.lower()}; give it as a disc or "
            "by labels"
        )
    try:
        place_windows(surface, [patch])
    except WindowError as error:
        text = str(error).replace(f"window {patch.name!r}", f"start region {name!r}")
        raise SettingsError(text) from error


def _three_numbers(place: object, what: str) -> Floats:
    try:
        point = np.asarray(place, dtype=np.float64)
    except (TypeError, ValueError):
        point = np.zeros(0)
    if point.shape != (3,) or not np.isfinite(point).all():
        raise SettingsError(f"{what} is {place!r}; it must be three finite numbers in µm")
    return point


def _centre(place: Ball | Sequence[float]) -> tuple[float, float, float]:
    x, y, z = place.centre_um if isinstance(place, Ball) else place
    return float(x), float(y), float(z)


def _refuse_outside(surface: Surface, starts: Mapping[str, Ball | Sequence[float]]) -> None:
    panels = make_panels(surface.vertices[surface.faces])
    nothing = np.zeros(len(panels))
    centres = np.array([_centre(place) for place in starts.values()])
    values = field_at(panels, nothing, nothing, 0.0, centres)
    for (name, place), winding, gap in zip(starts.items(), values.winding, values.gap, strict=True):
        kind = "ball" if isinstance(place, Ball) else "point"
        x, y, z = _centre(place)
        if winding < 0.5:
            raise SettingsError(
                f"start {kind} {name!r} at ({x:.4g}, {y:.4g}, {z:.4g}) µm lies outside the volume, about "
                f"{gap:.3g} µm from the wall; move it inside, and check its unit"
            )
        if isinstance(place, Ball):
            room = _distance_to_wall(surface, np.array([x, y, z]))
            if place.radius_um > room:
                raise SettingsError(
                    f"start ball {name!r} has a radius of {format_length(place.radius_um)}, but the wall is "
                    f"{format_length(room)} from its centre; shrink it or move it inside"
                )


def _distance_to_wall(surface: Surface, point: Floats) -> float:
    corners = surface.vertices[surface.faces]
    closest = trimesh.triangles.closest_point(corners, np.broadcast_to(point, (len(corners), 3)))
    return float(np.linalg.norm(closest - point, axis=1).min())
