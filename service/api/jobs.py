"""`/v1/jobs`: reconstructions are ordered, followed and ended here."""

from __future__ import annotations

import asyncio
import hashlib
import math
from typing import Annotated, Any

from fastapi import APIRouter, Header, Request, Response
from fastapi.responses import JSONResponse

from recon.feasibility import check_job
from service.api.answers import describe_job, job_answer, retry_after
from service.api.routing import (
    Answers,
    Caller,
    ListFilter,
    Parts,
    Route,
    check_state,
    checked_key,
    documented,
    preferred_wait,
    wait_applied,
)
from service.errors import NotFound, Refused
from service.ids import new_id
from service.schemas import JobOrder, JobOut, JobPage
from service.services import Services
from service.store.jobs import STATES, JobRecord, insert_job
from service.store.scans import find_scan

router = APIRouter(prefix="/v1/jobs", tags=["jobs"], route_class=Route)

Prefer = Annotated[
    str | None,
    Header(description="`wait=N`: answer when the job is finished, or after N seconds (60 at most)"),
]
IdempotencyKey = Annotated[
    str | None,
    Header(description="the same request under the same key has one effect and one answer, for 7 days"),
]


_FINISHED: Answers = {200: {"model": JobOut, "description": "With `Prefer: wait=N`: the job is finished"}}


@router.post(
    "",
    status_code=202,
    response_model=JobOut,
    responses=_FINISHED | documented(409, 413, 415, 422),
)
async def order_job(
    request: Request,
    parts: Parts,
    caller: Caller,
    order: JobOrder,
    prefer: Prefer = None,
    idempotency_key: IdempotencyKey = None,
) -> Response:
    """Order a reconstruction. It is refused at once when the settings cannot work with the scan."""
    key, wait = checked_key(request), preferred_wait(request)
    fingerprint = hashlib.sha256(b"job " + await request.body()).hexdigest()
    answer, job = await asyncio.to_thread(_write_row, parts, caller.owner, order, key, fingerprint)
    if job is not None:
        await asyncio.to_thread(parts.queue.put_soon, job)
    if wait:
        job = await parts.watch.until_finished(caller.owner, answer["body"]["id"], wait)
        described = await describe_job(parts, job)
        status = 200 if job.is_finished else 202
        location = {"Location": answer["headers"]["Location"]}
        return job_answer(described, status, location | wait_applied(wait))
    return JSONResponse(answer["body"], answer["status"], answer["headers"])


def _write_row(
    parts: Services, owner: str, order: JobOrder, key: str | None, fingerprint: str
) -> tuple[dict[str, Any], JobRecord | None]:
    """Write the row of a job, and the answer under its key, in one transaction.

    Returns
    -------
    (dict, JobRecord or None)
        The answer, and the new job; None where the key had been used for the same order.
    """
    with parts.database.write() as connection:
        if key is not None:
            before = parts.idempotency.find(connection, owner, key, fingerprint)
            if before is not None:
                return before, None
        try:
            scan = find_scan(connection, owner, order.scan)
        except NotFound as error:
            raise Refused(
                f"{error.detail}; send the scan first",
                errors=[{"pointer": "/scan", "detail": "unknown scan"}],
            ) from None
        check_job(scan.facts, order.settings)
        job = insert_job(
            connection,
            {
                "id": new_id(),
                "owner": owner,
                "kind": order.kind,
                "label": order.label,
                "scan": scan.id,
                "settings": order.settings.model_dump(mode="json"),
                "priority": order.priority,
                "work": math.prod(scan.facts["axes"].values()),
                "pace": order.settings.method,
            },
        )
        described = JobOut.of(job, parts.estimates.of(job))
        headers = {"Location": f"/v1/jobs/{job.id}", "Retry-After": str(retry_after(described))}
        answer = {"status": 202, "headers": headers, "body": described.model_dump(mode="json")}
        if key is not None:
            parts.idempotency.record(connection, owner, key, fingerprint, answer)
    return answer, job


@router.get("", responses=documented(422))
def list_jobs(parts: Parts, caller: Caller, wanted: ListFilter) -> JobPage:
    """List jobs, newest first."""
    check_state(wanted.state, STATES)
    found, cursor = parts.jobs.page(caller.owner, wanted)
    estimates = parts.estimates.of_all(found)
    return JobPage(items=[JobOut.of(*pair) for pair in zip(found, estimates, strict=True)], next=cursor)


@router.get("/{job_id}", response_model=JobOut, responses=documented(404))
async def get_job(
    request: Request, parts: Parts, caller: Caller, job_id: str, prefer: Prefer = None
) -> Response:
    """Tell what is known of a job, at once or when it is finished."""
    wait = preferred_wait(request)
    if wait:
        job = await parts.watch.until_finished(caller.owner, job_id, wait)
    else:
        job = await asyncio.to_thread(parts.jobs.get, caller.owner, job_id)
    return job_answer(await describe_job(parts, job), 200, wait_applied(wait))


@router.post("/{job_id}/dismiss", responses=documented(404, 409))
async def dismiss_job(parts: Parts, caller: Caller, job_id: str) -> JobOut:
    """End a waiting or running job; one that is dismissed already stays so."""
    job = await asyncio.to_thread(parts.jobs.dismiss, caller.owner, job_id)
    await asyncio.to_thread(parts.queue.cancel_soon, job_id)
    return await describe_job(parts, job)


@router.delete("/{job_id}", status_code=204, responses=documented(404, 409))
def delete_job(parts: Parts, caller: Caller, job_id: str) -> Response:
    """Remove a finished job and its results."""
    parts.jobs.remove(caller.owner, job_id)
    parts.files.remove_result(job_id)
    parts.queue.forget_soon(job_id)
    return Response(status_code=204)
