"""What goes wrong, and what HTTP says about it (RFC 9457): one table from exception to status."""

from __future__ import annotations

import errno
import logging
import sqlite3
import uuid
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from sqlalchemy.exc import OperationalError

from recon.errors import CalibrationMissing, InvalidScan, InvalidSettings, ReconError

log = logging.getLogger("fallow")

PROBLEM_MEDIA_TYPE: Final = "application/problem+json"
_TYPE_PREFIX: Final = "urn:fallow:problem:"


class ServiceError(Exception):
    """Root of what the service raises on purpose.

    Parameters
    ----------
    detail : str
        One sentence: what was received, what is accepted, what to do.
    errors : sequence of mappings
        Single mistakes, each with `detail` and `pointer` (JSON pointer into the body) or `parameter`.
    retry_after : int, optional
        Seconds after which the same request may succeed.
    headers : mapping
        Further header fields of the answer.
    """

    def __init__(
        self,
        detail: str,
        *,
        errors: Sequence[Mapping[str, str]] = (),
        retry_after: int | None = None,
        headers: Mapping[str, str] | None = None,
    ) -> None:
        super().__init__(detail)
        self.detail = detail
        self.errors = [dict(error) for error in errors]
        self.retry_after = retry_after
        self.headers = dict(headers or {})


class Malformed(ServiceError, ValueError):
    """The request cannot be understood."""


class Unauthorised(ServiceError):
    """No token, or an unknown one."""


class NotFound(ServiceError, LookupError):
    """Nothing of this kind and identifier that the caller may see."""


class MethodNotAllowed(ServiceError):
    """The path exists, the method does not."""


class Stalled(ServiceError, TimeoutError):
    """An upload without data for too long."""


class WrongState(ServiceError):
    """The scan or job is not in the state that the call needs."""


class TooLarge(ServiceError):
    """More bytes than allowed."""


class WrongMediaType(ServiceError):
    """A body of another type than the call accepts."""


class RangeNotSatisfiable(ServiceError):
    """A range beyond the end of the file."""


class Misdirected(ServiceError):
    """A Host header that this service does not answer to."""


class Refused(ServiceError, ValueError):
    """Content that was understood and cannot be accepted."""


class ScanRefused(Refused):
    """An uploaded file that is no acceptable scan."""


class Unavailable(ServiceError):
    """The service cannot do this at the moment."""


@dataclass(frozen=True)
class ProblemKind:
    """Status, type and title of one kind of problem."""

    status: int
    slug: str
    title: str


INTERNAL: Final = ProblemKind(500, "internal", "The service failed")
INVALID_SCAN: Final = ProblemKind(422, "invalid-scan", "The scan is refused")
COMPUTING_DIED: Final = ProblemKind(500, "computing-died", "The computing process died twice")
WORKERS_DIED: Final = ProblemKind(500, "workers-died", "The workers carrying out the job died")
INSUFFICIENT_MEMORY: Final = ProblemKind(
    500, "insufficient-memory", "The memory of the worker does not suffice"
)
UNAVAILABLE: Final = ProblemKind(503, "unavailable", "The service cannot do this at the moment")

#: The one table; the first matching class of an exception's ancestry decides.
KINDS: Final[Mapping[type[BaseException], ProblemKind]] = {
    Malformed: ProblemKind(400, "malformed", "The request cannot be understood"),
    Unauthorised: ProblemKind(401, "unauthorised", "A valid token is needed"),
    NotFound: ProblemKind(404, "not-found", "There is no such thing here"),
    MethodNotAllowed: ProblemKind(405, "method-not-allowed", "This path does not answer that method"),
    Stalled: ProblemKind(408, "stalled-upload", "The upload stalled"),
    WrongState: ProblemKind(409, "wrong-state", "The state does not allow this"),
    TooLarge: ProblemKind(413, "too-large", "The content is too large"),
    WrongMediaType: ProblemKind(415, "wrong-media-type", "The content has the wrong type"),
    RangeNotSatisfiable: ProblemKind(416, "range-not-satisfiable", "The range lies outside the file"),
    Misdirected: ProblemKind(421, "misdirected", "This service does not answer to that host name"),
    Refused: ProblemKind(422, "refused", "The content is refused"),
    ScanRefused: INVALID_SCAN,
    CalibrationMissing: ProblemKind(
        422, "calibration-missing", "Coil maps cannot be estimated from this scan"
    ),
    InvalidScan: INVALID_SCAN,
    InvalidSettings: ProblemKind(422, "invalid-settings", "The settings are refused"),
    ReconError: ProblemKind(422, "not-reconstructable", "The scan cannot be reconstructed so"),
    Unavailable: UNAVAILABLE,
}


def kind_of(error: BaseException) -> ProblemKind:
    """Look an exception up in the table; what is not in it is an internal fault, or a want of disk or database."""
    for ancestor in type(error).__mro__:
        if ancestor in KINDS:
            return KINDS[ancestor]
    return UNAVAILABLE if shortage(error) else INTERNAL


def problem(
    kind: ProblemKind, detail: str, *, errors: Sequence[Mapping[str, str]] = (), **members: Any
) -> dict[str, Any]:
    """Build a problem document."""
    document: dict[str, Any] = {
        "type": _TYPE_PREFIX + kind.slug,
        "title": kind.title,
        "status": kind.status,
        "detail": detail,
        **members,
    }
    if errors:
        document["errors"] = [dict(error) for error in errors]
    return document


def problem_of(error: BaseException) -> tuple[dict[str, Any], dict[str, str]]:
    """Turn an exception into a problem document and the header fields that go with it.

    An exception that is not in the table is logged with a correlation identifier, and the answer carries that
    identifier and nothing else about it.
    """
    kind = kind_of(error)
    if isinstance(error, ServiceError):
        headers = dict(error.headers)
        if error.retry_after is not None:
            headers["Retry-After"] = str(error.retry_after)
        return problem(kind, error.detail, errors=error.errors), headers
    if isinstance(error, InvalidSettings):
        return problem(kind, str(error), errors=pointers(error)), {}
    if isinstance(error, ReconError):
        return problem(kind, str(error)), {}
    if kind is UNAVAILABLE:
        log.warning("request could not be served: %s", error)
        return problem(kind, f"{shortage(error)}; try again later"), {"Retry-After": "5"}
    correlation = str(uuid.uuid4())
    log.error("unexpected error %s", correlation, exc_info=error)
    detail = (
        f"an unexpected error, logged as {correlation}: report this identifier to whoever runs the service"
    )
    return problem(kind, detail, correlation_id=correlation), {}


def pointers(error: InvalidSettings, prefix: str = "/settings") -> list[dict[str, str]]:
    """The single mistakes of refused settings, as JSON pointers into the body of a request."""
    return [
        {"pointer": prefix + item["pointer"].rstrip("/"), "detail": item["detail"]} for item in error.errors
    ]


def shortage(error: BaseException) -> str | None:
    """What the machine is short of, when that is why `error` was raised."""
    if isinstance(error, OSError) and error.errno in {errno.ENOSPC, errno.EDQUOT}:
        return "the disk of the service is full"
    cause = error.orig if isinstance(error, OperationalError) else error
    if isinstance(cause, sqlite3.OperationalError):
        if "locked" in str(cause) or "busy" in str(cause):
            return "the database is locked by another process"
        if "full" in str(cause):
            return "the disk of the service is full"
        if "readonly" in str(cause) or "unable to open" in str(cause):
            return "the database cannot be written"
    return None
