"""From a damaged mesh to one or several closed, outward-facing shells, with every change listed."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import asdict, dataclass, replace
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import SettingsError, SurfaceError
from bemescape.progress import Progress, ProgressEvent, silent
from bemescape.surface.closing import close_holes, drop_closed_debris, drop_open_scraps, turn_outward
from bemescape.surface.health import Finding, HealthReport, check_surface
from bemescape.surface.manifold import agree_orientation, separate_sheets
from bemescape.surface.repairs import (
    Repair,
    drop_collapsed_faces,
    drop_doubled_faces,
    drop_unused_vertices,
    remove_flat_faces,
    weld_equal_vertices,
    weld_near_vertices,
)
from bemescape.surface.surface import Surface
from bemescape.surface.working import Working
from bemescape.units import Quantity, length_um

__all__ = ["Change", "HealReport", "heal_surface"]

_LISTED = 24
#: Changes of one kind beyond this number are summed up in a last one.
_SINGLE = 200


@dataclass(frozen=True)
class Change:
    """One thing that healing did.

    Attributes
    ----------
    kind : str
        "welded vertices", "closed hole", "dropped part" and so on.
    count : int
        How many things were changed.
    volume_change_um3, area_change_um2 : float
        After minus before; the volume of a mesh with holes is measured as if each were closed by a fan
        around its middle.
    detail : str
        What and where, in words.
    faces : tuple of int
        First faces concerned, numbered as in the mesh before healing.
    """

    kind: str
    count: int
    volume_change_um3: float
    area_change_um2: float
    detail: str
    faces: tuple[int, ...] = ()


@dataclass(frozen=True)
class HealReport:
    """Everything that healing changed, in order, and the state before and after."""

    mode: Literal["auto", "rebuild"]
    changes: tuple[Change, ...]
    before: HealthReport
    after: HealthReport

    def to_dict(self) -> dict[str, Any]:
        """Plain numbers, text and lists, ready for JSON."""
        return {
            "mode": self.mode,
            "changes": [asdict(change) for change in self.changes],
            "before": self.before.to_dict(),
            "after": self.after.to_dict(),
        }

    def lines(self) -> list[str]:
        """One sentence for each change."""
        return [
            f"{change.kind}: {change.detail} (volume {change.volume_change_um3:+.3g} µm³, "
            f"area {change.area_change_um2:+.3g} µm²)"
            for change in self.changes
        ]


def heal_surface(
    surface: Surface,
    mode: Literal["none", "auto", "rebuild"] = "auto",
    *,
    voxel: Quantity | None = None,
    progress: Progress = silent,
) -> Surface:
    """A closed, outward-facing copy of `surface`, or a refusal.

    Parameters
    ----------
    surface : Surface
        As from `read_unhealed`, or made in memory.
    mode : "auto", "none" or "rebuild"
        "none" changes nothing and refuses what cannot be solved. "auto" joins equal vertices, drops doubled
        and flat faces and debris, splits non-manifold edges and vertices, closes small holes and orients
        outwards. "rebuild" is the last resort: a new surface around what is inside, from a signed distance
        on voxels.
    voxel : length, optional
        Voxel size for "rebuild"; chosen from the mesh if not given.
    progress : callable
        Receives a `ProgressEvent` for each stage.

    Returns
    -------
    Surface
        The same mesh, with `.health` filled in, where nothing had to be changed; otherwise a copy whose
        `.healing` lists every change.

    Raises
    ------
    SurfaceError
        The mesh cannot be healed; the message says why, where and what else to try.
    SettingsError
        The mode is unknown, or `voxel` is given without "rebuild".
    """
    if mode not in {"none", "auto", "rebuild"}:
        raise SettingsError(f"heal is {mode!r}; it must be 'none', 'auto' or 'rebuild'")
    if voxel is not None and mode != "rebuild":
        raise SettingsError(f"a voxel size means nothing with heal={mode!r}; use heal='rebuild'")
    voxel_um = None if voxel is None else length_um(voxel, "voxel size")
    if not len(surface.faces) or not len(surface.vertices):
        raise SurfaceError(f"{surface.name} has no faces, so there is nothing to heal")
    # What an earlier healing left is the state to start from, not what was read.
    before = surface.healing.after if surface.healing else surface.health
    if before is None:
        before = check_surface(surface.vertices, surface.faces)
        surface = replace(surface, health=before)
    if mode == "none":
        if not before.ok:
            raise _refusal(surface.name, before, "heal='auto' may repair it")
        return surface
    log = _Log(Working.of(surface))
    progress(ProgressEvent("healing", None, f"{len(surface.faces)} faces"))
    if mode == "auto":
        _repair(log, already_fine=before.ok)
    else:
        from bemescape.surface.rebuild import rebuilt

        _tidy(log)
        _orient_closed_parts(log)
        # Holes that are closed beforehand need no guess about the side on which a voxel lies.
        log.apply("separated sheets", [separate_sheets(log.mesh, borders=False)])
        log.apply("closed hole", close_holes(log.mesh))
        log.apply("rebuilt surface", [rebuilt(log.mesh, surface.name, voxel_um, progress)])
        log.apply("separated sheets", [separate_sheets(log.mesh, borders=True)])
        log.apply("dropped part", drop_closed_debris(log.mesh))
        log.apply("turned parts", [turn_outward(log.mesh)])
    if not log.changes and before.ok:
        return surface
    return _finished(surface, before, log, mode)


def _finished(surface: Surface, before: HealthReport, log: _Log, mode: Literal["auto", "rebuild"]) -> Surface:
    mesh = log.mesh.without_unused_vertices()
    if not len(mesh.faces):
        raise SurfaceError(f"{surface.name}: nothing closed is left after dropping faces without area or partner")
    after = check_surface(mesh.vertices, mesh.faces)
    if not after.ok:
        remedy = "try heal='rebuild'" if mode == "auto" else "repair it in a mesh editor"
        raise _refusal(surface.name, after, remedy, mesh.face_source)
    face_data, vertex_data = mesh.carried(surface.face_data, surface.vertex_data)
    return replace(
        surface,
        vertices=mesh.vertices,
        faces=mesh.faces,
        face_data=MappingProxyType(face_data),
        vertex_data=MappingProxyType(vertex_data),
        healing=HealReport(mode, tuple(log.changes), before, after),
    )


def _refusal(
    name: str, report: HealthReport, remedy: str, face_source: NDArray[np.int64] | None = None
) -> SurfaceError:
    errors = [finding for finding in report.findings if finding.severity == "error"]
    # One-sidedness explains open edges and disagreement, so it is what the user should hear of.
    worst: Finding = next((error for error in errors if error.kind == "one-sided parts"), errors[0])
    faces = worst.faces
    if face_source is not None:
        faces = tuple(int(face_source[face]) for face in faces)
    where = ""
    if worst.places_um and "µm" not in worst.message:
        where = " near (" + ", ".join(f"{value:.4g}" for value in worst.places_um[0]) + ") µm"
    if worst.kind == "one-sided parts":
        remedy = "it has no inside: export a closed surface"
    elif worst.kind == "open edges":
        remedy += " or close it in a mesh editor; an open sheet has no inside"
    others = [error.kind for error in errors if error is not worst]
    also = f" (also: {', '.join(others)})" if others else ""
    return SurfaceError(f"{name} is not a closed surface: {worst.message}{where}{also}; {remedy}", faces=faces)


class _Log:
    """The mesh as it is now, and the list of changes with what each did to volume and area."""

    def __init__(self, mesh: Working) -> None:
        self.mesh = mesh
        self.changes: list[Change] = []

    def apply(self, kind: str, repairs: Iterable[Repair | None]) -> bool:
        """Take over the meshes of the repairs, each built on the one before; whether there were any."""
        done = [repair for repair in repairs if repair is not None]
        for repair in done[:_SINGLE]:
            self._add(kind, repair)
        if len(done) > _SINGLE:
            rest = done[_SINGLE:]
            faces = np.concatenate([repair.faces for repair in rest])
            detail = f"{len(rest)} more of the same kind"
            volumes = sum(repair.volume_change or 0.0 for repair in rest)
            areas = sum(repair.area_change or 0.0 for repair in rest)
            self._add(
                kind,
                Repair(rest[-1].mesh, sum(repair.count for repair in rest), detail, faces, volumes, areas),
            )
        return bool(done)

    def _add(self, kind: str, repair: Repair) -> None:
        volume, area = repair.volume_change, repair.area_change
        if volume is None or area is None:
            volume = repair.mesh.volume - self.mesh.volume
            area = float(repair.mesh.areas.sum() - self.mesh.areas.sum())
        self.mesh = repair.mesh
        self.changes.append(
            Change(
                kind=kind,
                count=repair.count,
                volume_change_um3=volume,
                area_change_um2=area,
                detail=repair.detail,
                faces=tuple(int(face) for face in repair.faces[:_LISTED]),
            )
        )


def _tidy(log: _Log) -> None:
    """Everything about equal, doubled and flat things."""
    steps: tuple[tuple[str, Callable[[Working], Repair | None]], ...] = (
        ("dropped unused vertices", drop_unused_vertices),
        ("welded vertices", weld_equal_vertices),
        ("dropped flat faces", drop_collapsed_faces),
        ("dropped doubled faces", drop_doubled_faces),
        ("welded vertices", weld_near_vertices),
        ("removed flat faces", remove_flat_faces),
        ("dropped flat faces", drop_collapsed_faces),
        ("dropped doubled faces", drop_doubled_faces),
    )
    for kind, step in steps:
        if len(log.mesh.faces):
            log.apply(kind, [step(log.mesh)])


def _orient_closed_parts(log: _Log) -> None:
    if len(log.mesh.faces):
        log.apply("turned faces", [agree_orientation(log.mesh)])
        log.apply("turned parts", [turn_outward(log.mesh)])


def _repair(log: _Log, *, already_fine: bool) -> None:
    if already_fine:
        log.apply("dropped unused vertices", [drop_unused_vertices(log.mesh)])
        log.apply("dropped part", drop_closed_debris(log.mesh))
        return
    _tidy(log)
    if not len(log.mesh.faces):
        return
    log.apply("turned faces", [agree_orientation(log.mesh)])
    log.apply("separated sheets", [separate_sheets(log.mesh, borders=False)])
    log.apply("dropped part", drop_open_scraps(log.mesh))
    if log.apply("closed hole", close_holes(log.mesh)):
        # A lid may repeat a face that was left over beside the hole, or be flat itself.
        log.apply("dropped doubled faces", [drop_doubled_faces(log.mesh)])
        log.apply("removed flat faces", [remove_flat_faces(log.mesh)])
    log.apply("separated sheets", [separate_sheets(log.mesh, borders=True)])
    log.apply("dropped part", drop_closed_debris(log.mesh))
    log.apply("turned parts", [turn_outward(log.mesh)])
