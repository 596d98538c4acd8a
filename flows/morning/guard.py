"""What every request must get past: known host, same origin, size, session, role, form token; and what every
answer carries. Knows no page.
"""

from __future__ import annotations

import secrets
from collections.abc import Awaitable, Callable
from typing import Annotated, cast
from urllib.parse import urlsplit

from fastapi import Depends, Request
from starlette.datastructures import Headers, MutableHeaders
from starlette.responses import PlainTextResponse
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from flows.morning.sessions import Session, Sessions
from flows.site.reviewers import Role

COOKIE = "halfsat"
LARGEST_BODY = 1 << 20
CSRF_FIELD, CSRF_HEADER = "csrf", "x-halfsat-csrf"
RANK: dict[Role, int] = {"reader": 0, "reviewer": 1, "approver": 2}
SAFE_METHODS = ("GET", "HEAD", "OPTIONS")
HEADERS = {
    "content-security-policy": (
        "default-src 'none'; style-src 'self'; script-src 'self'; img-src 'self'; connect-src 'self'; "
        "form-action 'self'; frame-ancestors 'none'; base-uri 'none'"
    ),
    "x-content-type-options": "nosniff",
    "referrer-policy": "same-origin",
    "cross-origin-opener-policy": "same-origin",
    "cross-origin-resource-policy": "same-origin",
    "permissions-policy": "camera=(), microphone=(), geolocation=()",
}


class NotSignedIn(Exception):
    """There is no session: the page leads to the sign-in page."""


class NotAllowed(Exception):
    """The session's role may not do this, or the form did not come from this session's page."""

    def __init__(self, what: str) -> None:
        self.what = what
        super().__init__(what)


def needs(role: Role) -> Callable[[Request], Awaitable[Session]]:
    """A dependency that lets a request pass for this role and those above it.

    Raises
    ------
    NotSignedIn
        Without a session.
    NotAllowed
        If the role is too low, or a request that changes something lacks the session's token.
    """

    async def check(request: Request) -> Session:
        sessions = cast(Sessions, request.app.state.sessions)
        session = sessions.find(request.cookies.get(COOKIE))
        if session is None:
            raise NotSignedIn
        if RANK[session.role] < RANK[role]:
            raise NotAllowed(f"this needs the role {role}; {session.name} is {session.role}")
        if request.method not in SAFE_METHODS:
            given = request.headers.get(CSRF_HEADER)
            if given is None and not (request.headers.get("content-type") or "").startswith(
                "application/json"
            ):
                given = str((await request.form()).get(CSRF_FIELD, ""))
            if not secrets.compare_digest(given or "", session.csrf):
                raise NotAllowed("the form is not this session's: open the page again")
        return session

    check.__dict__["role"] = role
    return check


Reader = Annotated[Session, Depends(needs("reader"))]
Decider = Annotated[Session, Depends(needs("reviewer"))]


class Guard:
    """Refuses foreign hosts, foreign origins and oversized bodies before anything reads them."""

    def __init__(self, app: ASGIApp, hosts: frozenset[str], secure: bool) -> None:
        self.app = app
        self.hosts = hosts
        self.headers = dict(HEADERS)
        if secure:
            self.headers["strict-transport-security"] = "max-age=31536000"

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Let a request through, or answer it here."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        dressed = self._with_headers(send)
        headers = Headers(scope=scope)
        refusal = self._refusal(scope["method"], headers)
        if refusal is not None:
            await refusal(scope, receive, dressed)
            return
        await self.app(scope, _limited(receive), dressed)

    def _refusal(self, method: str, headers: Headers) -> PlainTextResponse | None:
        host = headers.get("host", "")
        if urlsplit(f"//{host}").hostname not in self.hosts:
            return PlainTextResponse("this host is not served here", 421)
        origin = headers.get("origin")
        if method not in SAFE_METHODS and origin is not None and urlsplit(origin).netloc != host:
            return PlainTextResponse("the form comes from another site", 403)
        length = headers.get("content-length", "0")
        if not length.isdecimal() or int(length) > LARGEST_BODY:
            return PlainTextResponse("the request is too large", 413)
        return None

    def _with_headers(self, send: Send) -> Send:
        async def dressed(message: Message) -> None:
            if message["type"] == "http.response.start":
                answer = MutableHeaders(scope=message)
                for name, value in self.headers.items():
                    answer[name] = value
                answer.setdefault("cache-control", "no-store")
            await send(message)

        return dressed


def _limited(receive: Receive) -> Receive:
    """A body that ends as soon as it is too large, whatever its stated length."""
    seen = 0

    async def limited() -> Message:
        nonlocal seen
        message = await receive()
        if message["type"] == "http.request":
            seen += len(message.get("body", b""))
            if seen > LARGEST_BODY:
                return {"type": "http.disconnect"}
        return message

    return limited
