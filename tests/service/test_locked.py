"""Databases that another process holds: answers within seconds, reads that go on, and nothing lost."""

from __future__ import annotations

import sqlite3
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import httpx

from service.queue.orders import JobQueue
from service.services import Services

from .conftest import Caller


@contextmanager
def held(path: Path) -> Iterator[None]:
    """Hold the write lock of a database."""
    holder = sqlite3.connect(path, isolation_level=None, timeout=30)
    holder.execute("BEGIN IMMEDIATE")
    try:
        yield
    finally:
        holder.execute("ROLLBACK")
        holder.close()


def _queue(parts: Services) -> Path:
    return parts.settings.data / "queue.sqlite"


def _workflows(queue: JobQueue, job_id: str) -> list[Any]:
    found: list[Any] = queue._client.list_workflows(workflow_ids=[job_id])
    return found


def test_order_is_accepted_while_the_queue_is_locked(
    client: Caller, parts: Services, scan: dict[str, Any]
) -> None:
    with held(_queue(parts)):
        began = time.monotonic()
        answer = client.post("/v1/jobs", json={"kind": "reconstruction", "scan": scan["id"]})
        assert time.monotonic() - began < 6
        assert answer.status_code == 202, answer.text
        job = answer.json()
    parts.queue.sweep()
    (workflow,) = _workflows(parts.queue, job["id"])
    assert workflow.status == "ENQUEUED"


def test_dismissal_and_removal_while_the_queue_is_locked(
    client: Caller, parts: Services, scan: dict[str, Any]
) -> None:
    job = client.post("/v1/jobs", json={"kind": "reconstruction", "scan": scan["id"]}).json()
    with held(_queue(parts)):
        began = time.monotonic()
        answer = client.post(f"/v1/jobs/{job['id']}/dismiss")
        assert (answer.status_code, answer.json()["state"]) == (200, "dismissed")
        assert client.delete(f"/v1/jobs/{job['id']}").status_code == 204
        assert time.monotonic() - began < 12
    assert client.get(f"/v1/jobs/{job['id']}").status_code == 404


def test_health_tells_of_a_locked_queue(client: Caller, parts: Services) -> None:
    with held(_queue(parts)):
        answer = client.get("/health/ready")
    assert answer.status_code == 503
    assert [error["parameter"] for error in answer.json()["errors"]] == ["queue"]
    assert "locked" in answer.json()["detail"]
    assert client.get("/health/ready").status_code == 200


def test_calls_that_wait_to_write_do_not_hold_up_those_that_read(
    client: Caller, parts: Services, scan: dict[str, Any]
) -> None:
    body = {"kind": "reconstruction", "scan": scan["id"]}
    answers: list[httpx.Response] = []
    writers = [
        threading.Thread(target=lambda: answers.append(client.post("/v1/jobs", json=body))) for _ in range(20)
    ]
    with held(Path(str(parts.database.engine.url.database))):
        began = time.monotonic()
        for writer in writers:
            writer.start()
        time.sleep(0.5)
        asked = time.monotonic()
        assert client.get("/v1/jobs/unknown").status_code == 404
        assert client.get(f"/v1/scans/{scan['id']}").status_code == 200
        assert time.monotonic() - asked < 2
        for writer in writers:
            writer.join()
        assert time.monotonic() - began < 15
    assert {answer.status_code for answer in answers} == {503}
    assert all(int(answer.headers["retry-after"]) >= 1 for answer in answers)
    assert "locked" in answers[0].json()["detail"]
