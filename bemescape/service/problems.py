"""What a client is told when something is refused: one sentence and one status."""

from __future__ import annotations

import logging
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from bemescape.errors import EscapeError

__all__ = ["Refusal", "install_handlers", "problem"]

log = logging.getLogger("bemescape.service")


class Refusal(Exception):
    """An answer other than the one that was asked for; the message is the sentence the client reads."""

    def __init__(self, status: int, message: str, **more: Any) -> None:
        super().__init__(message)
        self.status, self.message, self.more = status, message, more


def problem(status: int, message: str, **more: Any) -> JSONResponse:
    """The JSON of a refusal."""
    headers = {"WWW-Authenticate": "Bearer"} if status == 401 else None
    return JSONResponse({"detail": message, **more}, status_code=status, headers=headers)


def install_handlers(app: FastAPI) -> None:
    """Errors become sentences; what is our fault goes to the log and stays there."""

    @app.exception_handler(Refusal)
    def _refused(_request: Request, error: Refusal) -> JSONResponse:
        return problem(error.status, error.message, **error.more)

    @app.exception_handler(EscapeError)
    def _wrong_input(_request: Request, error: EscapeError) -> JSONResponse:
        return problem(422, str(error))

    @app.exception_handler(RequestValidationError)
    def _wrong_request(_request: Request, error: RequestValidationError) -> JSONResponse:
        first = error.errors()[0]
        place = ".".join(str(part) for part in first["loc"][1:]) or str(first["loc"][0])
        return problem(422, f"{place[:80]}: {first['msg'][:200]}")

    @app.exception_handler(HTTPException)
    def _http(_request: Request, error: HTTPException) -> JSONResponse:
        answer = problem(error.status_code, str(error.detail))
        answer.headers.update(error.headers or {})
        return answer

    @app.exception_handler(Exception)
    def _our_fault(request: Request, error: Exception) -> JSONResponse:
        log.error("%s %s failed", request.method, request.url.path, exc_info=error)
        return problem(500, "the service failed at this request; its log says why")
