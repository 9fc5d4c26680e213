"""Signing in, and what the page has to know before anything else."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from fastapi import APIRouter, Request, Response

from bemescape.service.api.parts import REFUSALS, Parts, json_body
from bemescape.service.problems import Refusal
from bemescape.service.records import SessionRecord
from bemescape.service.security import COOKIE
from bemescape.version import __version__

__all__ = ["router"]

router = APIRouter(tags=["session"])
_TOKEN_BODY: dict[str, Any] = {
    "requestBody": {
        "required": True,
        "content": {
            "application/json": {
                "schema": {
                    "type": "object",
                    "properties": {"token": {"type": "string"}},
                    "required": ["token"],
                    "additionalProperties": False,
                }
            }
        },
    }
}


@router.get("/session")
def session(request: Request, parts: Parts) -> SessionRecord:
    """Whether a token is needed and whether this client has shown one."""
    return SessionRecord(
        token_needed=parts.keys.needed,
        signed_in=request.state.owner is not None,
        ready=parts.crew.ready,
        version=__version__,
        limits=asdict(parts.settings.limits),
    )


@router.post("/session", status_code=204, responses=REFUSALS, openapi_extra=_TOKEN_BODY)
async def sign_in(request: Request, parts: Parts) -> Response:
    """Show a token once; a cookie that scripts cannot read stands for it for twelve hours."""
    body = await json_body(request)
    token = body.get("token") if isinstance(body, dict) else None
    if not isinstance(token, str):
        raise Refusal(422, 'the body should be {"token": "..."}')
    if not parts.keys.needed:
        return Response(status_code=204)
    owner = parts.keys.owner_of_token(token)
    if owner is None:
        raise Refusal(401, "this token is not known here")
    answer = Response(status_code=204)
    answer.set_cookie(
        COOKIE,
        parts.keys.session(owner),
        max_age=12 * 3600,
        path="/api",
        httponly=True,
        samesite="strict",
        secure=request.url.scheme == "https",
    )
    return answer


@router.delete("/session", status_code=204)
def sign_out() -> Response:
    """Drop the cookie."""
    answer = Response(status_code=204)
    answer.delete_cookie(COOKIE, path="/api", httponly=True, samesite="strict")
    return answer
