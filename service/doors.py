"""What every request passes on its way in, outermost first: faults, host, token, size, HEAD."""

from __future__ import annotations

import json
import logging
import re
from typing import Any, Final

from starlette.datastructures import Headers
from starlette.requests import ClientDisconnect
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.errors import PROBLEM_MEDIA_TYPE, Misdirected, TooLarge, problem_of
from service.tokens import Tokens

log = logging.getLogger("fallow")

#: Largest body of a call that takes JSON.
LARGEST_JSON: Final = 1 << 20
_PORT: Final = re.compile(r":\d*$")


class Faults:
    """Turns every exception into a problem document; nothing leaves the service in another form."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        is_started = False

        async def noting_send(message: Message) -> None:
            nonlocal is_started
            is_started = is_started or message["type"] == "http.response.start"
            await send(message)

        try:
            await self._app(scope, receive, noting_send)
        except ClientDisconnect:
            log.info("the caller of %s %s went away", scope["method"], scope["path"])
        except Exception as error:
            if is_started:
                # Too late for another answer: the connection breaks off, which tells the client that it is incomplete.
                raise
            await send_problem(error, scope, send)


async def send_problem(error: Exception, scope: Scope, send: Send) -> None:
    """Answer with the problem document of an exception."""
    document, headers = problem_of(error)
    # A lone surrogate that the caller sent goes back as the escape that it came as.
    body = json.dumps(document, ensure_ascii=False).encode(errors="backslashreplace")
    fields = {"Content-Type": PROBLEM_MEDIA_TYPE, "Content-Length": str(len(body)), **headers}
    raw = [(name.lower().encode("latin-1"), value.encode("latin-1")) for name, value in fields.items()]
    await send({"type": "http.response.start", "status": document["status"], "headers": raw})
    await send({"type": "http.response.body", "body": b"" if scope["method"] == "HEAD" else body})


class HostCheck:
    """Answers only to the names it was given: a page elsewhere cannot make a browser call it under another name."""

    def __init__(self, app: ASGIApp, hosts: tuple[str, ...]) -> None:
        self._app = app
        self._hosts = frozenset(hosts)

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] == "http":
            host = Headers(scope=scope).get("host", "")
            if _PORT.sub("", host).lower() not in self._hosts:
                raise Misdirected(
                    f"the Host header {host!r} is none of {', '.join(sorted(self._hosts))}: call the service by one of "
                    "these names, or have FALLOW_HOSTS extended"
                )
        await self._app(scope, receive, send)


class TokenCheck:
    """Lets only known callers in, before anything of the body is read; health needs no token."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] == "http" and not scope["path"].startswith("/health/"):
            tokens: Tokens = scope["app"].state.services.tokens
            scope.setdefault("state", {})["caller"] = tokens.principal(
                Headers(scope=scope).get("authorization")
            )
        await self._app(scope, receive, send)


class BodyLimit:
    """Bounds the bodies of all calls but uploads, which count for themselves."""

    def __init__(self, app: ASGIApp, unbounded: str) -> None:
        self._app = app
        self._unbounded = unbounded

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http" or scope["path"] == self._unbounded:
            await self._app(scope, receive, send)
            return
        announced = Headers(scope=scope).get("content-length", "")
        if announced.isdecimal() and int(announced) > LARGEST_JSON:
            raise _too_large()
        received = 0

        async def counting_receive() -> Message:
            nonlocal received
            message = await receive()
            received += len(message.get("body", b""))
            if received > LARGEST_JSON:
                raise _too_large()
            return message

        await self._app(scope, counting_receive, send)


class HeadAsGet:
    """Lets every GET route answer HEAD: the same header, no body.

    `scope["state"]["is_head"]` tells routes with long answers not to make one.
    """

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http" or scope["method"] != "HEAD":
            await self._app(scope, receive, send)
            return
        inner: dict[str, Any] = {**scope, "method": "GET"}
        inner.setdefault("state", {})["is_head"] = True

        async def send_without_body(message: Message) -> None:
            if message["type"] == "http.response.start":
                await send(message)
            elif not message.get("more_body", False):
                await send({"type": "http.response.body", "body": b""})

        await self._app(inner, receive, send_without_body)


def _too_large() -> TooLarge:
    return TooLarge(
        f"the body has more than {LARGEST_JSON} bytes; orders are small: send the scan to /v1/scans"
    )
