"""Runs: ask for one, watch it, read its answer."""

from __future__ import annotations

import json
import secrets
from collections.abc import AsyncIterator
from typing import Annotated, Any

from fastapi import APIRouter, Query, Request, Response
from fastapi.concurrency import run_in_threadpool
from pydantic import BaseModel, ConfigDict, Field
from starlette.responses import StreamingResponse

from bemescape.service import tasks
from bemescape.service.api.parts import REFUSALS, Id, Me, Parts, Service, Triple, buffers, json_body
from bemescape.service.events import stream
from bemescape.service.jobs import result_files
from bemescape.service.orders import ORDER_EXAMPLE, checked_order
from bemescape.service.problems import Refusal
from bemescape.service.records import RunRecord, run_record
from bemescape.service.spreadsheets import csv_text
from bemescape.service.store import FINISHED

__all__ = ["csv_answer", "router"]

router = APIRouter(tags=["runs"], responses=REFUSALS)
_KINDS = {
    ".json": "application/json",
    ".html": "text/html; charset=utf-8",
    ".png": "image/png",
    ".vtp": "application/octet-stream",
    ".npz": "application/octet-stream",
    ".buffers": "application/octet-stream",
}
#: The report carries its style and pictures in itself and gets no rights beyond showing them.
_REPORT_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:; sandbox; frame-ancestors 'none'"
_BINARY: dict[int | str, dict[str, Any]] = {
    200: {"content": {"application/octet-stream": {"schema": {"type": "string", "format": "binary"}}}}
}
_ORDER_BODY = {
    "requestBody": {
        "required": True,
        "content": {
            "application/json": {"schema": {"$ref": "#/components/schemas/RunOrder"}, "example": ORDER_EXAMPLE}
        },
    }
}


@router.post("/runs", status_code=202, openapi_extra=_ORDER_BODY)
async def add_run(request: Request, parts: Parts, me: Me) -> RunRecord:
    """Queue a run: `surface`, then as in a case file. Watch `/api/runs/{id}/events`, or poll."""
    order = await json_body(request)

    def queue() -> RunRecord:
        checked = checked_order(parts.store, parts.settings.limits, me, order)
        parts.store.check_room(me, 0)
        (run,), _ = parts.store.add_runs(me, [(checked.surface_id, checked.name, checked.table)])
        return run_record(run, before_it=parts.store.place_in_queue(run))

    record = await run_in_threadpool(queue)
    parts.jobs.wake()
    return record


@router.get("/runs")
def list_runs(parts: Parts, me: Me, surface: Annotated[str | None, Query(max_length=16)] = None) -> list[RunRecord]:
    """Your runs, newest first."""
    return [run_record(run) for run in parts.store.runs(me, surface_id=surface)]


@router.get("/runs/{run_id}")
def get_run(run_id: Id, parts: Parts, me: Me) -> RunRecord:
    """One run as it stands."""
    return _record(parts, me, run_id)


def _record(parts: Service, me: str, run_id: str) -> RunRecord:
    run = parts.store.run(me, run_id)
    return run_record(
        run,
        files=sorted(parts.store.run_files(run_id)) if run.state == "done" else [],
        before_it=parts.store.place_in_queue(run) if run.state == "queued" else None,
        progress=parts.hub.latest(run_id) if run.state == "running" else None,
    )


@router.delete("/runs/{run_id}", status_code=204)
def delete_run(run_id: Id, parts: Parts, me: Me) -> Response:
    """Delete a run that is over."""
    parts.store.delete_run(me, run_id)
    return Response(status_code=204)


@router.post("/runs/{run_id}/cancel", status_code=202)
def cancel_run(run_id: Id, parts: Parts, me: Me) -> RunRecord:
    """Cancel a run: at once while it waits, at its next step while it is computed."""
    run = parts.store.cancel(me, run_id)
    parts.jobs.cancel(run.id)
    return _record(parts, me, run_id)


@router.get(
    "/runs/{run_id}/events",
    response_class=StreamingResponse,
    responses={200: {"content": {"text/event-stream": {"schema": {"type": "string"}}}}},
)
async def run_events(run_id: Id, parts: Parts, me: Me) -> StreamingResponse:
    """Server-sent events: `run` with the whole record at changes, `progress` in between; ends with the run."""
    await run_in_threadpool(parts.store.run, me, run_id)
    queue, end = parts.hub.listen(me, run_id)

    def record() -> dict[str, Any]:
        try:
            return _record(parts, me, run_id).model_dump(mode="json")
        except Refusal as error:
            return {"id": run_id, "state": "deleted", "reason": error.message}

    def over(known: dict[str, Any]) -> bool:
        # Pictures follow the numbers; a second opinion may take hours and is not waited for.
        return known["state"] == "deleted" or (
            known["state"] in FINISHED and known["pictures"] not in ("waiting", "running")
        )

    events: AsyncIterator[str] = stream(queue, end, record, over)
    return StreamingResponse(events, media_type="text/event-stream", headers={"X-Accel-Buffering": "no"})


def _finished(parts: Service, me: str, run_id: str) -> dict[str, str]:
    run = parts.store.run(me, run_id)
    if run.state != "done":
        raise Refusal(
            409, f"run {run.name!r} is {run.state}, so it has no answer{' yet' * (run.state not in FINISHED)}"
        )
    return parts.store.run_files(run_id)


@router.get("/runs/{run_id}/summary")
def run_summary(run_id: Id, parts: Parts, me: Me) -> dict[str, Any]:
    """The content of `summary.json`."""
    files = _finished(parts, me, run_id)
    content: dict[str, Any] = json.loads(parts.store.files.read(files["summary.json"]))
    return content


@router.get("/runs/{run_id}/files/{name}", responses=_BINARY, response_class=Response)
def run_file(run_id: Id, name: str, parts: Parts, me: Me, *, inline: bool = False) -> Response:
    """One file of the result: summary.json, surface.vtp, result.npz, report.html, a picture."""
    files = _finished(parts, me, run_id)
    if name not in files:
        raise Refusal(404, f"this run has no file of that name; it has {', '.join(sorted(files))}")
    suffix = name[name.rindex(".") :]
    headers = {"Content-Disposition": f'{"inline" if inline else "attachment"}; filename="{name}"'}
    if suffix == ".html":
        headers["Content-Security-Policy"] = _REPORT_POLICY
    return Response(parts.store.files.read(files[name]), media_type=_KINDS[suffix], headers=headers)


@router.get("/runs/{run_id}/mesh", responses=_BINARY, response_class=Response)
def run_mesh(run_id: Id, request: Request, parts: Parts, me: Me) -> Response:
    """Panels with their values, for the page."""
    return buffers(parts.store.files.read(_finished(parts, me, run_id)["mesh.buffers"]), request)


@router.get("/runs/{run_id}/tables.csv", response_class=Response, responses={200: {"content": {"text/csv": {}}}})
def run_tables(run_id: Id, parts: Parts, me: Me) -> Response:
    """Openings, starts and slow regions as one CSV table."""
    summary = json.loads(parts.store.files.read(_finished(parts, me, run_id)["summary.json"]))
    rows: list[list[Any]] = [["kind", "name", "area_um2", "share", "mean_time_s", "x_um", "y_um", "z_um"]]
    rows.append(["whole", summary["name"], summary["area_um2"], None, summary["mean_time_s"]])
    rows += [["window", entry["name"], entry["area_um2"], entry["share"]] for entry in summary["windows"]]
    rows += [["start", name, None, None, time] for name, time in summary["start"].items()]
    rows += [
        ["slow region", number, entry["area_um2"], None, entry["mean_time_s"], *entry["centre_um"]]
        for number, entry in enumerate(summary["slow_regions"], start=1)
    ]
    return csv_answer(csv_text(rows), "tables.csv")


def csv_answer(text: str, filename: str) -> Response:
    """A table as a download."""
    headers = {"Content-Disposition": f'attachment; filename="{filename}"'}
    return Response(text, media_type="text/csv; charset=utf-8", headers=headers)


async def _asked(parts: Service, me: str, run_id: str, task: Any, *arguments: Any) -> dict[str, Any]:
    def gathered() -> Any:
        _finished(parts, me, run_id)
        return result_files(parts.store, run_id)

    run = await run_in_threadpool(gathered)
    key = f"question-{secrets.token_hex(8)}"
    answer: dict[str, Any] = await parts.crew.ask(task, run, *arguments, key=key, timeout=parts.settings.limits.read_s)
    return answer


@router.get("/runs/{run_id}/slow_regions")
async def run_slow_regions(
    run_id: Id,
    parts: Parts,
    me: Me,
    wall_fraction: Annotated[float, Query(gt=0.0, le=1.0, allow_inf_nan=False)] = 0.1,
) -> dict[str, Any]:
    """Slow regions: the slowest part of the wall in connected pieces, largest first."""
    return await _asked(parts, me, run_id, tasks.slow_regions_of_run, wall_fraction)


class Section(BaseModel):
    """A plane through the shape."""

    model_config = ConfigDict(extra="forbid")
    point_um: Triple = Field(examples=[[0.0, 0.0, 0.0]])
    normal: Triple = Field(examples=[[0.0, 1.0, 0.0]])
    pixels: int = Field(default=96, ge=tasks.SECTION_PIXELS[0], le=tasks.SECTION_PIXELS[1])


@router.post("/runs/{run_id}/section", responses=_BINARY, response_class=Response)
async def run_section(run_id: Id, section: Section, request: Request, parts: Parts, me: Me) -> Response:
    """Time inside on a plane, as samples for the page."""
    answer = await _asked(parts, me, run_id, tasks.section_of_run, section.point_um, section.normal, section.pixels)
    return buffers(answer["buffers"], request)


class Places(BaseModel):
    """Places inside or on the wall."""

    model_config = ConfigDict(extra="forbid")
    points_um: list[Triple] = Field(min_length=1, max_length=tasks.MOST_POINTS, examples=[[[0.0, 0.0, 0.0]]])


@router.post("/runs/{run_id}/times")
async def run_times(run_id: Id, places: Places, parts: Parts, me: Me) -> dict[str, Any]:
    """Mean escape time in s from places in µm; null outside."""
    return await _asked(parts, me, run_id, tasks.times_of_run, places.points_um)
