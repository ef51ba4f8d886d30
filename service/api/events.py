"""`/v1/jobs/{id}/events`: state, stage and progress as server-sent events, until the job is finished."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from typing import Final

from fastapi import APIRouter, Request, Response
from fastapi.responses import StreamingResponse
from pydantic import BaseModel

from service.api.answers import describe_job
from service.api.routing import Answers, Caller, Parts, Route, documented
from service.errors import NotFound
from service.schemas import JobEvent
from service.services import Services

router = APIRouter(prefix="/v1/jobs/{job_id}", tags=["jobs"], route_class=Route)

_MEDIA_TYPE: Final = "text/event-stream"
#: Without news a comment keeps proxies from closing the connection.
_SILENCE_SECONDS: Final = 15.0
_DESCRIPTION: Final = (
    "Events `progress` (state, stage, progress, queue_position, estimated_seconds_left), at first and whenever one of "
    "them changes; at last one `finished` with the whole job, and the stream ends. After a break connect again: the "
    "first event tells how things are."
)
_ANSWERS: Final[Answers] = {
    200: {"description": _DESCRIPTION, "content": {_MEDIA_TYPE: {"schema": {"type": "string"}}}}
}


@router.get("/events", response_class=StreamingResponse, responses=_ANSWERS | documented(404))
async def follow_job(request: Request, parts: Parts, caller: Caller, job_id: str) -> Response:
    """Follow a job."""
    await asyncio.to_thread(parts.jobs.get, caller.owner, job_id)
    headers = {"Cache-Control": "no-store", "X-Accel-Buffering": "no"}
    if getattr(request.state, "is_head", False):
        return Response(media_type=_MEDIA_TYPE, headers=headers)
    return StreamingResponse(_events(parts, caller.owner, job_id), media_type=_MEDIA_TYPE, headers=headers)


async def _events(parts: Services, owner: str, job_id: str) -> AsyncIterator[str]:
    told: str | None = None
    async with parts.watch.follow(job_id) as follower:
        while True:
            try:
                job = await asyncio.to_thread(parts.jobs.get, owner, job_id)
            except NotFound:
                # Removed meanwhile: there is nothing left to tell.
                return
            described = await describe_job(parts, job)
            if job.is_finished:
                yield _event("finished", described)
                return
            event = _event("progress", JobEvent(**described.model_dump(include=set(JobEvent.model_fields))))
            if event != told:
                yield event
                told = event
            if parts.watch.is_closed:
                return
            if not await follower.next(_SILENCE_SECONDS):
                yield ": still here\n\n"


def _event(name: str, content: BaseModel) -> str:
    return f"event: {name}\ndata: {content.model_dump_json()}\n\n"
