"""Surfaces: upload, health, healed copy, buffers for the page, and where openings lie on them."""

from __future__ import annotations

import json
import secrets
from pathlib import PurePosixPath
from typing import Any

from fastapi import APIRouter, Request, Response
from fastapi.concurrency import run_in_threadpool
from pydantic import BaseModel, ConfigDict, Field, field_validator

from bemescape.errors import SettingsError
from bemescape.service import tasks
from bemescape.service.api.parts import REFUSALS, Id, Me, Parts, Service, Triple, buffers, form_file, json_body
from bemescape.service.demos import demo, demos
from bemescape.service.models import Surface
from bemescape.service.orders import case_of_windows, surface_file
from bemescape.service.problems import Refusal
from bemescape.service.records import DemoRecord, PositionsRecord, SurfaceRecord, surface_record
from bemescape.service.tasks import SurfaceFile
from bemescape.units import unit_scale_um

__all__ = ["router"]

router = APIRouter(responses=REFUSALS)
#: glTF names other files, which an upload does not have; GLB holds all in one.
_SUFFIXES = (".ply", ".stl", ".obj", ".off", ".glb", ".vtp", ".vtk")
_HEALING = ("auto", "none", "rebuild")
_BINARY: dict[int | str, dict[str, Any]] = {
    200: {"content": {"application/octet-stream": {"schema": {"type": "string", "format": "binary"}}}}
}


def _form(**fields: Any) -> dict[str, Any]:
    schema = {
        "type": "object",
        "properties": {"file": {"type": "string", "format": "binary"}, **fields},
        "required": ["file", *(name for name in fields if name == "unit")],
    }
    return {"requestBody": {"required": True, "content": {"multipart/form-data": {"schema": schema}}}}


_UNIT = {
    "type": "string",
    "description": 'length of one unit of the file: "nm", "4 nm", or by axis "4 nm, 4 nm, 40 nm"',
    "examples": ["nm"],
}


@router.post(
    "/surfaces",
    status_code=201,
    tags=["surfaces"],
    openapi_extra=_form(unit=_UNIT, heal={"type": "string", "enum": list(_HEALING), "default": "auto"}),
)
async def add_surface(request: Request, parts: Parts, me: Me) -> SurfaceRecord:
    """Upload a mesh; the answer holds its health report. A file that cannot be read is refused and not kept."""
    filename, data, fields = await form_file(request)
    unit = _unit_of(fields.get("unit", ""))
    heal = fields.get("heal", "auto")
    if heal not in _HEALING:
        raise SettingsError(f"heal is {heal[:40]!r}; give one of {', '.join(_HEALING)}")
    name, suffix = _name_and_suffix(filename)
    return await _read_and_keep(parts, me, name=name, suffix=suffix, unit=unit, heal=heal, data=data)


async def _read_and_keep(
    parts: Service,
    me: str,
    *,
    name: str,
    suffix: str,
    unit: str | list[str],
    heal: str,
    data: bytes,
    demo: str | None = None,
) -> SurfaceRecord:
    await run_in_threadpool(parts.store.check_room, me, 2 * len(data))
    upload = SurfaceFile("", name, suffix, unit, heal, data)
    limits = parts.settings.limits
    found = await parts.crew.ask(
        tasks.read_upload, upload, limits.faces, key=f"read-{secrets.token_hex(8)}", timeout=limits.read_s
    )
    surface = await run_in_threadpool(
        parts.store.add_surface, me, name=name, suffix=suffix, unit=unit, heal=heal, data=data, found=found, demo=demo
    )
    return surface_record(surface)


def _unit_of(text: str) -> str | list[str]:
    if not text.strip():
        raise SettingsError(
            "unit is missing: mesh files carry no unit, so say what one unit of the file is, like 'nm', '4 nm' or "
            "'4 nm, 4 nm, 40 nm'"
        )
    units = [part.strip() for part in text.split(",")]
    if len(units) not in (1, 3):
        raise SettingsError(f"unit has {len(units)} entries; give one length, or three for x, y and z")
    for unit in units:
        unit_scale_um(unit)
    return units if len(units) == 3 else units[0]


def _name_and_suffix(filename: str) -> tuple[str, str]:
    """What is shown of a file's name; none of it reaches the disk but an ending that is known."""
    last = PurePosixPath(filename.replace("\\", "/")).name
    suffix = PurePosixPath(last).suffix.lower()
    if suffix not in _SUFFIXES:
        raise Refusal(415, f"files that end in {suffix[:12]!r} are not taken; give one of {', '.join(_SUFFIXES)}")
    stem = "".join(letter for letter in last[: -len(suffix)] if letter.isprintable()).strip()[:60]
    return stem or "surface", suffix


@router.get("/surfaces", tags=["surfaces"])
def list_surfaces(parts: Parts, me: Me) -> list[SurfaceRecord]:
    """Your surfaces, newest first."""
    return [surface_record(surface) for surface in parts.store.surfaces(me)]


@router.get("/surfaces/{surface_id}", tags=["surfaces"])
def get_surface(surface_id: Id, parts: Parts, me: Me) -> SurfaceRecord:
    """One surface with its health report."""
    return surface_record(parts.store.surface(me, surface_id))


@router.delete("/surfaces/{surface_id}", status_code=204, tags=["surfaces"])
def delete_surface(surface_id: Id, parts: Parts, me: Me, *, with_runs: bool = False) -> Response:
    """Delete a surface; one that has runs only with `with_runs`."""
    parts.store.delete_surface(me, surface_id, with_runs=with_runs)
    return Response(status_code=204)


@router.get("/surfaces/{surface_id}/mesh", tags=["surfaces"], responses=_BINARY, response_class=Response)
def surface_mesh(surface_id: Id, request: Request, parts: Parts, me: Me) -> Response:
    """Vertices and faces for the page."""
    surface = parts.store.surface(me, surface_id)
    return buffers(parts.store.files.read(surface.mesh_sha256), request)


@router.get("/surfaces/{surface_id}/healed.vtp", tags=["surfaces"], responses=_BINARY, response_class=Response)
def healed_copy(surface_id: Id, parts: Parts, me: Me) -> Response:
    """The surface as it is solved, in units of its file, with its arrays."""
    surface = parts.store.surface(me, surface_id)
    if surface.healed_sha256 is None:
        raise Refusal(404, f"surface {surface.name!r} could not be healed, so there is no healed copy")
    return Response(
        parts.store.files.read(surface.healed_sha256),
        media_type="application/octet-stream",
        headers={"Content-Disposition": 'attachment; filename="healed.vtp"'},
    )


_WINDOWS_BODY = {
    "requestBody": {
        "required": True,
        "content": {
            "application/json": {
                "schema": {
                    "type": "object",
                    "properties": {
                        "window": {"type": "array", "items": {"$ref": "#/components/schemas/WindowSection"}}
                    },
                    "required": ["window"],
                    "additionalProperties": False,
                },
                "example": {"window": [{"name": "neck", "disc": {"centre": [100.0, 0.0, -620.0], "radius": "60 nm"}}]},
            }
        },
    }
}


@router.post(
    "/surfaces/{surface_id}/windows",
    tags=["surfaces"],
    responses=_BINARY,
    response_class=Response,
    openapi_extra=_WINDOWS_BODY,
)
async def place_windows(surface_id: Id, request: Request, parts: Parts, me: Me) -> Response:
    """The part of the wall that openings take, given as in a case file; nothing is kept."""
    body = await json_body(request)
    if not isinstance(body, dict) or set(body) != {"window"}:
        raise SettingsError('the body should be {"window": [...]}, with openings as in a case file')

    def gathered() -> tuple[Any, ...]:
        surface = parts.store.surface(me, surface_id)
        _refuse_unsolvable(surface)
        return (surface_file(parts.store, surface), *case_of_windows(parts.store, me, surface, body["window"]))

    limits = parts.settings.limits
    answer = await parts.crew.ask(
        tasks.place_run_windows,
        *await run_in_threadpool(gathered),
        limits.panels,
        key=f"windows-{secrets.token_hex(8)}",
        timeout=limits.read_s,
    )
    return buffers(answer["buffers"], request)


class PictureOrder(BaseModel):
    """What to draw: openings as in a case file, and from where to look."""

    model_config = ConfigDict(extra="forbid")
    window: list[dict[str, Any]] = Field(default=[], max_length=200)
    towards: Triple = Field(default=(0.0, -1.0, 0.25), description="from the middle of the shape to the eye")

    @field_validator("towards")
    @classmethod
    def _has_a_direction(cls, value: Triple) -> Triple:
        if not any(abs(part) > 1e-9 for part in value):
            raise ValueError("has no direction; give one that is not (0, 0, 0)")
        return value


@router.post(
    "/surfaces/{surface_id}/picture",
    tags=["surfaces"],
    responses={200: {"content": {"image/png": {"schema": {"type": "string", "format": "binary"}}}}},
    response_class=Response,
)
async def surface_picture(surface_id: Id, order: PictureOrder, parts: Parts, me: Me) -> Response:
    """A picture of the surface with its openings, for a browser that cannot draw it itself."""

    def gathered() -> tuple[Any, ...]:
        surface = parts.store.surface(me, surface_id)
        if not order.window:
            return surface_file(parts.store, surface), None, {}
        _refuse_unsolvable(surface)
        return (surface_file(parts.store, surface), *case_of_windows(parts.store, me, surface, order.window))

    limits = parts.settings.limits
    answer = await parts.crew.ask(
        tasks.draw_surface,
        *await run_in_threadpool(gathered),
        limits.panels,
        order.towards,
        key=f"picture-{secrets.token_hex(8)}",
        timeout=limits.read_s,
    )
    return Response(answer["picture"], media_type="image/png")


def _refuse_unsolvable(surface: Surface) -> None:
    report = json.loads(surface.report)
    if not report["solvable"]:
        raise Refusal(422, f"surface {surface.name!r} cannot be solved: {report['reason']}")


@router.post("/positions", status_code=201, tags=["positions"], openapi_extra=_form())
async def add_positions(request: Request, parts: Parts, me: Me) -> PositionsRecord:
    """Upload a CSV file of positions for a `points` window."""
    filename, data, _ = await form_file(request)
    last = PurePosixPath(filename.replace("\\", "/")).name
    if PurePosixPath(last).suffix.lower() not in (".csv", ".txt", ".tsv"):
        raise Refusal(415, "positions come as a CSV file; give one that ends in .csv, .tsv or .txt")
    await run_in_threadpool(parts.store.check_room, me, len(data))
    found = await parts.crew.ask(
        tasks.read_position_file, data, key=f"positions-{secrets.token_hex(8)}", timeout=parts.settings.limits.read_s
    )
    name = "".join(letter for letter in last if letter.isprintable())[:60] or "positions"
    entry = await run_in_threadpool(parts.store.add_positions, me, name, data, found["rows"])
    return PositionsRecord(id=entry.id, name=entry.name, rows=entry.rows)


@router.get("/demos", tags=["demos"])
def list_demos() -> list[DemoRecord]:
    """Demo shapes with invented data, each with its case."""
    return demos()


@router.post("/demos/{name}", status_code=201, tags=["demos"])
async def use_demo(name: str, parts: Parts, me: Me) -> SurfaceRecord:
    """Make a demo shape one of your surfaces; it is made once."""
    found = demo(name)
    if found is None:
        raise Refusal(404, "there is no such demo; ask for the list of demos")
    record, data = found
    known = parts.store.demo_surface(me, name)
    if known is not None:
        return surface_record(known)
    return await _read_and_keep(
        parts, me, name=record.name, suffix=".ply", unit=record.unit, heal="auto", data=data, demo=name
    )
