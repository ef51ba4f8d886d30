"""What can go wrong on the client's side: one clear sentence each, with problem details where the service said it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


class FallowError(Exception):
    """Root of every error that the client raises on purpose."""


class InputRefused(FallowError, ValueError):
    """Something handed to the client cannot be sent, found before anything was sent."""


class ServiceUnreachable(FallowError, ConnectionError):
    """No service answers at the address, or it is out of order for now (503)."""


class WaitTimedOut(FallowError, TimeoutError):
    """The job was not done within the time that the caller allowed; it goes on."""


class DamagedDownload(FallowError):
    """What arrived differs from what the service says it sent."""


class RequestRefused(FallowError):
    """The service refused the request (a 4xx status).

    Attributes
    ----------
    problem : dict
        Problem details of RFC 9457: `type`, `title`, `status`, `detail`, `errors`.
    status : int
    """

    def __init__(self, problem: Mapping[str, Any]) -> None:
        self.problem = dict(problem)
        self.status = int(problem.get("status", 0))
        super().__init__(sentence(problem))


class ServiceFault(RequestRefused):
    """The service failed at the request (a 5xx status)."""


class JobFailed(FallowError):
    """The job ended as `failed` or `dismissed`.

    Attributes
    ----------
    problem : dict
        The problem that the job carries; empty for a dismissed one.
    state : str
    """

    def __init__(self, job_id: str, state: str, problem: Mapping[str, Any] | None) -> None:
        self.problem = dict(problem or {})
        self.state = state
        reason = f": {sentence(self.problem)}" if self.problem else "."
        super().__init__(f"Job {job_id} {'was dismissed' if state == 'dismissed' else 'failed'}{reason}")


def sentence(problem: Mapping[str, Any]) -> str:
    """Problem details as one line: the detail, then each refused member with its reason."""
    said = str(problem.get("detail") or problem.get("title") or f"status {problem.get('status')}")
    members = [
        f"{str(entry.get('pointer', '')).lstrip('#/') or 'request'}: {entry.get('detail', '')}"
        for entry in problem.get("errors") or []
        if isinstance(entry, Mapping) and str(entry.get("detail", "")) not in said
    ]
    whole = f"{said} ({'; '.join(members)})" if members else said
    return " ".join(whole.split())
