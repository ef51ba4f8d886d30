"""Answers that several routes give: jobs with their hints, and files with ranges and digests."""

from __future__ import annotations

import asyncio
import re
from pathlib import Path
from typing import Any, Final

from fastapi import Request, Response
from fastapi.responses import FileResponse, JSONResponse

from service.api.routing import Answers
from service.errors import RangeNotSatisfiable, Unavailable, WrongState
from service.schemas import JobOut
from service.services import Services
from service.store.jobs import JobRecord
from service.uploads import repr_digest

_RANGE: Final = re.compile(r"bytes=\s*(?:\d+-\d*|-\d+)(?:\s*,\s*(?:\d+-\d*|-\d+))*\s*")
PARTIAL: Final[Answers] = {
    206: {"description": "The ranges that were asked for"},
    304: {"description": "The version that `If-None-Match` names is still the one"},
}
_MOST_RANGES: Final = 16
_SHORTEST_RETRY: Final = 1
_LONGEST_RETRY: Final = 30


async def describe_job(parts: Services, job: JobRecord) -> JobOut:
    """Describe a job with its place in the queue and its time left."""
    return JobOut.of(job, await asyncio.to_thread(parts.estimates.of, job))


def retry_after(job: JobOut) -> int:
    """When it is worth asking for a job again, in seconds."""
    left = job.estimated_seconds_left
    return _SHORTEST_RETRY if left is None else round(min(max(left, _SHORTEST_RETRY), _LONGEST_RETRY))


def job_answer(job: JobOut, status: int, headers: dict[str, str]) -> JSONResponse:
    """Answer with a job; an unfinished one says when to ask again."""
    hints = {"Location": f"/v1/jobs/{job.id}"} if status in {201, 202} else {}
    if job.finished_at is None:
        hints["Retry-After"] = str(retry_after(job))
    return JSONResponse(job.model_dump(mode="json"), status, {**hints, **headers})


def result_file(parts: Services, job: JobRecord, name: str) -> tuple[Path, dict[str, Any]]:
    """Find a file of a job's results.

    Raises
    ------
    WrongState
        The job is not successful, or not yet.
    Unavailable
        The file is gone from the disk.
    """
    facts = result_facts(parts, job).get(name)
    path = parts.files.result(job.id) / name
    if facts is None or not path.is_file():
        raise Unavailable(
            f"the file {name} of job {job.id} is missing on the disk of the service: order the job again"
        )
    return path, facts


def result_facts(parts: Services, job: JobRecord) -> dict[str, Any]:
    """Size and digest of every file of a successful job's results; raises WrongState as `result_file` does."""
    if job.state == "failed":
        raise WrongState(
            f"job {job.id} failed and has no results: see its `error`, mend the cause and order it again"
        )
    if job.state == "dismissed":
        raise WrongState(f"job {job.id} was dismissed and has no results: order it again if they are wanted")
    if not job.is_finished:
        left = parts.estimates.of(job)[1]
        wait = _SHORTEST_RETRY if left is None else round(min(max(left, _SHORTEST_RETRY), _LONGEST_RETRY))
        raise WrongState(
            f"job {job.id} is {job.state} and has no results yet: ask again later, or wait with `Prefer: wait=N` on "
            "the job",
            retry_after=wait,
        )
    return job.files or {}


def file_answer(
    request: Request, path: Path, *, sha256: str, size: int, media_type: str, filename: str | None = None
) -> Response:
    """Answer with a file: ranges, conditions and digest (RFC 9110, RFC 9530).

    Raises
    ------
    RangeNotSatisfiable
    """
    etag = f'"{sha256}"'
    headers = {
        "ETag": etag,
        "Repr-Digest": repr_digest(sha256),
        "Cache-Control": "private, no-cache",
        "Accept-Ranges": "bytes",
    }
    known = [tag.strip().removeprefix("W/") for tag in request.headers.get("if-none-match", "").split(",")]
    if etag in known or "*" in known:
        return Response(status_code=304, headers=headers)
    if getattr(request.state, "is_head", False):
        return Response(headers={**headers, "Content-Length": str(size), "Content-Type": media_type})
    _settle_range(request, etag, size)
    return FileResponse(path, headers=headers, media_type=media_type, filename=filename)


def _settle_range(request: Request, etag: str, size: int) -> None:
    """Drop a Range that is not well formed or out of date, as the standard allows; refuse one beyond the end."""
    wanted = request.headers.get("range")
    if wanted is None:
        return
    is_current = request.headers.get("if-range", etag) == etag
    parts = [part.strip().split("-") for part in wanted.removeprefix("bytes=").split(",")]
    if (
        _RANGE.fullmatch(wanted) is None
        or not is_current
        or len(parts) > _MOST_RANGES
        or not _are_ordered(parts)
    ):
        request.scope["headers"] = [
            (name, value) for name, value in request.scope["headers"] if name != b"range"
        ]
        return
    within = [part for part in parts if not part[0] or int(part[0]) < size]
    if not within:
        raise RangeNotSatisfiable(
            f"the range {wanted} lies beyond the end of the file, which has {size} bytes",
            headers={"Content-Range": f"bytes */{size}"},
        )
    if len(within) < len(parts):
        # What can be satisfied is sent (RFC 9110, 14.2); the rest is left out.
        kept = "bytes=" + ",".join("-".join(part) for part in within)
        request.scope["headers"] = [
            (name, kept.encode() if name == b"range" else value) for name, value in request.scope["headers"]
        ]


def _are_ordered(parts: list[list[str]]) -> bool:
    return (
        all(not (first and last) or int(first) <= int(last) for first, last in parts)
        and ["", "0"] not in parts
    )
