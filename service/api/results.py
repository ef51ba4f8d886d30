"""`/v1/jobs/{id}/...`: what a successful job has computed."""

from __future__ import annotations

import asyncio

from fastapi import APIRouter, Request, Response
from fastapi.responses import FileResponse

from service.api.answers import PARTIAL, file_answer, result_facts, result_file
from service.api.routing import Answers, Caller, Parts, Route, documented
from service.compute import IMAGE, PICTURES, REPORT
from service.errors import NotFound
from service.schemas import Picture, PictureList
from service.services import Services
from service.uploads import SCAN_MEDIA_TYPE

router = APIRouter(prefix="/v1/jobs/{job_id}", tags=["results"], route_class=Route)

_PROBLEMS = documented(404, 409, 416)


def _content(media_type: str, what: str) -> Answers:
    return {200: {"content": {media_type: {}}, "description": what}} | PARTIAL | _PROBLEMS


@router.get(
    "/image.h5",
    response_class=FileResponse,
    responses=_content(SCAN_MEDIA_TYPE, "Image, residual image and report"),
)
async def get_image(request: Request, parts: Parts, caller: Caller, job_id: str) -> Response:
    """Download the result file (layout `fallow-image`)."""
    return await _send(request, parts, caller.owner, job_id, IMAGE, SCAN_MEDIA_TYPE, filename=f"{job_id}.h5")


@router.get("/report", response_class=FileResponse, responses=_content("application/json", "The report"))
async def get_report(request: Request, parts: Parts, caller: Caller, job_id: str) -> Response:
    """Read the data-consistency report."""
    return await _send(request, parts, caller.owner, job_id, REPORT, "application/json")


@router.get("/pictures", responses=documented(404, 409))
def list_pictures(parts: Parts, caller: Caller, job_id: str) -> PictureList:
    """List the pictures of a result."""
    job = parts.jobs.get(caller.owner, job_id)
    facts = result_facts(parts, job)
    items = [
        Picture(name=name, shows=shows, href=f"/v1/jobs/{job_id}/pictures/{name}.png", **facts[f"{name}.png"])
        for name, shows in PICTURES.items()
        if f"{name}.png" in facts
    ]
    return PictureList(items=items)


@router.get("/pictures/{name}.png", response_class=FileResponse, responses=_content("image/png", "A picture"))
async def get_picture(request: Request, parts: Parts, caller: Caller, job_id: str, name: str) -> Response:
    """Show one picture; the caution is written into it."""
    if name not in PICTURES:
        await asyncio.to_thread(parts.jobs.get, caller.owner, job_id)
        raise NotFound(f"there is no picture {name!r}; there are {', '.join(PICTURES)}")
    return await _send(request, parts, caller.owner, job_id, f"{name}.png", "image/png")


async def _send(
    request: Request,
    parts: Services,
    owner: str,
    job_id: str,
    name: str,
    media_type: str,
    *,
    filename: str | None = None,
) -> Response:
    job = await asyncio.to_thread(parts.jobs.get, owner, job_id)
    path, facts = await asyncio.to_thread(result_file, parts, job, name)
    return file_answer(
        request, path, sha256=facts["sha256"], size=facts["bytes"], media_type=media_type, filename=filename
    )
