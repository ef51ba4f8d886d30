"""`/v1/jobs`: ordering, listing, waiting, dismissing, deleting, and orders that are refused."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Any

import httpx
import pytest

from recon.caution import CAUTION
from recon.settings import Settings
from service.queue.attempt import JobRunner
from service.services import Services

from .conftest import MEDIA_TYPE, Caller, MakeScan

Order = Callable[..., dict[str, Any]]

FIELDS = {
    "id", "kind", "label", "scan", "state", "stage", "progress", "attempts", "priority", "created_at", "started_at",
    "finished_at", "queue_position", "estimated_seconds_left", "settings", "error", "caution",
}  # fmt: skip


def test_order_is_accepted(client: Caller, scan: dict[str, Any]) -> None:
    body = {
        "kind": "reconstruction",
        "scan": scan["id"],
        "mask": None,
        "settings": {"tv_strength": 0.2},
        "label": "a",
    }
    answer = client.post("/v1/jobs", json=body)
    job = answer.json()
    assert answer.status_code == 202
    assert answer.headers["location"] == f"/v1/jobs/{job['id']}"
    assert int(answer.headers["retry-after"]) >= 1
    assert set(job) == FIELDS
    assert job["state"] == "accepted"
    assert job["queue_position"] == 1
    assert job["settings"] == Settings(tv_strength=0.2).model_dump(mode="json")
    assert job["caution"] == CAUTION
    assert client.get(answer.headers["location"]).json() == job


def test_job_is_carried_out(client: Caller, finished: dict[str, Any]) -> None:
    job = client.get(f"/v1/jobs/{finished['id']}").json()
    assert job["state"] == "successful"
    assert job["progress"] == 1
    assert job["attempts"] == 1
    assert job["error"] is None
    assert job["queue_position"] is None
    assert job["created_at"] <= job["started_at"] <= job["finished_at"]


def test_queue_has_the_workflow_of_every_job(parts: Services, order: Order) -> None:
    job = order()
    # Private on purpose: nobody else asks the engine what it holds.
    (workflow,) = parts.queue._client.list_workflows(workflow_ids=[job["id"]])
    assert workflow.status == "ENQUEUED"
    assert workflow.queue_name == "jobs"


def test_urgent_jobs_go_first(client: Caller, order: Order) -> None:
    first, second, urgent = order(), order(), order(priority="urgent")
    positions = {job["id"]: job["queue_position"] for job in client.get("/v1/jobs").json()["items"]}
    assert positions == {urgent["id"]: 1, first["id"]: 2, second["id"]: 3}


def test_time_left_is_told_once_it_can_be_known(
    client: Caller, parts: Services, order: Order, finished: dict[str, Any]
) -> None:
    waiting = order()
    assert client.get(f"/v1/jobs/{waiting['id']}").json()["estimated_seconds_left"] is None, "no worker lives"
    parts.workers.beat("test-0")
    job = client.get(f"/v1/jobs/{finished['id']}").json()
    took = _seconds(job["started_at"], job["finished_at"])
    left = client.get(f"/v1/jobs/{waiting['id']}").json()["estimated_seconds_left"]
    assert left == pytest.approx(took, abs=0.15)
    behind = order()
    left = client.get(f"/v1/jobs/{behind['id']}").json()["estimated_seconds_left"]
    assert left == pytest.approx(2 * took, abs=0.2)
    strange = order(settings={"method": "tikhonov"})
    assert client.get(f"/v1/jobs/{strange['id']}").json()["estimated_seconds_left"] is None, (
        "never done before"
    )


def _seconds(start: str, end: str) -> float:
    from datetime import datetime

    return (datetime.fromisoformat(end) - datetime.fromisoformat(start)).total_seconds()


def test_list_filters(client: Caller, order: Order) -> None:
    one, two = order(label="one"), order(label="two")
    client.post(f"/v1/jobs/{one['id']}/dismiss")
    assert [job["id"] for job in client.get("/v1/jobs").json()["items"]] == [two["id"], one["id"]]
    assert [job["id"] for job in client.get("/v1/jobs?state=dismissed").json()["items"]] == [one["id"]]
    assert [job["id"] for job in client.get("/v1/jobs?label=two").json()["items"]] == [two["id"]]
    page = client.get("/v1/jobs?limit=1").json()
    assert [job["id"] for job in client.get(f"/v1/jobs?cursor={page['next']}").json()["items"]] == [one["id"]]
    assert client.get("/v1/jobs?state=lost").status_code == 422


def test_wait_answers_when_the_job_is_done(client: Caller, order: Order, runner: JobRunner) -> None:
    job = order()
    thread = threading.Thread(target=runner.run, args=(job["id"],))
    thread.start()
    answer = client.get(f"/v1/jobs/{job['id']}", headers={"Prefer": "wait=30"})
    thread.join()
    assert answer.json()["state"] == "successful"
    assert answer.headers["preference-applied"] == "wait=30"


def test_wait_ends_in_time(client: Caller, scan: dict[str, Any]) -> None:
    began = time.monotonic()
    answer = client.post(
        "/v1/jobs",
        json={"kind": "reconstruction", "scan": scan["id"]},
        headers={"Prefer": "respond-async, wait=1"},
    )
    assert 0.9 <= time.monotonic() - began < 5
    assert answer.status_code == 202
    assert answer.json()["state"] == "accepted"
    assert "retry-after" in answer.headers


def test_order_with_wait_answers_with_the_finished_job(
    client: Caller, parts: Services, scan: dict[str, Any]
) -> None:
    def dismiss_when_there() -> None:
        while not (found := client.get("/v1/jobs").json()["items"]):
            time.sleep(0.02)
        client.post(f"/v1/jobs/{found[0]['id']}/dismiss")

    thread = threading.Thread(target=dismiss_when_there)
    thread.start()
    body = {"kind": "reconstruction", "scan": scan["id"]}
    answer = client.post("/v1/jobs", json=body, headers={"Prefer": "wait=30"})
    thread.join()
    assert answer.status_code == 200
    assert answer.json()["state"] == "dismissed"
    assert answer.headers["location"] == f"/v1/jobs/{answer.json()['id']}"
    assert answer.headers["preference-applied"] == "wait=30"
    assert "retry-after" not in answer.headers


def test_dismissed_job_stays_so(client: Caller, order: Order, runner: JobRunner) -> None:
    job = order()
    answer = client.post(f"/v1/jobs/{job['id']}/dismiss")
    assert answer.status_code == 200
    assert answer.json()["state"] == "dismissed"
    assert client.post(f"/v1/jobs/{job['id']}/dismiss").json() == answer.json()
    runner.run(job["id"])
    assert client.get(f"/v1/jobs/{job['id']}").json()["attempts"] == 0
    result = client.get(f"/v1/jobs/{job['id']}/report")
    assert result.status_code == 409
    assert "dismissed" in result.json()["detail"]


def test_finished_job_cannot_be_dismissed(client: Caller, finished: dict[str, Any]) -> None:
    answer = client.post(f"/v1/jobs/{finished['id']}/dismiss")
    assert answer.status_code == 409
    assert "successful" in answer.json()["detail"]


def test_deleted_job_is_gone_with_its_results(
    client: Caller, parts: Services, finished: dict[str, Any]
) -> None:
    assert parts.files.result(finished["id"]).is_dir()
    assert client.delete(f"/v1/jobs/{finished['id']}").status_code == 204
    assert client.get(f"/v1/jobs/{finished['id']}").status_code == 404
    assert not parts.files.result(finished["id"]).exists()
    assert parts.queue._client.list_workflows(workflow_ids=[finished["id"]]) == []


def test_unfinished_job_cannot_be_deleted(client: Caller, order: Order) -> None:
    answer = client.delete(f"/v1/jobs/{order()['id']}")
    assert answer.status_code == 409


@pytest.mark.parametrize(
    ("changes", "pointer", "words"),
    [
        ({"kind": "mask-comparison"}, "/kind", "reconstruction"),
        ({"kind": None}, "/kind", "reconstruction"),
        ({"mask": "01m8rw7d1twy8j85fn2jqar3sy"}, "/mask", "scan file"),
        ({"scan": "unknown"}, "/scan", "scan"),
        ({"scan": 7}, "/scan", "string"),
        ({"settings": {"tolerance": 2}}, "/settings/tolerance", "less than 1"),
        ({"settings": {"replicas": 5}}, "/settings/replicas", "unknown setting"),
        ({"settings": {"a~/b": 1}}, "/settings/a~0~1b", "unknown setting"),
        ({"settings": {"method": "magic"}}, "/settings/method", "zero-filled"),
        ({"settings": []}, "/settings", "object"),
        ({"settings": {"coil_compression": {"coils": 9}}}, "/settings/coil_compression", "9 coils"),
        ({"settings": {"coil_maps": "supplied"}}, "/settings/coil_maps", "/sensitivity"),
        ({"priority": "asap"}, "/priority", "urgent"),
        ({"label": "a\x1b[2Jb"}, "/label", "control characters"),
        ({"label": ""}, "/label", "at least 1"),
        ({"comparison": {}}, "/comparison", "unknown"),
    ],
)  # fmt: skip
def test_order_that_cannot_work_is_refused(
    shared: Caller, shared_scan: dict[str, Any], changes: dict[str, Any], pointer: str, words: str
) -> None:
    answer = shared.post("/v1/jobs", json={"kind": "reconstruction", "scan": shared_scan["id"], **changes})
    problem = answer.json()
    assert answer.status_code == 422, problem
    assert answer.headers["content-type"] == "application/problem+json"
    assert pointer in [error["pointer"] for error in problem["errors"]]
    assert words in problem["detail"]
    assert shared.get("/v1/jobs").json()["items"] == []


def test_every_mistake_has_its_pointer(shared: Caller, shared_scan: dict[str, Any]) -> None:
    settings = {"tolerance": -1, "max_iterations": 0, "colour": "red"}
    answer = shared.post(
        "/v1/jobs", json={"kind": "reconstruction", "scan": shared_scan["id"], "settings": settings}
    )
    pointers = {error["pointer"] for error in answer.json()["errors"]}
    assert pointers == {"/settings/tolerance", "/settings/max_iterations", "/settings/colour"}


def test_settings_that_need_maps_are_refused_without_calibration(client: Caller, make_scan: MakeScan) -> None:
    import numpy as np

    mask = np.zeros(32, bool)
    mask[::4] = True
    content = make_scan(5, mask=mask)
    scan = client.post("/v1/scans", content=content, headers={"Content-Type": MEDIA_TYPE}).json()
    order = {"kind": "reconstruction", "scan": scan["id"]}
    answer = client.post("/v1/jobs", json=order)
    assert answer.status_code == 422
    assert answer.json()["type"] == "urn:fallow:problem:calibration-missing"
    maps_free = {"method": "zero-filled", "combination": "root-sum-of-squares"}
    assert client.post("/v1/jobs", json={**order, "settings": maps_free}).status_code == 202


@pytest.mark.parametrize(
    ("content", "headers", "status"),
    [
        (b"", {"Content-Type": "application/json"}, 400),
        (b"{", {"Content-Type": "application/json"}, 400),
        (b"[]", {"Content-Type": "application/json"}, 422),
        (b"{}", {"Content-Type": "text/plain"}, 415),
        (b"{}", {}, 415),
        (b" " * (1 << 21), {"Content-Type": "application/json"}, 413),
    ],
)
def test_body_that_is_no_order_is_refused(
    shared: Caller, content: bytes, headers: dict[str, str], status: int
) -> None:
    answer = shared.post("/v1/jobs", content=content, headers=headers)
    assert answer.status_code == status == answer.json()["status"]


@pytest.mark.parametrize("tail", ["", "/report", "/image.h5", "/pictures", "/pictures/image.png", "/events"])
def test_unknown_job_is_not_found(shared: Caller, tail: str) -> None:
    answer = shared.get(f"/v1/jobs/unknown{tail}")
    assert answer.status_code == 404
    assert "unknown" in answer.json()["detail"]


def test_jobs_are_reached_while_others_wait(client: Caller, order: Order) -> None:
    """Waiting answers and event streams hold up nobody: 20 of them, and a status in between."""
    job = order()
    path = f"/v1/jobs/{job['id']}"
    with httpx.Client(base_url=client.base_url, headers=client.headers, timeout=30) as other:
        threads = [
            threading.Thread(target=other.get, args=(path,), kwargs={"headers": {"Prefer": "wait=3"}})
            for _ in range(20)
        ]
        for thread in threads:
            thread.start()
        time.sleep(0.5)
        began = time.monotonic()
        assert client.get(path).status_code == 200
        assert time.monotonic() - began < 1
        client.post(f"{path}/dismiss")
        for thread in threads:
            thread.join()
        assert time.monotonic() - began < 2.5
