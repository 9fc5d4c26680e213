"""Who may ask, and what a request may carry: tokens, foreign pages, sizes, headers of every answer.

Everything here is decided before a route runs, so that no route can forget it.
"""

from __future__ import annotations

import hashlib
import hmac
import time
from collections.abc import Mapping
from http.cookies import CookieError, SimpleCookie
from urllib.parse import urlsplit

from starlette.datastructures import Headers, MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from bemescape.service.problems import problem
from bemescape.service.settings import LOCAL_OWNER, Settings, is_loopback

__all__ = ["COOKIE", "Guard", "Keys", "SizeLimit"]

COOKIE = "bemescape_session"
_SESSION_S = 12 * 3600
#: Reached without a token: the page itself, which holds no data, and the way to sign in.
_OPEN = ("/api/session",)
_SAFE_METHODS = {"GET", "HEAD", "OPTIONS"}
#: JSON bodies are orders, a page of text.
JSON_BYTES = 256 * 1024
#: Room for the boundaries and small fields of a multipart body around its file.
_ENVELOPE_BYTES = 64 * 1024

_HEADERS = {
    "content-security-policy": (
        "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data: blob:; connect-src 'self'; "
        "base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
    ),
    "x-content-type-options": "nosniff",
    "referrer-policy": "no-referrer",
    "cross-origin-opener-policy": "same-origin",
    "cross-origin-resource-policy": "same-origin",
    "permissions-policy": "camera=(), microphone=(), geolocation=()",
}


class Keys:
    """Tokens and the sessions made from them; every comparison takes the same time."""

    def __init__(self, tokens: Mapping[str, str]) -> None:
        self._tokens = {owner: token.encode() for owner, token in tokens.items()}

    @property
    def needed(self) -> bool:
        """Whether a token has to be shown."""
        return bool(self._tokens)

    def owner_of_token(self, token: str) -> str | None:
        """Whose token it is; None for nobody's."""
        given, found = token.encode("utf-8", "surrogatepass"), None
        for owner, known in self._tokens.items():
            # All are compared, whether or not one has fitted already.
            if hmac.compare_digest(hashlib.sha256(given).digest(), hashlib.sha256(known).digest()):
                found = owner
        return found

    def session(self, owner: str, now: float | None = None) -> str:
        """A cookie's value that proves the token without holding it, for twelve hours."""
        ends = str(int((time.time() if now is None else now) + _SESSION_S))
        return f"{ends}.{self._signature(self._tokens[owner], ends)}"

    def owner_of_session(self, value: str, now: float | None = None) -> str | None:
        """Whose session it is; None for an old or an invented one."""
        ends, _, signature = value.partition(".")
        if not (ends.isascii() and ends.isdigit() and len(ends) < 12 and signature.isascii()):
            return None
        if int(ends) < (time.time() if now is None else now):
            return None
        found = None
        for owner, known in self._tokens.items():
            if hmac.compare_digest(self._signature(known, ends), signature):
                found = owner
        return found

    @staticmethod
    def _signature(token: bytes, ends: str) -> str:
        return hmac.new(token, f"bemescape session until {ends}".encode(), hashlib.sha256).hexdigest()

    def owner_of_request(self, headers: Headers) -> str | None:
        """Whose request it is; None if it shows neither a valid token nor a valid session."""
        if not self.needed:
            return LOCAL_OWNER
        scheme, _, token = headers.get("authorization", "").partition(" ")
        if scheme.lower() == "bearer":
            return self.owner_of_token(token.strip())
        cookies = SimpleCookie()
        try:
            cookies.load(headers.get("cookie", ""))
        except CookieError:
            return None
        return self.owner_of_session(cookies[COOKIE].value) if COOKIE in cookies else None


class Guard:
    """Every request passes here first; every answer leaves with the headers of `_HEADERS`."""

    def __init__(self, app: ASGIApp, settings: Settings, keys: Keys) -> None:
        self._app, self._settings, self._keys = app, settings, keys

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return

        async def send_with_headers(message: Message) -> None:
            if message["type"] == "http.response.start":
                headers = MutableHeaders(scope=message)
                for name, value in _HEADERS.items():
                    headers.setdefault(name, value)
                if scope["path"].startswith("/api"):
                    headers.setdefault("cache-control", "no-store")
            await send(message)

        headers = Headers(scope=scope)
        refusal = self._refusal(scope, headers)
        if refusal is not None:
            await problem(*refusal)(scope, receive, send_with_headers)
            return
        scope.setdefault("state", {})["owner"] = self._keys.owner_of_request(headers)
        await self._app(scope, receive, send_with_headers)

    def _refusal(self, scope: Scope, headers: Headers) -> tuple[int, str] | None:
        host = headers.get("host", "")
        # A foreign page may point a name of its own at this machine: only names that are surely ours are served.
        if not self._keys.needed and not is_loopback(urlsplit(f"//{host}").hostname or ""):
            return 421, "this service answers to 127.0.0.1 and localhost only"
        if scope["method"] not in _SAFE_METHODS and not _own_page(headers, host):
            return 403, "this request comes from the page of another site"
        if "content-encoding" in headers:
            return 415, "compressed requests are not taken; send the file as it is"
        path = scope["path"]
        if path.startswith("/api") and path not in _OPEN and self._keys.owner_of_request(headers) is None:
            return 401, "a valid token is needed: send it as 'Authorization: Bearer TOKEN', or sign in on the page"
        return None


def _own_page(headers: Headers, host: str) -> bool:
    """Whether a request that changes something comes from our page or from a program, not from another site."""
    if headers.get("sec-fetch-site", "none") not in {"none", "same-origin"}:
        return False
    origin = headers.get("origin")
    return origin is None or urlsplit(origin).netloc == host


class SizeLimit:
    """Refuse a body that is too large before it is kept: by its declared length, or when it passes the limit."""

    def __init__(self, app: ASGIApp, upload_bytes: int) -> None:
        self._app, self._upload_bytes = app, upload_bytes

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        headers = Headers(scope=scope)
        is_file = headers.get("content-type", "").lower().startswith("multipart/")
        limit = self._upload_bytes + _ENVELOPE_BYTES if is_file else JSON_BYTES
        too_large = problem(
            413, f"the request is larger than {limit / 1e6:.3g} MB, the limit here; send a smaller file"
        )
        # The rest of the body is not listened to.
        too_large.headers["connection"] = "close"
        declared = headers.get("content-length", "0")
        if not (declared.isascii() and declared.isdigit() and len(declared) < 16):
            await problem(400, "the Content-Length is no number")(scope, receive, send)
            return
        if int(declared) > limit:
            await too_large(scope, receive, send)
            return
        received, answered, started = 0, False, False

        async def counted() -> Message:
            nonlocal received, answered
            message = await receive()
            if message["type"] == "http.request":
                received += len(message.get("body", b""))
                if received > limit:
                    if not started:
                        answered = True
                        await too_large(scope, receive, send)
                    return {"type": "http.disconnect"}
            return message

        async def watched(message: Message) -> None:
            nonlocal started
            started = True
            if not answered:
                await send(message)

        try:
            await self._app(scope, counted, watched)
        except Exception:
            if not answered:  # the app's complaint about the end of a body that we ended ourselves
                raise
