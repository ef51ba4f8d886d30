"""A service that misbehaves on cue: each request meets the next step of a script. For faults the real one cannot be
asked to have; everything else is tested against the real service."""

from __future__ import annotations

import json
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any


@dataclass(frozen=True)
class Received:
    """One request as it arrived."""

    method: str
    path: str
    headers: Mapping[str, str]
    body: bytes


@dataclass(frozen=True)
class Step:
    """What one request meets.

    Attributes
    ----------
    cut_after : int, optional
        Close the connection after this many bytes of the body; -1: without any answer.
    """

    status: int = 200
    body: bytes = b"{}"
    headers: Mapping[str, str] = field(default_factory=dict)
    cut_after: int | None = None


def answer(value: Any, status: int = 200, **headers: str) -> Step:
    """A JSON answer."""
    named = {name.replace("_", "-"): text for name, text in headers.items()}
    return Step(status, json.dumps(value).encode(), {"Content-Type": "application/json", **named})


def refusal(status: int, detail: str, **members: Any) -> Step:
    """A problem of RFC 9457."""
    body = json.dumps(
        {"type": "about:blank", "title": "no", "status": status, "detail": detail, **members}
    ).encode()
    return Step(status, body, {"Content-Type": "application/problem+json"})


DROP = Step(cut_after=-1)


@dataclass
class Scripted:
    """Address of the service and what it received."""

    url: str
    received: list[Received]


@contextmanager
def scripted(*steps: Step | Callable[[Received], Step]) -> Iterator[Scripted]:
    """Serve the steps in order on a free port; one request more than there are steps is dropped."""
    received: list[Received] = []

    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def handle_request(self) -> None:
            length = int(self.headers.get("Content-Length", 0))
            request = Received(self.command, self.path, dict(self.headers.items()), self.rfile.read(length))
            received.append(request)
            chosen = steps[len(received) - 1] if len(received) <= len(steps) else DROP
            step = chosen(request) if callable(chosen) else chosen
            self.close_connection = True
            if step.cut_after == -1:
                return
            self.send_response(step.status)
            for name, value in step.headers.items():
                self.send_header(name, value)
            self.send_header("Content-Length", str(len(step.body)))
            self.send_header("Connection", "close")
            self.end_headers()
            self.wfile.write(step.body if step.cut_after is None else step.body[: step.cut_after])

        # The names that the standard library calls.
        do_GET = do_POST = do_DELETE = handle_request  # noqa: N815

        def log_message(self, format: str, *args: Any) -> None:
            """Say nothing."""

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    server.daemon_threads = False
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    try:
        yield Scripted(f"http://127.0.0.1:{server.server_address[1]}", received)
    finally:
        server.shutdown()
        thread.join()
        server.server_close()
