"""What all routes share: the parts of the service, the owner of a request, bodies and answers."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Annotated, Any

from fastapi import Depends, Path, Request
from pydantic import Field
from starlette.datastructures import UploadFile
from starlette.responses import Response

from bemescape.service.crew import Crew
from bemescape.service.events import Hub
from bemescape.service.jobs import Jobs
from bemescape.service.problems import Refusal
from bemescape.service.records import Problem
from bemescape.service.security import Keys
from bemescape.service.settings import Settings
from bemescape.service.store import Store

__all__ = ["REFUSALS", "Id", "Me", "Parts", "Service", "Triple", "buffers", "form_file", "json_body"]

#: Answers that any route may give, for the description of the API.
REFUSALS: dict[int | str, dict[str, Any]] = {
    status: {"model": Problem} for status in (400, 401, 403, 404, 409, 413, 415, 421, 422, 429, 503)
}


@dataclass(frozen=True)
class Service:
    """The parts of one service, as `create_app` puts them together."""

    settings: Settings
    keys: Keys
    store: Store
    crew: Crew
    hub: Hub
    jobs: Jobs


def _service(request: Request) -> Service:
    service: Service = request.app.state.service
    return service


def _me(request: Request) -> str:
    owner: str | None = request.state.owner
    if owner is None:  # the guard has refused such a request already
        raise Refusal(401, "a valid token is needed")
    return owner


_Number = Annotated[float, Field(ge=-1e12, le=1e12, allow_inf_nan=False)]
Triple = tuple[_Number, _Number, _Number]
Parts = Annotated[Service, Depends(_service)]
Me = Annotated[str, Depends(_me)]
Id = Annotated[str, Path(pattern="^[0-9a-f]{16}$", examples=["0123456789abcdef"])]


async def json_body(request: Request) -> Any:
    """The JSON of a request; the size is limited before it comes here.

    Raises
    ------
    Refusal
        It is not called JSON, or is none.
    """
    kind = request.headers.get("content-type", "").split(";")[0].strip().lower()
    if kind != "application/json":
        raise Refusal(415, "send this as application/json")
    try:
        return json.loads(await request.body())
    except (ValueError, RecursionError) as error:
        raise Refusal(400, "the body is not valid JSON") from error


async def form_file(request: Request) -> tuple[str, bytes, dict[str, str]]:
    """Name and bytes of the one file of a form, and its fields.

    Raises
    ------
    Refusal
        It is no form, or does not hold exactly one file called `file`.
    """
    kind = request.headers.get("content-type", "").split(";")[0].strip().lower()
    if kind != "multipart/form-data":
        raise Refusal(415, "send the file as multipart/form-data, in the field 'file'")
    async with request.form(max_files=1, max_fields=6, max_part_size=4096) as form:
        upload = form.get("file")
        if not isinstance(upload, UploadFile):
            raise Refusal(422, "the form has no file in the field 'file'")
        fields = {key: value for key, value in form.multi_items() if isinstance(value, str)}
        return upload.filename or "", await upload.read(), fields


def buffers(data: bytes, request: Request) -> Response:
    """Compressed buffers, to be unpacked by whoever asked."""
    if "gzip" not in request.headers.get("accept-encoding", ""):
        import gzip

        return Response(gzip.decompress(data), media_type="application/octet-stream")
    headers = {"Content-Encoding": "gzip", "Vary": "Accept-Encoding"}
    return Response(data, media_type="application/octet-stream", headers=headers)
