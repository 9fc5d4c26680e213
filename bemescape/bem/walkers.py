"""Mean escape time and shares by particles: walk on stars, with nothing in common with the integral equation.

A walker at x jumps to the border of the largest star-shaped region that is known around it: the part seen from x of a
ball which reaches neither an absorbing window nor an edge behind which the wall turns out of sight. Seen from x,
walls cut such a ball without changing the distribution of directions, so that a ray in a uniform direction ends on the
ball (the walker goes on from there) or on a wall (it goes on from the wall, with directions of the half-space only).
The time to the border of the region is the mean of t²/2 − t³/(3R) over the same rays (∫ of the ball's Green's function
1/(4π)(1/t − 1/R) along the ray, D = 1), so a ray of length t adds just that.

On a partly open window with μ = κ/D, ∂u/∂n = −μ u, a ray of length t that meets it at an angle with the cosine c is
reflected with the probability 1 − μ t(1 − t/R)/c and leaves otherwise; the ball is kept so small that this stays above
0. A walker on the window itself gets in addition the outflow through its own plane: from the region's identity with
the window part {y} of the ball's equator, u(x) = E[u on the dome] + R²/6 − (μR/2) E[u(y)], and with u(y) ≈ u(x) the
walker leaves with the probability (μR/2)/(1 + μR/2); R is kept small against 1/μ, the window and the distance to its
rim, and what this leaves is of second order in it.

Sources: Sawhney, Miller, Gkioulekas & Crane (2023), "Walk on Stars", doi:10.1145/3592398, for reflecting walls; Miller,
Sawhney, Crane & Gkioulekas (2024), "Walkin' Robin", doi:10.1145/3658153, for partly open ones. Random numbers: the
counter-based generator of Steele, Lea & Flood (2014), doi:10.1145/2660193.2660195; each walker has its own stream, so
that an answer does not depend on the number of threads.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from dataclasses import dataclass
from itertools import islice
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from bemescape.bem.walk_tree import (
    EdgeTree,
    PanelTree,
    edge_distance,
    edge_tree,
    first_hit,
    nearest_panel,
    panel_tree,
    reach_before_exit,
    silhouette_distance,
)
from bemescape.compiled import njit
from bemescape.errors import AccuracyError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.threads import thread_count

__all__ = ["Tally", "walk"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A walker this close to an absorbing window has left, in radii of the smallest window (√(area/π)). Measured on a
#: square window in a cube: the mean is low by 32, 14, 5 and 1.9 % at 0.3, 0.1, 0.03 and 0.01, about twice the shell;
#: each factor of ten costs some nine jumps more. Here that leaves 2e-5, less than any affordable standard error.
SHELL = 1e-5
#: Radius of the region of a walker on a partly open window, in the smaller of 1/μ and the window's radius, and the
#: part of it that is kept next to the rim. Measured on the same window with μ = 10: 1.0 and 0.3 differ from 0.05 by
#: less than 1 %, the standard error then, so the second-order rest at 0.05 is far below.
OWN_REGION, OWN_REGION_AT_RIM = 0.05, 0.05
#: Edges with a smaller turn (sine) count as flat: between parts of one flat face it is rounding.
_FLAT = 1e-6
_MOST_STEPS = 2_000_000
_MOST_STARTS = 1_000_000
#: Above this part of lost walkers the rest says nothing.
_MOST_LOST = 0.01
#: Walkers that one thread sends without looking up, and seconds between two reports.
_PARTY, _TELL_S = 50, 1.0

_INSIDE, _NO_START, _ENDLESS, _ASTRAY = 0, -1, -2, -3


@dataclass(frozen=True, eq=False)
class Tally:
    """What the walkers found, for D = 1.

    Attributes
    ----------
    mean, mean_error : float
        Mean time in µm² (times D: s) from a start uniform in the volume, and its standard error.
    shares, share_errors : (k,) float64
        Part of the walkers that left by each window, and its standard error.
    walkers, lost : int
        Walkers counted; walkers that were given up.
    steps : float
        Mean number of jumps.
    seconds : float
    """

    mean: float
    mean_error: float
    shares: Floats
    share_errors: Floats
    walkers: int
    lost: int
    steps: float
    seconds: float


class _Scene(NamedTuple):
    """The body, its diagonal scaled to 1: `rate` (m,) is μ per panel, 0 on the wall."""

    wall: PanelTree
    absorbing: PanelTree
    partly: PanelTree
    silhouettes: EdgeTree
    rims: EdgeTree
    normals: Floats
    rate: Floats
    largest_rate: float
    own_radius: Floats
    low: Floats
    high: Floats
    shell: float


def walk(
    vertices: Floats,
    faces: Ints,
    window_of: Ints,
    rate: Floats,
    *,
    walkers: int,
    seed: int = 0,
    shell: float = SHELL,
    own_region: float = OWN_REGION,
    progress: Progress = silent,
) -> Tally:
    """Send out walkers from places uniform in the volume.

    Parameters
    ----------
    vertices, faces : (n, 3) µm, (m, 3)
        Closed surface, counter-clockwise seen from outside the volume.
    window_of : (m,) int
        Window of each face, −1 on the wall.
    rate : (k,) float
        κ/D of each window in 1/µm; infinite for a perfectly absorbing one.
    walkers : int
        How many, at least two; the standard error falls with its square root.
    seed : int
        From 0 to 2⁶³ − 1; the same seed gives the same answer.
    shell, own_region : float
        See SHELL and OWN_REGION: the two approximations.
    progress : callable
        Called about every second; what it raises stops the work.

    Raises
    ------
    AccuracyError
        More than 1 % of the walkers are lost: the surface is open or crosses itself.
    """
    began = time.perf_counter()
    progress(ProgressEvent("walkers", 0.0, "preparing"))
    diagonal = float(np.linalg.norm(vertices.max(axis=0) - vertices.min(axis=0)))
    scene = _scene(vertices, faces, window_of, rate, diagonal, shell, own_region)
    times, exits, steps = np.zeros(walkers), np.zeros(walkers, np.int64), np.zeros(walkers, np.int64)

    def send(first: int) -> int:
        part = slice(first, min(first + _PARTY, walkers))
        _send(scene, window_of, np.uint64(seed), first, times[part], exits[part], steps[part])
        return len(times[part])

    _in_threads(send, range(0, walkers, _PARTY), walkers, progress)
    home = exits >= 0
    lost = int(np.count_nonzero(~home))
    if lost > _MOST_LOST * walkers:
        why = {_NO_START: "found no place inside", _ENDLESS: "never left", _ASTRAY: "left through a gap"}
        worst = max(why, key=lambda code: int(np.count_nonzero(exits == code)))
        raise AccuracyError(
            f"{lost} of {walkers} walkers were lost (limit {_MOST_LOST:.0%}), most because they {why[worst]}: "
            "the surface has gaps or crosses itself, or a window is far too small for walkers; try heal='rebuild'"
        )
    counted = int(np.count_nonzero(home))
    shares = np.bincount(exits[home], minlength=len(rate)) / counted
    scale = diagonal**2
    return Tally(
        mean=float(times[home].mean()) * scale,
        mean_error=float(times[home].std(ddof=1)) / math.sqrt(counted) * scale,
        shares=shares,
        # One more walker through each window and past it: a window that none has found has an error too.
        share_errors=np.sqrt((shares + 1.0 / counted) * (1.0 - shares + 1.0 / counted) / counted),
        walkers=counted,
        lost=lost,
        steps=float(steps[home].mean()),
        seconds=time.perf_counter() - began,
    )


def _in_threads(send: Callable[[int], int], parties: range, walkers: int, progress: Progress) -> None:
    """Send all parties, telling `progress` about every second; stopped between two parties by what it raises."""
    threads = thread_count()
    left = iter(parties)
    back, told = 0, time.perf_counter()
    with ThreadPoolExecutor(threads) as pool:
        # Only a few wait in line, so that a stop is heard soon.
        pending = {pool.submit(send, first) for first in islice(left, 2 * threads)}
        while pending:
            home, pending = wait(pending, return_when=FIRST_COMPLETED)
            back += sum(party.result() for party in home)
            pending |= {pool.submit(send, first) for first in islice(left, len(home))}
            if time.perf_counter() - told > _TELL_S or not pending:
                told = time.perf_counter()
                progress(ProgressEvent("walkers", back / walkers, f"{back} of {walkers}"))


def _scene(
    vertices: Floats,
    faces: Ints,
    window_of: Ints,
    rate: Floats,
    diagonal: float,
    shell: float,
    own_region: float,
) -> _Scene:
    middle = 0.5 * (vertices.max(axis=0) + vertices.min(axis=0))
    vertices = (vertices - middle) / diagonal
    corners = vertices[faces]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    double = np.linalg.norm(cross, axis=1)
    normals = cross / double[:, None]
    area = np.bincount(window_of[window_of >= 0], 0.5 * double[window_of >= 0], minlength=len(rate))
    radius = np.sqrt(area / np.pi)
    panel_rate = np.where(window_of >= 0, (rate * diagonal)[window_of], 0.0)
    own = own_region * np.minimum(radius, 1.0 / (rate * diagonal))
    absorbing = np.isinf(panel_rate)
    ends, beside = _inner_edges(vertices, faces, ~absorbing)
    # An edge is a rim of reflection where the rate changes across it; a silhouette only where the volume's angle is
    # above 180°: all others are seen from one side together.
    is_rim = panel_rate[beside[:, 0]] != panel_rate[beside[:, 1]]
    reflex = _turn(normals, ends, beside) > _FLAT
    return _Scene(
        wall=panel_tree(corners, normals, np.flatnonzero(~absorbing)),
        absorbing=panel_tree(corners, normals, np.flatnonzero(absorbing)),
        partly=panel_tree(corners, normals, np.flatnonzero((panel_rate > 0.0) & ~absorbing)),
        silhouettes=edge_tree(ends[reflex], normals[beside[reflex]]),
        rims=edge_tree(ends[is_rim], normals[beside[is_rim]]),
        normals=normals,
        rate=panel_rate,
        largest_rate=float(panel_rate[~absorbing].max(initial=0.0)),
        own_radius=np.where(window_of >= 0, own[window_of], 0.0),
        low=vertices.min(axis=0),
        high=vertices.max(axis=0),
        shell=max(shell * float(radius.min()), 1e-8),
    )


def _inner_edges(vertices: Floats, faces: Ints, chosen: NDArray[np.bool_]) -> tuple[Floats, Ints]:
    """Edges (e, 2, 3) between two of the `chosen` faces, and these faces (e, 2)."""
    index = np.flatnonzero(chosen)
    start = faces[index].ravel()
    end = np.roll(faces[index], -1, axis=1).ravel()
    key = np.minimum(start, end) * len(vertices) + np.maximum(start, end)
    order = np.argsort(key, kind="stable")
    paired = np.flatnonzero(key[order][1:] == key[order][:-1])
    one, other = order[paired], order[paired + 1]
    ends = np.stack([vertices[start[one]], vertices[end[one]]], axis=1)
    return ends, np.stack([index[one // 3], index[other // 3]], axis=1)


def _turn(normals: Floats, ends: Floats, beside: Ints) -> Floats:
    """Sine of the angle by which the wall turns away from the volume at each edge; negative where it turns in."""
    along = ends[:, 1] - ends[:, 0]
    along /= np.linalg.norm(along, axis=1)[:, None]
    # The edge runs counter-clockwise in its first face, so normal × along points out of that face over the edge.
    one, other = normals[beside[:, 0]], normals[beside[:, 1]]
    return np.asarray(-np.einsum("ij,ij->i", np.cross(one, other), along))


@njit(cache=True)
def _mixed(value):
    value = (value ^ (value >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    value = (value ^ (value >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return value ^ (value >> np.uint64(31))


@njit(cache=True)
def _uniform(state):
    """Next number in (0, 1) of a stream."""
    state[0] += np.uint64(0x9E3779B97F4A7C15)
    return (np.float64(_mixed(state[0]) >> np.uint64(11)) + 0.5) * (1.0 / 9007199254740992.0)


@njit(cache=True)
def _direction(state):
    z = 2.0 * _uniform(state) - 1.0
    angle = 2.0 * math.pi * _uniform(state)
    across = math.sqrt(max(0.0, 1.0 - z * z))
    return across * math.cos(angle), across * math.sin(angle), z


@njit(cache=True)
def _is_inside(scene, x, y, z, state, stack):
    """Whether the first panel on a ray in a random direction is crossed outwards."""
    vx, vy, vz = _direction(state)
    both_sides = True
    best, hit = first_hit(scene.wall, x, y, z, vx, vy, vz, 2.0, both_sides, stack)
    _, window = first_hit(scene.absorbing, x, y, z, vx, vy, vz, best, both_sides, stack)
    if window >= 0:
        panel = scene.absorbing.number[window]
    elif hit >= 0:
        panel = scene.wall.number[hit]
    else:
        return False
    normal = scene.normals[panel]
    return vx * normal[0] + vy * normal[1] + vz * normal[2] > 0.0


@njit(cache=True)
def _start(scene, state, stack):
    for _ in range(_MOST_STARTS):
        x = scene.low[0] + (scene.high[0] - scene.low[0]) * _uniform(state)
        y = scene.low[1] + (scene.high[1] - scene.low[1]) * _uniform(state)
        z = scene.low[2] + (scene.high[2] - scene.low[2]) * _uniform(state)
        if _is_inside(scene, x, y, z, state, stack):
            return True, x, y, z
    return False, 0.0, 0.0, 0.0


@njit(cache=True, error_model="numpy")
def _one_walk(scene, window_of, state, stack):
    """Time, window and number of jumps of one walker; a negative window where it is lost."""
    found, x, y, z = _start(scene, state, stack)
    if not found:
        return 0.0, _NO_START, 0
    elapsed, clear, measured, only_outwards = 0.0, 0.0, 0.0, False
    on = -1  # the panel of the wall on which the walker is
    for step in range(_MOST_STEPS):
        # The distance to the windows falls by no more than a jump: it is measured anew when half of it may be gone.
        if clear < max(0.5 * measured, 2.0 * scene.shell):
            measured, window = nearest_panel(scene.absorbing, x, y, z, 2.0, stack)
            if window >= 0 and measured < scene.shell:
                return elapsed, window_of[scene.absorbing.number[window]], step
            clear = measured
        radius = silhouette_distance(scene.silhouettes, x, y, z, clear, stack)
        on_window = on >= 0 and scene.rate[on] > 0.0
        radius = reach_before_exit(scene.partly, scene.rate, scene.largest_rate, on_window, x, y, z, radius, stack)
        vx, vy, vz = _direction(state)
        if on >= 0:
            normal = scene.normals[on]
            if vx * normal[0] + vy * normal[1] + vz * normal[2] > 0.0:
                vx, vy, vz = -vx, -vy, -vz
            if on_window:
                own = scene.own_radius[on]
                to_rim = edge_distance(scene.rims, x, y, z, own, stack)
                radius = min(radius, max(to_rim, OWN_REGION_AT_RIM * own))
        radius = max(radius, scene.shell)
        if on_window:
            outflow = 0.5 * scene.rate[on] * radius
            if _uniform(state) * (1.0 + outflow) < outflow:
                return elapsed, window_of[on], step
        length, hit = first_hit(scene.wall, x, y, z, vx, vy, vz, radius, only_outwards, stack)
        elapsed += length * length * (0.5 - length / (3.0 * radius))
        x, y, z = x + length * vx, y + length * vy, z + length * vz
        clear -= length
        on = -1
        if hit >= 0:
            on = scene.wall.number[hit]
            rate = scene.rate[on]
            if rate > 0.0:
                normal = scene.normals[on]
                cosine = vx * normal[0] + vy * normal[1] + vz * normal[2]
                if _uniform(state) * cosine < rate * length * (1.0 - length / radius):
                    return elapsed, window_of[on], step
        elif abs(x) + abs(y) + abs(z) > 2.0:
            return elapsed, _ASTRAY, step
    return elapsed, _ENDLESS, _MOST_STEPS


@njit(cache=True, nogil=True)
def _send(scene, window_of, seed, first, times, exits, steps):
    stack = np.empty(64, np.int64)
    for i in range(len(times)):
        state = np.empty(1, np.uint64)
        state[0] = _mixed(_mixed(seed + np.uint64(1)) + np.uint64(first + i) * np.uint64(0xD1342543DE82EF95))
        times[i], exits[i], steps[i] = _one_walk(scene, window_of, state, stack)
