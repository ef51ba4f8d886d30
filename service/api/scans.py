"""`/v1/scans`: scan files come in here."""

from __future__ import annotations

import asyncio
import hashlib
from dataclasses import replace
from typing import Annotated

from fastapi import APIRouter, Query, Request, Response
from fastapi.responses import FileResponse, JSONResponse

from service.api.answers import PARTIAL, file_answer
from service.api.routing import (
    Answers,
    Caller,
    ListFilter,
    Parts,
    Route,
    check_state,
    checked_key,
    documented,
)
from service.errors import NotFound
from service.ids import new_id
from service.schemas import Label, ScanOut, ScanPage
from service.services import Services
from service.store.idempotency import check_same_request
from service.store.scans import ScanRecord
from service.store.tables import now
from service.uploads import SCAN_MEDIA_TYPE, Upload, check_announcement, receive

router = APIRouter(prefix="/v1/scans", tags=["scans"], route_class=Route)

_BODY = {
    "requestBody": {
        "required": True,
        "content": {SCAN_MEDIA_TYPE: {"schema": {"type": "string", "format": "binary"}}},
    },
    "parameters": [
        {
            "name": "Repr-Digest",
            "in": "header",
            "required": False,
            "schema": {"type": "string"},
            "description": "digest of the body (RFC 9530), sha-256 or sha-512; checked when sent",
        },
        {
            "name": "Idempotency-Key",
            "in": "header",
            "required": False,
            "schema": {"type": "string", "maxLength": 255},
            "description": "the same request under the same key has one effect and one answer, for 7 days",
        },
    ],
}


_SAME: Answers = {
    200: {
        "model": ScanOut,
        "description": "The same content was sent before: the same scan, under the label sent last if there is one",
    }
}


@router.post(
    "",
    status_code=201,
    response_model=ScanOut,
    openapi_extra=_BODY,
    responses=_SAME | documented(408, 409, 413, 415, 422),
)
async def send_scan(
    request: Request,
    parts: Parts,
    caller: Caller,
    label: Annotated[
        Label | None,
        Query(description="a name of the caller's own; sent again with the content, the newest holds"),
    ] = None,
) -> Response:
    """Send a scan file: it is checked, and inspected in a process of its own, before it is accepted."""
    settings, key = parts.settings, checked_key(request)
    check_announcement(
        request.headers.get("content-type"), request.headers.get("content-length"), settings.upload_limit
    )
    before = None if key is None else await asyncio.to_thread(parts.idempotency.claim, caller.owner, key)
    is_settled = before is not None
    try:
        upload = await receive(
            request.stream(),
            parts.files.incoming,
            limit=settings.upload_limit,
            stall_seconds=settings.stall_seconds,
            repr_digest=request.headers.get("repr-digest"),
        )
        try:
            fingerprint = hashlib.sha256(f"scan {upload.sha256} {label}".encode()).hexdigest()
            if key is not None and before is not None:
                check_same_request(key, before[0], fingerprint)
                return JSONResponse(before[1]["body"], before[1]["status"], before[1]["headers"])
            status, scan = await _accept(parts, caller.owner, upload, label)
        finally:
            upload.remove()
        headers = {"Location": f"/v1/scans/{scan.id}"}
        body = ScanOut.of(scan).model_dump(mode="json")
        if key is not None:
            answer = {"status": status, "headers": headers, "body": body}
            await asyncio.to_thread(parts.idempotency.settle, caller.owner, key, fingerprint, answer)
            is_settled = True
        return JSONResponse(body, status, headers)
    finally:
        if key is not None and not is_settled:
            await asyncio.to_thread(parts.idempotency.release, caller.owner, key)


async def _accept(parts: Services, owner: str, upload: Upload, label: str | None) -> tuple[int, ScanRecord]:
    """Examine an upload and keep it; content that the owner sent before is the scan that it became then."""
    there = await asyncio.to_thread(parts.scans.by_content, owner, upload.sha256)
    if there is not None:
        return 200, await asyncio.to_thread(parts.scans.add, replace(there, label=label))
    found = await parts.gate.examine(upload.path, upload.preview)
    scan = ScanRecord(
        id=new_id(),
        owner=owner,
        label=label,
        title=found["title"],
        sha256=upload.sha256,
        bytes=upload.bytes,
        state="ready",
        facts=found["facts"],
        created_at=now(),
    )
    return await asyncio.to_thread(_keep, parts, scan, upload)


def _keep(parts: Services, scan: ScanRecord, upload: Upload) -> tuple[int, ScanRecord]:
    # The file first: a row without its file would be a lie, a file without its row is removed at the next start.
    parts.files.accept_scan(scan.id, upload.path, upload.preview)
    try:
        kept = parts.scans.add(scan)
    except BaseException:
        parts.files.remove_scan(scan.id)
        raise
    if kept.id != scan.id:
        parts.files.remove_scan(scan.id)
        return 200, kept
    return 201, kept


@router.get("", responses=documented(422))
def list_scans(parts: Parts, caller: Caller, wanted: ListFilter) -> ScanPage:
    """List scans, newest first."""
    check_state(wanted.state, ("ready",))
    found, cursor = parts.scans.page(caller.owner, wanted)
    return ScanPage(items=[ScanOut.of(scan) for scan in found], next=cursor)


@router.get("/{scan_id}", responses=documented(404))
def get_scan(parts: Parts, caller: Caller, scan_id: str) -> ScanOut:
    """Tell what is known of a scan: axes, sampling, findings."""
    return ScanOut.of(parts.scans.get(caller.owner, scan_id))


@router.delete("/{scan_id}", status_code=204, responses=documented(404, 409))
def delete_scan(parts: Parts, caller: Caller, scan_id: str) -> Response:
    """Remove a scan that no unfinished job needs; results computed from it stay."""
    parts.scans.remove(caller.owner, scan_id)
    parts.files.remove_scan(scan_id)
    return Response(status_code=204)


_PNG: Answers = {200: {"content": {"image/png": {}}, "description": "A picture"}, **PARTIAL}


@router.get("/{scan_id}/preview.png", response_class=FileResponse, responses=_PNG | documented(404, 416))
def get_preview(request: Request, parts: Parts, caller: Caller, scan_id: str) -> Response:
    """Show a quick look: the middle plane, zero-filled, root-sum-of-squares."""
    scan = parts.scans.get(caller.owner, scan_id)
    path = parts.files.preview(scan.id)
    if not path.is_file():
        raise NotFound(f"the quick look of scan {scan_id} is missing on the disk of the service")
    # Small, and written once: its digest is soon found.
    content = path.read_bytes()
    sha256 = hashlib.sha256(content).hexdigest()
    return file_answer(request, path, sha256=sha256, size=len(content), media_type="image/png")
